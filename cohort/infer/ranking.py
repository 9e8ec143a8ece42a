"""What a ranking is asked, and the designs it rests on: rows of the unit cube in a fixed order.

Rows are ordered by doubling, replicate, block and position. Doubling 0 holds the first 16 points of every replicate,
doubling k as many again as all before it, so a design grows without a row changing, whatever size it began with.
"""

from __future__ import annotations

import functools
from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from cohort.population.uniforms import key, uniforms

Array = NDArray[np.float64]
Ints = NDArray[np.int64]

FIRST = 16
"""Points of a replicate in doubling 0."""
PLAIN_DOUBLING = 7
"""Plain rows beside a design: 16 x 2^7 = 2,048."""
TRIM = 0.025
"""Morris moves within the middle 95 % of every law: its outermost levels would otherwise be infinite."""
KINDS = ("design", "plain", "redraw")


@dataclass(frozen=True)
class Ranking:
    """[ranking] of a study file."""

    method: str
    outcomes: tuple[str, ...]
    base: int = 256
    replicates: int = 8
    tolerance: float = 0.05
    max_runs: int = 200_000
    second_order: bool = False
    trajectories: int = 20
    levels: int = 4
    groups: Mapping[str, tuple[str, ...]] = field(default_factory=dict)


@dataclass(frozen=True)
class Factor:
    """What is moved at once: one input, or a group of them; columns of the design's names."""

    name: str
    columns: tuple[int, ...]


@dataclass(frozen=True)
class Design:
    """The design of one stratum: inputs by name (parameters that follow a law, `weight`) and factors over them."""

    method: str
    seed: int
    stratum: str
    names: tuple[str, ...]
    factors: tuple[Factor, ...]
    replicates: int
    second_order: bool = False
    levels: int = 4

    @property
    def blocks(self) -> tuple[str, ...]:
        """Blocks of rows: A, B, A with each factor from B, and for second order B with each factor from A."""
        if self.method == "morris":
            return tuple(f"step {i}" for i in range(len(self.factors) + 1))
        swapped = tuple(f"A, {f.name} of B" for f in self.factors)
        back = tuple(f"B, {f.name} of A" for f in self.factors) if self.second_order else ()
        return ("A", "B", *swapped, *back)


@dataclass(frozen=True)
class Rows:
    """Rows of a design: replicate and position int64[n], block int64[n] (into Design.blocks), u float64[n, names]."""

    replicate: Ints
    block: Ints
    position: Ints
    u: Array


def points(doubling: int) -> int:
    """Points of a replicate up to and with this doubling."""
    return FIRST << doubling


def first_point(doubling: int) -> int:
    """The first point that is new in this doubling."""
    return 0 if doubling == 0 else points(doubling - 1)


def doubling_of(base: int) -> int:
    """The doubling at which a replicate has `base` points. Raises ValueError where none has."""
    if base < FIRST or base & (base - 1):
        raise ValueError(f"{base} is not a power of two from {FIRST} on")
    return base.bit_length() - FIRST.bit_length()


def row_count(design: Design, doubling: int) -> int:
    """Rows that a doubling adds; a Morris design is all in doubling 0."""
    if design.method == "morris":
        return design.replicates * len(design.blocks) if doubling == 0 else 0
    return design.replicates * len(design.blocks) * (points(doubling) - first_point(doubling))


def design_keys(design: Design, doubling: int, start: int, stop: int) -> tuple[Ints, Ints, Ints]:
    """(replicate, block, position) of rows start..stop-1 of a doubling."""
    flat = np.arange(start, stop, dtype=np.int64)
    if design.method == "morris":
        trajectory, step = np.divmod(flat, len(design.blocks))
        return trajectory, step, np.zeros_like(flat)
    fresh = points(doubling) - first_point(doubling)
    rest, position = np.divmod(flat, fresh)
    replicate, block = np.divmod(rest, len(design.blocks))
    return replicate, block, position + first_point(doubling)


def design_rows(design: Design, doubling: int, start: int, stop: int) -> Rows:
    """Rows start..stop-1 of a doubling, in the open unit cube."""
    replicate, block, position = design_keys(design, doubling, start, stop)
    if design.method == "morris":
        return Rows(replicate, block, position, _morris(design)[start:stop])
    base = _sobol(design, doubling)
    own = base[replicate, position - first_point(doubling)]
    a, b = own[:, 0], own[:, 1]
    u = np.where((block == 1)[:, None], b, a)
    for j, factor in enumerate(design.factors):
        columns = list(factor.columns)
        swapped, back = block == 2 + j, block == 2 + len(design.factors) + j
        u[np.ix_(swapped, columns)] = b[np.ix_(swapped, columns)]
        if back.any():
            u[back] = b[back]
            u[np.ix_(back, columns)] = a[np.ix_(back, columns)]
    return Rows(replicate, block, position, u)


@functools.lru_cache(maxsize=4)
def _sobol(design: Design, doubling: int) -> Array:
    """Base points of every replicate that a doubling adds: float64[replicates, points, 2 (A, B), names]."""
    from scipy.stats import qmc

    first, last = first_point(doubling), points(doubling)
    d = len(design.names)
    made = np.empty((design.replicates, last - first, 2, d))
    for replicate in range(design.replicates):
        rng = key(design.seed, "ranking", design.stratum, str(replicate), *design.names)
        engine = qmc.Sobol(2 * d, scramble=True, bits=32, rng=rng)
        if first:
            engine.fast_forward(first)
        made[replicate] = engine.random(last - first).reshape(-1, 2, d)
    return made + 2.0**-33


@functools.lru_cache(maxsize=4)
def _morris(design: Design) -> Array:
    """Trajectories in the trimmed unit cube: float64[trajectories x (factors + 1), names]."""
    from cohort.infer.salib import trajectories

    seed = np.random.SeedSequence(key(design.seed, "ranking", design.stratum, "morris"))  # SALib spawns from it
    rng = np.random.Generator(np.random.Philox(seed))
    return trajectories(design, TRIM, rng)


# ---- plain rows and redraws --------------------------------------------------------------------------------------


def plain_rows(design: Design, start: int, stop: int) -> Array:
    """Independent rows start..stop-1 of the unit cube: float64[n, names]."""
    return np.column_stack(
        [uniforms(design.seed, f"plain rows {design.stratum}", name, start, stop) for name in design.names]
    )


def redrawn_rows(design: Design, factor: Factor, attempt: int, positions: Ints) -> Array:
    """Plain rows at `positions` with one factor drawn anew for the attempt-th time: float64[n, names]."""
    last = int(positions.max(initial=-1)) + 1
    u = plain_rows(design, 0, last)[positions]
    purpose = f"redraw {design.stratum} {factor.name} {attempt}"
    for column in factor.columns:
        u[:, column] = uniforms(design.seed, purpose, design.names[column], 0, last)[positions]
    return u
