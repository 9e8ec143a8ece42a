"""Where an equilibrium loses its stability as parameters or the infusion change, and what is born there.

Everything rests on one smooth function, the real part of the leading eigenvalue at the equilibrium. Its zeros in one
variable are the ends of windows of oscillation; in two variables they are curves, followed by prediction along the tangent
and correction along the gradient. At each zero the first Lyapunov coefficient (Kuznetsov, Elements of Applied Bifurcation
Theory, section 3.5, from memory) tells whether the rhythm is born small and attracting (negative) or not (positive).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from cohort.compiled import compile_program
from cohort.model.body import Body
from cohort.model.rest import Rest, at_rest
from cohort.simulate.run import map_rows, with_secretion

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]

INFUSION = "infusion"
"""Name of the glucose input (mg/min) as a variable beside the parameters."""

SCANNED = 400
"""Points of a scan for windows, evenly spaced on a logarithmic scale where all are positive."""

_STEP, _SMALLEST_STEP = 0.01, 1e-4
_DIFFERENCE = 1e-5
_ON_CURVE = 1e-11
_MOST_POINTS = 4000


@dataclass(frozen=True)
class Setting:
    """A body, its parameters (float64[len(card.parameters)]), the infusion (mg/min) and the factor on secretion."""

    body: Body
    values: Array
    infusion: float
    secretion: float = 1.0

    def rest(self, names: tuple[str, ...], points: Array) -> Rest:
        """Equilibria where the named variables take the values points float64[n, len(names)]."""
        parameters, Gin = self.spread(names, points)
        return at_rest(self.body, parameters, Gin, np.zeros(len(Gin)))

    def spread(self, names: tuple[str, ...], points: Array) -> tuple[Array, Array]:
        """(parameters with secretion float64[n, ..], infusion float64[n]) at these points."""
        n = len(points)
        values, Gin = np.tile(self.values, (n, 1)), np.full(n, self.infusion)
        for j, name in enumerate(names):
            if name == INFUSION:
                Gin = np.ascontiguousarray(points[:, j])
            else:
                values[:, self.body.card.parameters.index(name)] = points[:, j]
        return with_secretion(values, self.secretion), Gin

    def growth(self, names: tuple[str, ...], points: Array) -> Array:
        """Real part of the leading eigenvalue, 1/min: float64[n], NaN where there is no equilibrium."""
        return np.asarray(self.rest(names, points).eigenvalues[:, 0].real)

    def value(self, name: str) -> float:
        """The setting's own value of a variable."""
        return self.infusion if name == INFUSION else float(self.values[self.body.card.parameters.index(name)])


@dataclass(frozen=True)
class Border:
    """Places where the equilibrium changes stability: points float64[n, variables]; kind: hopf, or fold where the leading
    eigenvalue is real; period (min) of what is born, NaN for a fold; lyapunov: the first Lyapunov coefficient."""

    names: tuple[str, ...]
    points: Array
    kind: tuple[str, ...]
    period: Array
    lyapunov: Array


def described(setting: Setting, names: tuple[str, ...], points: Array) -> Border:
    """What is born at these border points."""
    rest = setting.rest(names, points)
    parameters, Gin = setting.spread(names, points)
    omega = np.abs(rest.eigenvalues[:, 0].imag)
    hopf = omega > 0.0
    with np.errstate(divide="ignore"):
        period = np.where(hopf, 2.0 * np.pi / omega, np.nan)
    lyapunov = first_lyapunov(setting.body, rest, parameters, Gin)
    return Border(names, points, tuple("hopf" if h else "fold" for h in hopf), period, lyapunov)


# ---- one variable -------------------------------------------------------------------------------------------------


def crossings(setting: Setting, name: str, low: float, high: float) -> Array:
    """All values of one variable in low..high where stability changes, rising, to about 1e-12 of themselves."""
    from scipy.optimize import brentq

    scan = np.geomspace(low, high, SCANNED) if low > 0.0 else np.linspace(low, high, SCANNED)
    growth = setting.growth((name,), scan[:, None])

    def at(x: float) -> float:
        return float(setting.growth((name,), np.array([[x]]))[0])

    changes = growth[:-1] * growth[1:]
    found = [
        brentq(at, scan[i], scan[i + 1], xtol=1e-13 * (high - low) if low <= 0.0 else 1e-13 * scan[i], rtol=1e-14)
        for i in np.flatnonzero(np.isfinite(changes) & (changes < 0.0))
    ]
    return np.array(found)


