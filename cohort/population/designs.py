"""Space-filling draws of people: Latin hypercube, and eight interleaved scrambles of Sobol' points."""

from __future__ import annotations

import functools
import warnings

import numpy as np
from numpy.typing import NDArray

from cohort.population.uniforms import key, uniforms

Array = NDArray[np.float64]

SCRAMBLES = 8
"""Independent scrambles of a Sobol' cohort: subject i belongs to scramble i mod 8, which its intervals rest on."""


@functools.lru_cache(maxsize=64)
def _cells(seed: int, name: str, count: int) -> NDArray[np.int32]:
    # the order of keyed uniforms, since numpy may change how it shuffles from version to version
    return np.argsort(uniforms(seed, "latin-hypercube cells", name, 0, count), kind="stable").astype(np.int32)


def stratified_uniforms(seed: int, name: str, count: int, start: int, stop: int) -> Array:
    """One dimension of a Latin hypercube of `count` subjects (McKay, Beckman & Conover 1979): one in each of `count`
    equal cells. Subjects start..stop-1: float64[n]. The draw depends on `count`, so it cannot be extended."""
    within = uniforms(seed, "latin-hypercube", name, start, stop)
    return np.clip((_cells(seed, name, count)[start:stop] + within) / count, 2.0**-60, 1.0 - 2.0**-53)


def sobol_uniforms(seed: int, names: tuple[str, ...], start: int, stop: int) -> dict[str, Array]:
    """Subjects start..stop-1 of eight independently scrambled Sobol' sequences, one dimension a name: float64[n] each."""
    out = np.empty((stop - start, len(names)))
    for scramble in range(SCRAMBLES):
        first, last = -(-(start - scramble) // SCRAMBLES), -(-(stop - scramble) // SCRAMBLES)
        if last > first:
            rows = np.arange(first, last) * SCRAMBLES + scramble - start
            out[rows] = sobol_points(seed, names, scramble, first, last)
    return {name: out[:, i].copy() for i, name in enumerate(names)}


def sobol_points(seed: int, names: tuple[str, ...], scramble: int, start: int, stop: int) -> Array:
    """Points start..stop-1 of one scrambled Sobol' sequence in the open unit cube: float64[n, names]."""
    from scipy.stats import qmc

    if not names:
        return np.empty((stop - start, 0))
    engine = qmc.Sobol(len(names), scramble=True, bits=32, rng=key(seed, "sobol", str(scramble), *names))
    if start:
        engine.fast_forward(start)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", UserWarning)  # a range need not be a power of two; the whole draw is
        points = engine.random(stop - start)
    return np.asarray(points) + 2.0**-33
