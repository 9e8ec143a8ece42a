"""Correlations between parameters: from Spearman's ranks to a latent normal factor, and what to say where none fits."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from cohort.population.functions import sine

Array = NDArray[np.float64]
Pairs = Sequence[tuple[tuple[str, str], float]]

_PSD = -1e-12


def latent(spearman: float) -> float:
    """The normal scores' correlation that gives this rank correlation: 2 sin(pi rho / 6), exact for the normal law."""
    return 2.0 * sine(math.pi * spearman / 6.0)


def latent_matrix(names: Sequence[str], pairs: Pairs) -> Array:
    """The latent correlation matrix of `names`, float64[d, d]; pairs not named are uncorrelated."""
    matrix = np.eye(len(names))
    for (first, second), rho in pairs:
        i, j = names.index(first), names.index(second)
        matrix[i, j] = matrix[j, i] = latent(rho)
    return matrix


def is_possible(matrix: Array) -> bool:
    """Whether a symmetric matrix is positive semidefinite, to rounding."""
    return bool(np.linalg.eigvalsh(matrix)[0] >= _PSD)


def nearest_correlation(matrix: Array) -> tuple[Array, float]:
    """The nearest correlation matrix in the Frobenius norm and the largest change it needs.

    Alternating projections with Dykstra's correction (Higham, IMA J Numer Anal 2002;22:329-343, from memory).
    """
    y, correction = matrix.copy(), np.zeros_like(matrix)
    for _ in range(2000):
        r = y - correction
        values, vectors = np.linalg.eigh(r)
        x = (vectors * np.maximum(values, 0.0)) @ vectors.T
        correction = x - r
        before = y
        y = x.copy()
        np.fill_diagonal(y, 1.0)
        if np.abs(y - before).max() < 1e-12:
            break
    return y, float(np.abs(y - matrix).max())


def latent_factor(names: Sequence[str], pairs: Pairs) -> Array:
    """The lower triangular factor of the latent correlation matrix, by plain elimination: float64[d, d].

    Raises ValueError where the matrix is not positive semidefinite.
    """
    matrix = latent_matrix(names, pairs)
    d = len(names)
    factor = np.zeros((d, d))
    for i in range(d):
        for j in range(i + 1):
            rest = matrix[i, j]
            for k in range(j):
                rest = rest - factor[i, k] * factor[j, k]
            if i == j:
                if rest < 1e3 * _PSD:
                    raise ValueError("these correlations cannot hold together")
                factor[i, i] = math.sqrt(max(rest, 0.0))
            else:
                factor[i, j] = rest / factor[j, j] if factor[j, j] > 0.0 else 0.0
    return factor