# ---- two variables ------------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Plane:
    """Two variables and their ranges; within it places are 0..1 in each."""

    names: tuple[str, str]
    low: Array
    high: Array

    def points(self, s: Array) -> Array:
        """Places 0..1 as values of the variables."""
        return np.asarray(self.low + np.atleast_2d(s) * (self.high - self.low))


def grid(plane: Plane, count: int) -> Array:
    """count x count points of a plane, the first variable running first: float64[count^2, 2]."""
    side = np.linspace(0.0, 1.0, count)
    return plane.points(np.array([(x, y) for y in side for x in side]))


def curves(function: Callable[[Array], Array], values: Array) -> list[Array]:
    """The zero curves in the unit square of a smooth function of places float64[n, 2]; values: float64[count, count], the
    function on an even grid (row: second coordinate), which tells where curves begin. Each curve is float64[n, 2], both ends
    on the square's sides or its first point repeated where it closes."""
    seeds, found = _seeds(values), []
    cell = 1.0 / (len(values) - 1)
    while len(seeds):
        start = corrected(function, seeds[0])
        seeds = seeds[1:]
        if start is None:
            continue
        forward, closed = _followed(function, start, 1.0)
        curve = forward if closed else np.concatenate([_followed(function, start, -1.0)[0][:0:-1], forward])
        found.append(curve)
        near = np.array([_distance(curve, seed) for seed in seeds]) if len(seeds) else np.empty(0)
        seeds = seeds[near > cell]
    return found


def _seeds(values: Array) -> Array:
    """Places between neighbours of a grid where the sign changes."""
    count = len(values)
    side = np.linspace(0.0, 1.0, count)
    found = []
    for i in range(count):
        for j in range(count):
            for di, dj in ((0, 1), (1, 0)):
                if i + di < count and j + dj < count:
                    a, b = values[i, j], values[i + di, j + dj]
                    if np.isfinite(a * b) and a * b < 0.0:
                        t = a / (a - b)
                        found.append((side[j] + t * dj / (count - 1), side[i] + t * di / (count - 1)))
    return np.array(found).reshape(-1, 2)


def _distance(curve: Array, place: Array) -> float:
    """From a place to the nearest segment of a curve."""
    a, d = curve[:-1], np.diff(curve, axis=0)
    if not len(a):
        return float(np.hypot(*(curve[0] - place)))
    with np.errstate(divide="ignore", invalid="ignore"):
        t = np.nan_to_num(np.clip(((place - a) * d).sum(axis=1) / (d * d).sum(axis=1), 0.0, 1.0))
    return float(np.hypot(*(a + t[:, None] * d - place).T).min())


def _slope(function: Callable[[Array], Array], place: Array) -> tuple[float, Array]:
    d = _DIFFERENCE
    around = function(place + d * np.array([[0, 0], [1, 0], [-1, 0], [0, 1], [0, -1]]))
    return float(around[0]), np.array([around[1] - around[2], around[3] - around[4]]) / (2 * d)


def corrected(function: Callable[[Array], Array], place: Array) -> Array | None:
    """The zero nearest to a place, along the gradient; None where Newton's method does not find one close by."""
    begin = place = np.array(place, dtype=float)
    for _ in range(12):
        value, slope = _slope(function, place)
        size = float(slope @ slope)
        if not (np.isfinite(value) and size > 0.0):
            return None
        step = -value * slope / size
        place = place + step
        if np.hypot(*(place - begin)) > 0.2:
            return None
        if np.hypot(*step) < _ON_CURVE:
            return place
    return place if np.hypot(*step) < 1e-9 else None


def _followed(function: Callable[[Array], Array], start: Array, sign: float) -> tuple[Array, bool]:
    """Points of the curve from start on, and whether it closes."""
    points, step = [start], _STEP
    _, slope = _slope(function, start)
    along = sign * np.array([-slope[1], slope[0]]) / np.hypot(*slope)
    while len(points) < _MOST_POINTS:
        following = corrected(function, points[-1] + step * along)
        if following is None or np.hypot(*(following - points[-1])) > 2.0 * step:
            step *= 0.5
            if step < _SMALLEST_STEP:
                break
            continue
        if not ((following >= 0.0) & (following <= 1.0)).all():
            points.append(_at_side(function, points[-1], following))
            break
        _, slope = _slope(function, following)
        turned = np.array([-slope[1], slope[0]]) / np.hypot(*slope)
        turned = turned if turned @ along > 0.0 else -turned
        if turned @ along < 0.97 and step > 8.0 * _SMALLEST_STEP:  # more than 14 degrees
            step *= 0.5
            continue
        points.append(following)
        along = turned
        if len(points) > 4 and np.hypot(*(following - start)) < 0.75 * step:
            return np.array([*points, start]), True
        step = min(1.5 * step, _STEP) if turned @ along > 0.995 else step
    return np.array(points), False


