"""The map of locking over forcing period and amplitude, and the borders of its tongues by continuation.

Within a tongue the m-th return map has an attracting fixed point. Its border is where a multiplier leaves the unit circle: at
+1 the locked orbit meets one that repels (fold), at -1 its period doubles (flip), as a complex pair a second frequency appears
(torus). A border is followed as the zero of P^m(x; T, a) - x and of that multiplier's distance, in x, T and a together.
"""

from __future__ import annotations

import os
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

from cohort.measure.cycle import ORDER, TOLERANCE, spectra
from cohort.measure.entrain import LOCKED, Forced, Responses, newton, responses
from cohort.measure.hopf import Setting
from cohort.model.inputs import sine_period
from cohort.model.rest import at_rest
from cohort.simulate.run import typical, with_secretion

Array = NDArray[np.float64]

LONGEST_BORDERED = 3
"""Borders are followed for repeats of up to so many forcing periods."""

FEWEST_CELLS = 4
_TOGETHER = 450
_STEP, _SMALLEST = 0.02, 1e-4
_MOST_POINTS = 600
_DIFFERENCE = 1e-5
_SOLVED = 1e-8
_REAL = 1e-5


@dataclass(frozen=True)
class Box:
    """The forced body and the ranges of forcing period (min) and relative amplitude."""

    setting: Setting
    period: tuple[float, float]
    amplitude: tuple[float, float]

    @property
    def low(self) -> Array:
        return np.array([self.period[0], self.amplitude[0]])

    @property
    def span(self) -> Array:
        return np.array([self.period[1], self.amplitude[1]]) - self.low

    def forced(self, period: Array, amplitude: Array) -> Forced:
        """The body under these sines: float64[n] each."""
        n = len(period)
        parameters = with_secretion(np.tile(self.setting.values, (n, 1)), self.setting.secretion)
        pieces = sine_period(np.full(n, self.setting.infusion), amplitude, period)
        return Forced(self.setting.body, parameters, pieces)


@dataclass(frozen=True)
class Tongue:
    """A piece of the border of the region locked n:m: points float64[k, 2], period (min) and relative amplitude; kinds: fold,
    flip or torus at each."""

    maxima: int
    periods: int
    kinds: tuple[str, ...]
    points: Array


def locking_map(box: Box, count: int) -> Responses:
    """Responses on a count x count grid, the period running first."""
    side = np.linspace(0.0, 1.0, count)
    period = np.tile(box.period[0] + side * (box.period[1] - box.period[0]), count)
    amplitude = np.repeat(box.amplitude[0] + side * (box.amplitude[1] - box.amplitude[0]), count)
    chunks = [slice(begin, begin + _TOGETHER) for begin in range(0, count * count, _TOGETHER)]
    _cells(box, period[:1], amplitude[:1])  # compiled before there are threads
    with ThreadPoolExecutor(os.cpu_count()) as pool:
        found = list(pool.map(lambda some: _cells(box, period[some], amplitude[some]), chunks))
    return Responses(*(np.concatenate([getattr(part, f.name) for part in found]) for f in fields(Responses)))


def _cells(box: Box, period: Array, amplitude: Array) -> Responses:
    forced, n = box.forced(period, amplitude), len(period)
    mean = np.full(n, box.setting.infusion), np.zeros(n)
    start = at_rest(box.setting.body, forced.parameters, *mean).states
    return responses(box.setting.body, forced.parameters, forced.pieces, start, period, 0.25 * period)


def tongues(box: Box, seen: Responses, count: int) -> list[Tongue]:
    """The borders of every region of the map that repeats after at most LONGEST_BORDERED periods and fills FEWEST_CELLS."""
    found: list[Tongue] = []
    kind, n, m = (a.reshape(count, count) for a in (seen.kind, seen.maxima, seen.periods))
    states = seen.state.reshape(count, count, -1)
    for periods in range(1, LONGEST_BORDERED + 1):
        inside = (kind == LOCKED) & (m == periods)
        if inside.sum() < FEWEST_CELLS:
            continue
        mine: list[Tongue] = []
        for i, j, side in _edges(inside):
            if not _covered(mine, box, (i, j), side, count):
                border = _border_from(box, states[i, j], (i, j, side), count, periods, int(n[i, j]))
                mine += [border] if border is not None else []
        found += mine
    return found


