"""How far an attracting orbit lives on beside an attracting equilibrium: the strip between a border and a fold of orbits."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from cohort.measure.cycle import Held, Orbits, close
from cohort.measure.hopf import Setting
from cohort.measure.regime import second_attractors
from cohort.model.rest import at_rest

Array = NDArray[np.float64]

_FIRST, _SMALLEST, _LARGEST = 1e-3, 1e-8, 0.05
_MOST_STEPS = 400


def fold_beyond(setting: Setting, names: tuple[str, ...], border: Array, towards: Array) -> Array | None:
    """Where the orbit that overhangs a border ends: the point border + t towards with the largest t > 0 at which it closes.

    border: a point of the border, float64[variables]; towards: a step to its stable side, whose length is the unit of t
    (1 at most is looked at). None where no attracting orbit is found just beyond the border.
    """
    last = _first_orbit(setting, names, border + _FIRST * towards)
    if last is None:
        return None
    t, step, before = _FIRST, _FIRST, None
    for _ in range(_MOST_STEPS):
        following = min(t + step, 1.0)
        orbit = _closed(setting, names, border + following * towards, last, before, step)
        if orbit is None:
            step *= 0.5
            if step < _SMALLEST * max(t, 1e-3):
                break
            continue
        before, last, t = (last, following - t), orbit, following
        if t >= 1.0:
            break
        step = min(1.3 * step, _LARGEST)
    return np.asarray(border + t * towards)


def _held(setting: Setting, names: tuple[str, ...], point: Array) -> Held:
    parameters, Gin = setting.spread(names, point[None, :])
    Iin = np.zeros(1)
    return Held(setting.body, parameters, Gin, Iin, at_rest(setting.body, parameters, Gin, Iin))


def _first_orbit(setting: Setting, names: tuple[str, ...], point: Array) -> Orbits | None:
    found = second_attractors(_held(setting, names, point))
    return found if found.found[0] else None


def _closed(
    setting: Setting,
    names: tuple[str, ...],
    point: Array,
    last: Orbits,
    before: tuple[Orbits, float] | None,
    step: float,
) -> Orbits | None:
    """The orbit at a point, sought from the last one or from the line through the last two."""
    guesses = [(last.state, last.period)]
    if before is not None and before[1] > 0.0:
        part = step / before[1]
        ahead = last.state + part * (last.state - before[0].state)
        guesses.insert(0, (ahead, last.period + part * (last.period - before[0].period)))
    for state, period in guesses:
        found = close(_held(setting, names, point), state, period, np.zeros(1))
        if found.found[0] and np.abs(found.state / last.state - 1.0).max() < 0.5:
            return found
    return None
