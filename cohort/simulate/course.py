"""Courses: what the integrator leaves behind, as polynomials in time.

Each step's polynomial is the solution itself to full order, so values, extrema, crossings and integrals come from it
directly and need no grid.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from cohort.compiled import fma, jit

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Courses:
    """Recorded courses of n subjects of one arm.

    Step i < n_steps[s] of subject s covers start[s, i] .. start[s, i] + step_size[s, i] (min); there column c is the
    polynomial with coefficients coefficients[s, c, i, :] in rising powers of x = (t - start) / step_size, 0 <= x <= 1.
    summaries: float64[n, columns, steps, SUMMARY] (`cohort.model.taylor`). status int64[n]: -1 or an index into
    FAILURES; final float64[n, states].
    """

    columns: tuple[str, ...]
    start: Array
    step_size: Array
    coefficients: Array
    summaries: Array
    n_steps: NDArray[np.int64]
    status: NDArray[np.int64]
    final: Array

    def take(self, rows: NDArray[np.bool_]) -> Courses:
        """Return the chosen subjects' courses."""
        return Courses(
            self.columns, self.start[rows], self.step_size[rows], self.coefficients[rows], self.summaries[rows],
            self.n_steps[rows], self.status[rows], self.final[rows],
        )  # fmt: skip

    def copied(self, capacity: int) -> Courses:
        """Return the same courses in memory of their own, with room for `capacity` steps."""

        def padded(array: Array, axis: int) -> Array:
            shape = (*array.shape[:axis], capacity, *array.shape[axis + 1 :])
            out = np.full(shape, np.nan)
            kept = (slice(None),) * axis + (slice(min(capacity, array.shape[axis])),)
            out[kept] = array[kept]
            return out

        return Courses(
            self.columns, padded(self.start, 1), padded(self.step_size, 1), padded(self.coefficients, 2),
            padded(self.summaries, 2),
            self.n_steps.copy(), self.status.copy(), self.final.copy(),
        )  # fmt: skip

    def sample(self, times_min: Array, out: Array | None = None) -> Array:
        """Values at rising `times_min`: float64[n, columns, times], NaN outside what was recorded.

        `out`, where given, is filled and returned instead of a new array; places outside keep what they held.
        """
        if out is None:
            out = np.full((len(self.n_steps), len(self.columns), len(times_min)), np.nan)
        _sample(self.start, self.step_size, self.coefficients, self.n_steps, np.asarray(times_min, float), out)
        return out


@jit
def _sample(start, step_size, coefficients, n_steps, times, out):  # type: ignore[no-untyped-def]
    n, columns, wanted = out.shape
    highest = coefficients.shape[3] - 1
    x = np.empty(wanted)
    for s in range(n):
        w = 0
        for i in range(n_steps[s]):
            last = i + 1 == n_steps[s]
            end = start[s, i] + step_size[s, i] if last else start[s, i + 1]
            while w < wanted and times[w] < start[s, i]:
                w += 1
            first, inverse = w, 1.0 / step_size[s, i]
            while w < wanted and (times[w] < end or (last and times[w] == end)):
                x[w] = (times[w] - start[s, i]) * inverse
                w += 1
            # four times of two columns together: eight sums that do not wait for each other
            for c in range(0, columns, 2):
                d = min(c + 1, columns - 1)
                a, b = coefficients[s, c, i], coefficients[s, d, i]
                q = first
                while q < w and w - first >= 4:
                    q = min(q, w - 4)
                    x0, x1, x2, x3 = x[q], x[q + 1], x[q + 2], x[q + 3]
                    y0 = y1 = y2 = y3 = a[highest]
                    z0 = z1 = z2 = z3 = b[highest]
                    for k in range(highest - 1, -1, -1):
                        y0, y1, y2, y3 = fma(y0, x0, a[k]), fma(y1, x1, a[k]), fma(y2, x2, a[k]), fma(y3, x3, a[k])
                        z0, z1, z2, z3 = fma(z0, x0, b[k]), fma(z1, x1, b[k]), fma(z2, x2, b[k]), fma(z3, x3, b[k])
                    out[s, c, q], out[s, c, q + 1], out[s, c, q + 2], out[s, c, q + 3] = y0, y1, y2, y3
                    out[s, d, q], out[s, d, q + 1], out[s, d, q + 2], out[s, d, q + 3] = z0, z1, z2, z3
                    q += 4
                for r in range(q, w):
                    y, z = a[highest], b[highest]
                    for k in range(highest - 1, -1, -1):
                        y, z = fma(y, x[r], a[k]), fma(z, x[r], b[k])
                    out[s, c, r], out[s, d, r] = y, z