def _at_side(function: Callable[[Array], Array], inside: Array, outside: Array) -> Array:
    """Where the curve between two neighbours leaves the square."""
    over = [(j, bound) for j in (0, 1) for bound in (0.0, 1.0) if (outside[j] - bound) * (inside[j] - bound) < 0.0]
    j, bound = over[0] if over else (0, float(np.clip(outside[0], 0.0, 1.0)))
    t = (bound - inside[j]) / (outside[j] - inside[j])
    other = inside[1 - j] + t * (outside[1 - j] - inside[1 - j])
    for _ in range(12):
        place = np.empty(2)
        place[j], place[1 - j] = bound, other
        value, slope = _slope(function, place)
        step = -value / slope[1 - j]
        other += step
        if not abs(step) > _ON_CURVE:
            break
    place[1 - j] = other
    return place


# ---- what is born -------------------------------------------------------------------------------------------------


def first_lyapunov(body: Body, rest: Rest, parameters: Array, Gin: Array) -> Array:
    """The first Lyapunov coefficient at each equilibrium, its leading pair taken as if on the axis: float64[n], NaN for real.

    l1 = Re(<p, C(q, q, q*)> - 2 <p, B(q, A^-1 B(q, q*))> + <p, B(q*, (2 i w - A)^-1 B(q, q))>) / (2 w), with A q = i w q,
    |q| = 1 in states over their typical sizes, <p, q> = 1.
    """
    n, size = rest.states.shape
    found = np.full(n, np.nan)
    scale = np.array([body.card.typical[s] for s in body.card.states])
    for k in range(n):
        omega = abs(rest.eigenvalues[k, 0].imag)
        if not omega > 0.0:
            continue
        place = np.concatenate([rest.states[k], [Gin[k], 0.0], parameters[k]])
        J = rest.jacobians[k] * scale[None, :] / scale[:, None]
        q, p = _vectors(J, 1j * omega)
        B, C = _forms(body, place, scale)
        identity = np.eye(size)
        term = np.vdot(p, C(q, q, q.conj()))
        term -= 2.0 * np.vdot(p, B(q, np.linalg.solve(J + 0j, B(q, q.conj()))))
        term += np.vdot(p, B(q.conj(), np.linalg.solve(2j * omega * identity - J, B(q, q))))
        found[k] = term.real / (2.0 * omega)
    return found


def _vectors(J: Array, value: complex) -> tuple[Complex, Complex]:
    """Right and left eigenvectors next to `value`: |q| = 1, <p, q> = 1."""
    values, right = np.linalg.eig(J)
    q = right[:, np.abs(values - value).argmin()]
    values, left = np.linalg.eig(J.T)
    p = left[:, np.abs(values - np.conj(value)).argmin()]
    q = q / np.linalg.norm(q)
    return q, p / np.conj(np.vdot(p, q))


def _forms(body: Body, place: Array, scale: Array) -> tuple[Callable[..., Complex], Callable[..., Complex]]:
    """Second and third derivatives of the field as symmetric forms on complex vectors, in scaled states."""

    def real(program: int, *vectors: Array) -> Array:
        source = np.concatenate([place, *(v * scale for v in vectors)])[None, :]
        out = np.empty((1, len(scale)))
        map_rows(program, np.ascontiguousarray(source), out)
        return np.asarray(out[0] / scale)

    second, third = compile_program(body.second), compile_program(body.third)

    def B(u: Complex, v: Complex) -> Complex:
        return _multilinear(lambda *w: real(second, *w), u, v)

    def C(u: Complex, v: Complex, w: Complex) -> Complex:
        return _multilinear(lambda *x: real(third, *x), u, v, w)

    return B, C


def _multilinear(form: Callable[..., Array], *vectors: Complex) -> Complex:
    """A real multilinear form on complex vectors: the sum over real and imaginary parts."""
    total = np.zeros(len(vectors[0]), complex)
    for choice in range(2 ** len(vectors)):
        parts = [(v.imag if choice >> i & 1 else v.real) for i, v in enumerate(vectors)]
        total = total + 1j ** choice.bit_count() * form(*parts)
    return total
