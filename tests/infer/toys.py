"""Check functions with published or exact indices, and the runs of a design over them."""

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from cohort.infer.ranking import Design, Factor, design_rows, row_count

Array = NDArray[np.float64]


def ishigami(u: Array) -> Array:
    """a = 7, b = 0.1 (Ishigami & Homma 1990)."""
    x = np.pi * (2.0 * u - 1.0)
    return np.asarray(np.sin(x[..., 0]) + 7.0 * np.sin(x[..., 1]) ** 2 + 0.1 * x[..., 2] ** 4 * np.sin(x[..., 0]))


ISHIGAMI_S1 = (0.313905, 0.442411, 0.0)
ISHIGAMI_ST = (0.557589, 0.442411, 0.243684)
ISHIGAMI_S2 = (0.0, 0.243684, 0.0)
"""Exact; pairs 01, 02, 12."""

G_A = np.array([0.0, 1.0, 4.5, 9.0, 99.0, 99.0, 99.0, 99.0])


def sobol_g(u: Array) -> Array:
    """Sobol' G function with a = 0, 1, 4.5, 9, 99 x 4."""
    return np.asarray(np.prod((np.abs(4.0 * u - 2.0) + G_A) / (1.0 + G_A), axis=-1))


def _g_exact() -> tuple[tuple[float, ...], tuple[float, ...]]:
    v = 1.0 / (3.0 * (1.0 + G_A) ** 2)
    whole = np.prod(1.0 + v) - 1.0
    total = v * np.prod(1.0 + v) / (1.0 + v)
    return tuple(v / whole), tuple(total / whole)


G_S1, G_ST = _g_exact()


def indicator(u: Array) -> Array:
    """1 where x1 + x2 / 2 + x3 / 4 > 1."""
    return np.asarray(u[..., 0] + 0.5 * u[..., 1] + 0.25 * u[..., 2] > 1.0, dtype=float)


INDICATOR_S1 = (136 / 225, 4 / 45, 1 / 45)
INDICATOR_ST = (8 / 9, 16 / 45, 8 / 45)


def same_sign(u: Array) -> Array:
    """1 where x0 x1 > 0 over (-1, 1): nothing by itself, all together."""
    return np.asarray((u[..., 0] - 0.5) * (u[..., 1] - 0.5) > 0.0, dtype=float)


def design(d: int, seed: int, replicates: int = 8, second_order: bool = False) -> Design:
    """A Sobol design over d inputs."""
    names = tuple(f"x{j}" for j in range(d))
    return Design(
        "sobol", seed, "all", names, tuple(Factor(n, (j,)) for j, n in enumerate(names)), replicates, second_order
    )


def run(found: Design, function: Callable[[Array], Array], doubling: int) -> Array:
    """Outputs of a design up to a doubling: float64[replicates, blocks, points]."""
    parts = []
    for step in range(doubling + 1):
        rows = design_rows(found, step, 0, row_count(found, step))
        parts.append(function(rows.u).reshape(found.replicates, len(found.blocks), -1))
    return np.concatenate(parts, axis=2)


# ---- outcomes that part of a cohort lacks: toys with known truth (measured by the project, +-0.003) ----------------


def toy_rows(n: int, rng: np.random.Generator) -> Array:
    """Independent rows over (-1, 1)^5."""
    return rng.uniform(-1.0, 1.0, (n, 5))


def toy_has(x: Array) -> NDArray[np.bool_]:
    """Which rows oscillate."""
    return np.asarray(0.3 + x[:, 0] + 0.7 * x[:, 2] > 0.0)


def toy_1(x: Array) -> Array:
    """Period; x0 decides only whether there is one, x4 nothing."""
    return np.asarray(40.0 * np.pi / (1.0 + 0.25 * x[:, 1] + 0.15 * x[:, 2] + 0.10 * x[:, 1] * x[:, 3]))


def toy_2(x: Array) -> Array:
    """Period that grows without bound near the border."""
    margin = np.maximum(0.3 + x[:, 0] + 0.7 * x[:, 2], 0.0)
    return np.asarray(100.0 * (1.0 + 0.3 * x[:, 1]) * (1.0 + 0.8 * np.exp(-3.0 * margin)))


TOY_1_ASSOCIATION = (0.045, 0.686, 0.241, 0.003, 0.0)
TOY_1_MECHANISM = (0.0, 0.752, 0.217, 0.050, 0.0)
TOY_1_FAIR = (0.022, 0.721, 0.230, 0.027, 0.0)
TOY_2_ASSOCIATION = (0.198, 0.493, 0.039, 0.0, 0.0)
TOY_2_MECHANISM = (0.465, 0.508, 0.303, 0.0, 0.0)


def redrawn(x: Array, j: int, rng: np.random.Generator) -> Array:
    """Rows with x_j redrawn until they oscillate again."""
    again = x.copy()
    left = np.arange(len(x))
    while len(left):
        again[left, j] = rng.uniform(-1.0, 1.0, len(left))
        left = left[~toy_has(again[left])]
    return again


# ---- correlated Gaussian inputs ------------------------------------------------------------------------------------


def linear_gaussian(n: int, rng: np.random.Generator) -> tuple[Array, Array]:
    """Y = x1 + x2 + x3, sd 1, 1, 2, correlation of x2 and x3 0.9 (set-up of Owen & Prieur 2017); rows on normal scores."""
    factor = np.linalg.cholesky(np.array([[1.0, 0.0, 0.0], [0.0, 1.0, 0.9], [0.0, 0.9, 1.0]]))
    z = rng.standard_normal((n, 3)) @ factor.T
    return z, z @ np.array([1.0, 1.0, 2.0])


GAUSSIAN_SHAPLEY = (0.1042, 0.4182, 0.4776)
GAUSSIAN_S1 = (0.1042, 0.8167, 0.8760)
GAUSSIAN_T = (0.1042, 0.0198, 0.0792)
