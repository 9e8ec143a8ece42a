"""Courses: what the integrator leaves behind, as polynomials in time.

Each step's polynomial is the solution itself to full order, so values, extrema, crossings and integrals come from it
directly and need no grid.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from cohort.compiled import jit

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Courses:
    """Recorded courses of n subjects of one arm.

    Step i < n_steps[s] of subject s covers start[s, i] .. start[s, i] + step_size[s, i] (min); there column c is the
    polynomial with coefficients coefficients[s, i, c, :] in rising powers of x = (t - start) / step_size, 0 <= x <= 1.
    summaries: float64[n, steps, columns, SUMMARY] (`cohort.model.taylor`). status int64[n]: -1 or an index into
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

        def padded(array: Array) -> Array:
            out = np.full((array.shape[0], capacity, *array.shape[2:]), np.nan)
            kept = min(capacity, array.shape[1])
            out[:, :kept] = array[:, :kept]
            return out

        return Courses(
            self.columns, padded(self.start), padded(self.step_size), padded(self.coefficients), padded(self.summaries),
            self.n_steps.copy(), self.status.copy(), self.final.copy(),
        )  # fmt: skip

    def sample(self, times_min: Array) -> Array:
        """Values at rising `times_min`: float64[n, columns, times], NaN outside what was recorded."""
        out = np.full((len(self.n_steps), len(self.columns), len(times_min)), np.nan)
        _sample(self.start, self.step_size, self.coefficients, self.n_steps, np.asarray(times_min, float), out)
        return out


@jit
def _sample(start, step_size, coefficients, n_steps, times, out):  # type: ignore[no-untyped-def]
    n, columns, wanted = out.shape
    highest = coefficients.shape[3] - 1
    for s in range(n):
        i = 0
        for w in range(wanted):
            t = times[w]
            while i + 1 < n_steps[s] and start[s, i + 1] <= t:
                i += 1
            if n_steps[s] == 0 or t < start[s, 0] or t > start[s, i] + step_size[s, i]:
                continue
            x = (t - start[s, i]) / step_size[s, i]
            for c in range(columns):
                value = coefficients[s, i, c, highest]
                for k in range(highest - 1, -1, -1):
                    value = value * x + coefficients[s, i, c, k]
                out[s, c, w] = value