def _edges(inside: NDArray[np.bool_]) -> list[tuple[int, int, int]]:
    """(row, column, +-1): cells of a region whose neighbour to that side in period is outside, from middle rows outwards."""
    count = len(inside)
    rows = sorted(range(count), key=lambda i: abs(i - count // 2))
    return [
        (i, j, side)
        for i in rows
        for j in range(count)
        for side in (-1, 1)
        if inside[i, j] and 0 <= j + side < count and not inside[i, j + side]
    ]


def _covered(found: list[Tongue], box: Box, cell: tuple[int, int], side: int, count: int) -> bool:
    """Whether a border that is known passes the edge of this cell."""
    here = np.array([cell[1] + 0.5 * side, cell[0]]) / (count - 1)
    return any(np.abs((t.points - box.low) / box.span - here).max(axis=1).min() < 1.6 / (count - 1) for t in found)


# ---- one border ---------------------------------------------------------------------------------------------------


def _border_from(
    box: Box, state: Array, edge: tuple[int, int, int], count: int, periods: int, maxima: int
) -> Tongue | None:
    """Walk from a locked cell to its border, then follow that both ways."""
    i, j, side = edge
    place = box.low + box.span * np.array([j, i]) / (count - 1)
    at = _walk(box, state, place, side * box.span[0] / (count - 1), periods)
    if at is None:
        return None
    x, T, kind = at
    system = _System(box, periods, kind)
    z = system.solved(system.packed(x, T, place[1]), np.eye(len(x) + 2)[-1])
    if z is None:
        return None
    ways = [_follow(system, z, sign) for sign in (-1.0, 1.0)]
    path = np.array([*ways[0][:0:-1], *ways[1]])
    kinds = tuple(_kind(mu) for mu in system.multipliers(path))
    return Tongue(maxima, periods, kinds, box.low + box.span * path[:, -2:])


def _kind(multiplier: complex) -> str:
    """In words how a multiplier leaves the unit circle."""
    return "torus" if abs(multiplier.imag) > _REAL else "fold" if multiplier.real > 0.0 else "flip"


def _walk(box: Box, state: Array, place: Array, step: float, periods: int) -> tuple[Array, float, str] | None:
    """Go in period while the repeat is there and attracts; (state, period, kind of what ends it) at the last place."""
    x, T, end = state[None, :], place[0], place[0] + 1.5 * step
    before: tuple[Array, float] | None = None
    step /= 4.0
    last = np.nan + 0j
    while abs(step) > 1e-7 * box.span[0] and (end - T) * step > 0.0:
        guess = x if before is None else x + (x - before[0]) * step / (T - before[1])
        good, where, size = newton(box.forced(np.array([T + step]), place[1:]), guess, periods)
        if good[0] and size[0] < 1.0:
            before, x, T = (x, T), where, T + step
            last = _System(box, periods, "fold").leading(x[0], T, place[1])
        else:
            step *= 0.5
    if not np.isfinite(last) or abs(last) < 0.9:
        return None
    return x[0], T, _kind(last)


@dataclass(frozen=True)
class _System:
    """P^m(x; T, a) - x = 0 and the multiplier on its circle, in x over its typical size and T, a over the box."""

    box: Box
    periods: int
    kind: str

    def packed(self, x: Array, T: float, a: float) -> Array:
        return np.concatenate([x / typical(self.box.setting.body), (np.array([T, a]) - self.box.low) / self.box.span])

    def leading(self, x: Array, T: float, a: float) -> complex:
        """The multiplier of the largest modulus."""
        return complex(self.multipliers(self.packed(x, T, a)[None, :])[0])

    def multipliers(self, z: Array) -> NDArray[np.complex128]:
        """The largest multiplier at each point: complex128[k]."""
        _, matrices = self._map(z)
        values = np.full(matrices.shape[:2], np.nan + 0j)
        spectra(np.ascontiguousarray(matrices), values)
        return np.asarray(values[np.arange(len(z)), np.abs(values).argmax(axis=1)])

    def _map(self, z: Array) -> tuple[Array, Array]:
        scale = typical(self.box.setting.body)
        given = self.box.low + self.box.span * z[:, -2:]
        forced = self.box.forced(np.ascontiguousarray(given[:, 0]), np.ascontiguousarray(given[:, 1]))
        start = np.ascontiguousarray(z[:, :-2] * scale)
        after, total = start, np.tile(np.eye(len(scale)), (len(z), 1, 1))
        for _ in range(self.periods):
            after, one = forced.tangents(after, (ORDER, TOLERANCE))
            total = one @ total
        return (after - start) / scale, total

    def _multipliers(self, matrices: Array) -> NDArray[np.complex128]:
        values = np.full(matrices.shape[:2], np.nan + 0j)
        spectra(np.ascontiguousarray(matrices), values)
        order = np.abs(values).argmax(axis=1)
        if self.kind == "fold":
            order = values.real.argmax(axis=1)
        elif self.kind == "flip":
            order = values.real.argmin(axis=1)
        return np.asarray(values[np.arange(len(values)), order])

    def values(self, z: Array) -> Array:
        """The equations' left sides at points z: float64[k, states + 1]."""
        off, matrices = self._map(z)
        mu = self._multipliers(matrices)
        test = {"fold": mu.real - 1.0, "flip": mu.real + 1.0, "torus": np.abs(mu) - 1.0}[self.kind]
        return np.column_stack([off, test])

    def linear(self, z: Array) -> tuple[Array, Array]:
        """(values at z, their derivatives: float64[states + 1, states + 2])."""
        steps = _DIFFERENCE * np.eye(len(z))
        found = self.values(np.concatenate([z[None, :], z + steps, z - steps]))
        size = len(z)
        return found[0], ((found[1 : size + 1] - found[size + 1 :]) / (2 * _DIFFERENCE)).T

    def solved(self, z: Array, along: Array) -> Array | None:
        """The nearest solution across `along`."""
        begin = z
        for _ in range(10):
            value, slope = self.linear(z)
            matrix = np.vstack([slope, along])
            if not np.isfinite(matrix).all() or not np.isfinite(value).all():
                return None
            try:
                step = np.linalg.solve(matrix, np.append(-value, -(along @ (z - begin))))
            except np.linalg.LinAlgError:
                return None
            z = z + step
            if np.abs(z - begin).max() > 0.5:
                return None
            if np.abs(step).max() < _SOLVED:
                return z
        return None

    def tangent(self, z: Array, like: Array) -> Array:
        """The curve's direction at z, turned as `like`."""
        _, slope = self.linear(z)
        direction: Array = np.linalg.svd(slope)[2][-1]
        return direction if direction @ like > 0.0 else -direction


def _follow(system: _System, z: Array, sign: float) -> list[Array]:
    """Points of a border from z on, until it leaves the box or can be followed no further."""
    points, step = [z], _STEP
    along = system.tangent(z, sign * np.eye(len(z))[-1])
    while len(points) < _MOST_POINTS:
        following = system.solved(points[-1] + step * along, along)
        if following is None:
            step *= 0.5
            if step < _SMALLEST:
                break
            continue
        if not ((following[-2:] >= 0.0) & (following[-2:] <= 1.0)).all():
            break
        turned = system.tangent(following, along)
        if turned @ along < 0.9 and step > 4.0 * _SMALLEST:
            step *= 0.5
            continue
        points.append(following)
        along, step = turned, min(1.4 * step, _STEP)
        if len(points) > 5 and np.abs(following - z).max() < 0.5 * step:
            break
    return points
