"""Courses: what the integrator leaves behind, as polynomials in time.

Each step's polynomial is the solution itself to full order, so values, extrema, crossings and integrals come from it
directly and need no grid.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from cohort.compiled import LANES, horner, jit
from cohort.model.taylor import SUMMARY

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Courses:
    """Recorded courses of n subjects of one arm.

    Step i < n_steps[s] of subject s covers start[s, i] .. start[s, i] + step_size[s, i] (min); what is kept of it is
    record[s, i]: of each column its `orders` coefficients, then of each column its SUMMARY (`cohort.model.taylor`), then
    padding. status int64[n]: -1 or an index into FAILURES; final float64[n, states].
    """

    columns: tuple[str, ...]
    orders: int
    start: Array
    step_size: Array
    record: Array
    n_steps: NDArray[np.int64]
    status: NDArray[np.int64]
    final: Array

    @property
    def coefficients(self) -> Array:
        """float64[n, columns, steps, orders], a view: column c in step i of subject s is the polynomial with coefficients
        [s, c, i] in rising powers of x = (t - start) / step_size, 0 <= x <= 1."""
        return self._part(0, self.orders)

    @property
    def summaries(self) -> Array:
        """float64[n, columns, steps, SUMMARY], a view; meaningless where the stepper makes none."""
        return self._part(len(self.columns) * self.orders, len(SUMMARY))

    def _part(self, first: int, size: int) -> Array:
        n, steps, width = self.record.shape
        columns = len(self.columns) if first + len(self.columns) * size <= width else 0
        part = self.record[:, :, first : first + columns * size].reshape(n, steps, columns, size)
        return part.transpose(0, 2, 1, 3)

    def take(self, rows: NDArray[np.bool_]) -> Courses:
        """Return the chosen subjects' courses."""
        return Courses(
            self.columns, self.orders, self.start[rows], self.step_size[rows], self.record[rows], self.n_steps[rows],
            self.status[rows], self.final[rows],
        )  # fmt: skip

    def copied(self, capacity: int) -> Courses:
        """Return the same courses in memory of their own, with room for `capacity` steps."""

        def padded(array: Array) -> Array:
            out = np.full((array.shape[0], capacity, *array.shape[2:]), np.nan)
            kept = min(capacity, array.shape[1])
            out[:, :kept] = array[:, :kept]
            return out

        return Courses(
            self.columns, self.orders, padded(self.start), padded(self.step_size), padded(self.record),
            self.n_steps.copy(), self.status.copy(), self.final.copy(),
        )  # fmt: skip

    def sample(self, times_min: Array, out: Array | None = None) -> Array:
        """Values at rising `times_min`: float64[n, columns, times], NaN outside what was recorded.

        `out`, where given, is filled and returned instead of a new array; places outside keep what they held. Raises
        ValueError where it has another shape.
        """
        shape = (len(self.n_steps), len(self.columns), len(times_min))
        if out is None:
            out = np.full(shape, np.nan)
        elif out.shape != shape:
            raise ValueError(f"out has shape {out.shape}, not {shape}")
        _sample(self.start, self.step_size, self.record, self.orders, self.n_steps, np.asarray(times_min, float), out)
        return out


@jit
def _sample(start, step_size, record, orders, n_steps, times, out):  # type: ignore[no-untyped-def]
    n, columns, wanted = out.shape
    steps, width = record.shape[1:]
    kept = record.reshape(-1)
    room = wanted + 2 * LANES  # the last vector of a step may reach past its end
    padded, values = np.zeros(room), np.empty(2 * room)
    padded[:wanted] = times
    for s in range(n):
        for c in range(0, columns, 2):
            d = min(c + 1, columns - 1)
            begin = w = np.searchsorted(times, start[s, 0]) if n_steps[s] > 0 else 0
            count = 0
            for i in range(n_steps[s]):
                last = i + 1 == n_steps[s]
                end = start[s, i] + step_size[s, i] if last else start[s, i + 1]
                first = w
                w = min(first + count, wanted)  # as many as in the step before, or nearly
                while w > first and not (times[w - 1] < end or (last and times[w - 1] == end)):
                    w -= 1
                while w < wanted and (times[w] < end or (last and times[w] == end)):
                    w += 1
                count = w - first
                at = (s * steps + i) * width
                for q in range(first, w, 2 * LANES):
                    horner(
                        kept, (at + c * orders, at + d * orders), orders, padded, (start[s, i], 1.0 / step_size[s, i]),
                        values, (q, room),
                    )  # fmt: skip
            out[s, c, begin:w] = values[begin:w]
            out[s, d, begin:w] = values[room + begin : room + w]
