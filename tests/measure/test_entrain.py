"""Locking to a periodic input: passive bodies, the published experiment, Adler's law, and plain iteration."""

import numpy as np
import pytest

from cohort.measure.entrain import LOCKED, Forced, respond
from cohort.measure.hopf import Setting
from cohort.measure.outcomes import outcomes
from cohort.measure.tongues import Box, locking_map, tongues
from cohort.model.body import body
from cohort.model.inputs import People, one_period, sine_period
from cohort.model.protocol import Arm, Meal, Natural, OnOff, Sine
from cohort.simulate.run import with_secretion
from tests.measure.toys import seen, toy

BODY = body("hepatic-lag")
NOMINAL = np.array(list(BODY.card.nominal.values()))
OWN_PERIOD = 109.664669617
"""Period of the published body at 216 mg/min, computed two ways."""


def nobody(n: int) -> np.ndarray:
    return np.full(n, np.nan)


def forced(arm: Arm, period: np.ndarray, mean: float = 216.0, values: np.ndarray = NOMINAL):  # type: ignore[no-untyped-def]
    n = len(period)
    people = People(nobody(n), nobody(n), nobody(n), period)
    parameters = with_secretion(np.tile(values, (n, 1)), 1.0)
    return respond(BODY, parameters, people, arm, (np.full(n, mean), np.zeros(n)), period)


def sine(amplitude: float, mean: float = 216.0) -> Arm:
    return Arm("s", 1440.0, glucose=(Sine(mean, amplitude, Natural(1.0)),))


def test_forcing_by_a_third_near_the_own_period_captures_one_to_one() -> None:
    # Sturis et al., J Clin Invest 1991;87:439-445: amplitude 33 %, 0.8 and 1.2 of the own period: 1:1 in all; near twice the own
    # period two insulin pulses a cycle (Sturis et al., Chaos 1995;5:193-199, from memory)
    found = forced(sine(0.33), OWN_PERIOD * np.array([0.8, 1.2, 2.0]))
    assert found.words().tolist() == ["1:1", "1:1", "2:1"]
    assert found.response_period == pytest.approx(OWN_PERIOD * np.array([0.8, 1.2, 1.0]), rel=1e-9)
    assert (found.multiplier < 1.0).all()


def test_weak_forcing_far_from_the_own_period_captures_nothing() -> None:
    found = forced(sine(0.05), np.array([80.0, 150.0]))
    assert found.words().tolist() == ["aperiodic", "aperiodic"]
    assert np.isnan(found.lag).all()


def test_a_passive_body_follows_any_forcing() -> None:
    arm = sine(0.33, 400.0)  # damped at 400 mg/min
    assert set(forced(arm, np.array([60.0, 109.0, 170.0, 240.0]), 400.0).words()) == {"1:1"}


def test_a_locked_state_repeats_under_plain_iteration() -> None:
    period = np.array([100.0, 219.0])
    arm = sine(0.4)
    found = forced(arm, period)
    assert (found.kind == LOCKED).all()
    people = People(nobody(2), nobody(2), nobody(2), period)
    some = Forced(BODY, with_secretion(np.tile(NOMINAL, (2, 1)), 1.0), one_period(arm, people, period))
    x = found.state
    for _ in range(40):
        x, fine = some.step(x)
        assert fine.all()
    assert x == pytest.approx(found.state, rel=1e-7)


def test_tangents_of_the_forced_flow_agree_with_differences() -> None:
    period = np.array([95.0])
    some = Forced(BODY, with_secretion(NOMINAL[None, :], 1.0), sine_period(np.array([216.0]), np.array([0.3]), period))
    x = np.array([[85.0, 200.0, 12500.0, 85.0, 85.0, 85.0]])
    after, matrix = some.tangents(x, (16, 1e-12))
    assert after == pytest.approx(some.step(x)[0], rel=1e-9)
    for j in range(6):
        d = 1e-5 * x[0, j]
        ahead, behind = (some.step(x + sign * d * np.eye(6)[j])[0][0] for sign in (1, -1))
        assert matrix[0, :, j] == pytest.approx(
            (ahead - behind) / (2 * d), rel=1e-4, abs=1e-4 * np.abs(matrix[0]).max()
        )


def test_outcomes_of_a_forced_arm_and_of_one_that_is_not_settled_by_it() -> None:
    wide = np.column_stack([NOMINAL[None, :], np.full((1, 2), np.nan)])
    arm = Arm("f", 2880.0, 1440.0, glucose=(Sine(216.0, 0.33, Natural(0.8)),))
    found = outcomes("hepatic-lag", wide, nobody(1), arm).outcomes
    assert found["locking"].tolist() == ["1:1"]
    assert found["forcing_period_min"] == pytest.approx([0.8 * OWN_PERIOD], rel=1e-6)
    assert found["forced"][0] == 1
    eaten = Arm("e", 2880.0, glucose=(OnOff(200.0, 120.0), Meal(60.0, 50000.0, 40.0)), steady=100.0)
    found = outcomes("hepatic-lag", wide, nobody(1), eaten).outcomes
    assert found["locking"].tolist() == [None]
    assert np.isnan(found["response_period_min"][0])


# ---- tongues --------------------------------------------------------------------------------------------------------


def hopf(x, y, Gin, Iin, secretion, w):  # type: ignore[no-untyped-def]
    """A fast-attracting circle of radius 1 with angular speed w, pushed along x by Gin - 1."""
    pull = 20 * (1 - x * x - y * y)
    return {"x": pull * x - w * y + (Gin - 1), "y": pull * y + w * x + Iin}, seen(x, y)


def test_a_narrow_tongue_obeys_adlers_law() -> None:
    # exact for weak forcing F sin: phi' = dw - (F/2) sin phi locks iff |dw| <= F/2 (Adler); here F = 0.06, w = 1
    found = toy("circle", hopf, w=1.0)
    box = Box(Setting(found, np.array([1.0]), 1.0), (2 * np.pi / 1.08, 2 * np.pi / 0.92), (0.02, 0.1))
    borders = tongues(box, locking_map(box, 16), 16)
    assert len(borders) >= 2
    for border in borders:
        assert (border.maxima, border.periods) == (1, 1)
        assert set(border.kinds) == {"fold"}
        detuning = np.abs(1.0 - 2 * np.pi / border.points[:, 0])
        assert detuning == pytest.approx(0.5 * border.points[:, 1], rel=0.03)


def test_a_border_of_the_body_separates_locked_from_not() -> None:
    box = Box(Setting(BODY, NOMINAL, 216.0), (90.0, 125.0), (0.02, 0.12))
    borders = [t for t in tongues(box, locking_map(box, 12), 12) if set(t.kinds) == {"torus"}]
    assert len(borders) >= 2  # a fold may end one locked orbit where another goes on
    for border in borders:
        middle = border.points[len(border.points) // 2]
        side = np.sign(OWN_PERIOD - middle[0])
        words = forced(sine(float(middle[1])), middle[0] + side * np.array([0.3, -0.3])).words()
        assert words[0] == "1:1"
        assert words[1] != "1:1"
