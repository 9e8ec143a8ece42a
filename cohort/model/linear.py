"""Small dense linear algebra of the orbit computation, compiled, one system a subject."""

from __future__ import annotations

import numpy as np

from cohort.compiled import jit


@jit
def solve_each(matrices, rights, out):  # type: ignore[no-untyped-def]
    """Solve matrices[s] out[s] = rights[s] by elimination with row exchanges; NaN where singular.

    matrices: float64[n, m, m]; rights, out: float64[n, m].
    """
    for s in range(matrices.shape[0]):
        a = matrices[s].copy()
        b = rights[s].copy()
        if not _eliminate(a, b):
            out[s] = np.nan
            continue
        m = len(b)
        for i in range(m - 1, -1, -1):
            total = b[i]
            for j in range(i + 1, m):
                total -= a[i, j] * out[s, j]
            out[s, i] = total / a[i, i]


@jit
def _eliminate(a, b):  # type: ignore[no-untyped-def]
    m = len(b)
    for k in range(m):
        pivot = k
        for i in range(k + 1, m):
            if abs(a[i, k]) > abs(a[pivot, k]):
                pivot = i
        if not abs(a[pivot, k]) > 0.0:
            return False
        if pivot != k:
            for j in range(m):
                a[k, j], a[pivot, j] = a[pivot, j], a[k, j]
            b[k], b[pivot] = b[pivot], b[k]
        for i in range(k + 1, m):
            factor = a[i, k] / a[k, k]
            if factor != 0.0:
                for j in range(k, m):
                    a[i, j] -= factor * a[k, j]
                b[i] -= factor * b[k]
    return True


@jit
def leading_direction(matrix, value, lead, out):  # type: ignore[no-untyped-def]
    """Write the real part of the eigenvector of `value`, scaled to 1 in component `lead`; one inverse iteration pair."""
    n = matrix.shape[0]
    vector = np.ones(n, dtype=np.complex128)
    for _ in range(3):
        a = np.zeros((n, n), dtype=np.complex128)
        for i in range(n):
            for j in range(n):
                a[i, j] = matrix[i, j]
            a[i, i] -= value * (1.0 + 1e-10) + 1e-14
        for k in range(n):
            pivot = k
            for i in range(k + 1, n):
                if abs(a[i, k].real) + abs(a[i, k].imag) > abs(a[pivot, k].real) + abs(a[pivot, k].imag):
                    pivot = i
            if pivot != k:
                for j in range(n):
                    a[k, j], a[pivot, j] = a[pivot, j], a[k, j]
                vector[k], vector[pivot] = vector[pivot], vector[k]
            for i in range(k + 1, n):
                factor = a[i, k] / a[k, k]
                for j in range(k, n):
                    a[i, j] -= factor * a[k, j]
                vector[i] -= factor * vector[k]
        for i in range(n - 1, -1, -1):
            for j in range(i + 1, n):
                vector[i] -= a[i, j] * vector[j]
            vector[i] /= a[i, i]
        size = 0.0
        for i in range(n):
            size = max(size, abs(vector[i].real) + abs(vector[i].imag))
        for i in range(n):
            vector[i] /= size
    pivot_value = vector[lead]
    for i in range(n):
        out[i] = (vector[i] / pivot_value).real


@jit
def leading_directions(matrices, values, lead, out):  # type: ignore[no-untyped-def]
    """`leading_direction` of every subject: float64[n, m, m], complex128[n] -> float64[n, m]."""
    for s in range(matrices.shape[0]):
        leading_direction(matrices[s], values[s], lead, out[s])
