"""A subject's numbers do not depend on who else is simulated, in what order, or beside whom in a vector."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cohort.compiled import LANES
from cohort.model.body import body
from cohort.model.inputs import People
from cohort.model.protocol import Arm, AtState, Constant, Meal
from cohort.program import run
from cohort.quantities import FAILURES
from cohort.simulate.run import courses, prepare

BODY = body("hepatic-lag")
NOMINAL = np.array(list(BODY.card.nominal.values()))
SEEN = ("glucose_mg_dl", "insulin_mu_l", "secretion_mu_per_min", "release_mg_per_min")
ARM = Arm("meal", 900.0, glucose=(Constant(150.0), Meal(200.0, 50_000.0, 45.0, stages=2)))


def people(n: int) -> People:
    return People(*(np.full(n, np.nan) for _ in range(4)))


def simulate(values: np.ndarray, arm: Arm = ARM, block: int = 64) -> tuple[np.ndarray, np.ndarray]:
    sampled, status = np.full((len(values), len(SEEN), 181), np.nan), np.full(len(values), -9)
    for rows, found in courses(prepare(BODY, values, people(len(values)), arm, SEEN), arm.duration_min, block=block):
        sampled[rows], status[rows] = found.sample(np.linspace(0, 900, 181)), found.status
    return sampled, status


def bodies(n: int, seed: int = 3) -> np.ndarray:
    return NOMINAL * np.exp(0.2 * np.random.default_rng(seed).normal(size=(n, len(NOMINAL))))


@settings(max_examples=15, deadline=None)
@given(st.permutations(range(13)), st.integers(1, 13))
def test_any_order_and_any_block_give_the_same_bits(order: list[int], block: int) -> None:
    values = bodies(13)
    alone = np.concatenate([simulate(values[i : i + 1])[0] for i in range(13)])
    together, _ = simulate(values[order], block=block)
    np.testing.assert_array_equal(together, alone[order])


@pytest.mark.parametrize(
    ("symbol", "poison", "word"),
    [("Vg", np.nan, "not finite"), ("Vp", 0.0, "not finite"), ("td", 1e-9, "step too small")],
)
def test_a_poisoned_subject_fails_alone(symbol: str, poison: float, word: str) -> None:
    values = bodies(9)
    clean, _ = simulate(values)
    values[4, BODY.card.parameters.index(symbol)] = poison
    dirty, status = simulate(values)
    assert FAILURES[status[4]] == word
    others = np.arange(9) != 4
    assert (status[others] == -1).all()
    np.testing.assert_array_equal(dirty[others], clean[others])


def test_a_state_far_outside_physiology_is_called_so() -> None:
    arm = Arm("flood", 900.0, glucose=(Constant(1e9),))
    _, status = simulate(bodies(2), arm)
    assert [FAILURES[s] for s in status] == ["left the physical range"] * 2


def test_a_course_too_long_for_the_record_is_done_again_alone() -> None:
    values = bodies(6)
    values[2, BODY.card.parameters.index("td")] = 0.5  # a lag this short needs steps of a fraction of a minute
    found, status = simulate(values)
    assert (status == -1).all()
    np.testing.assert_array_equal(found[2], simulate(values[2:3])[0][0])


def test_the_compiled_step_is_its_plain_twin_bit_for_bit() -> None:
    """One whole step of every shipped stepper, executed by the interpreter in exact fused arithmetic."""
    start = AtState({"Ip": 80.0, "Ii": 190.0, "G": 11000.0, "x1": 85.0, "x2": 88.0, "x3": 90.0})
    values = bodies(1, seed=8)
    arm = Arm("short", 5.0, start=start, glucose=(Constant(216.0),))
    prepared = prepare(BODY, values, people(1), arm, SEEN)
    ((_, found),) = courses(prepared, 5.0)
    assert found.n_steps[0] >= 1
    constants = run(prepared.stepper.hoisted, [*values[0], 1.0])
    np.testing.assert_array_equal(prepared.constants[0], constants)
    source = [*prepared.x0[0], *prepared.inverse_scale[0], 5.0, 216.0, 0.0, *constants]
    result = run(prepared.stepper.step, source)
    states = len(BODY.card.states)
    assert result[states] == found.step_size[0, 0]
    size = len(SEEN) * (prepared.stepper.order + 1)
    np.testing.assert_array_equal(found.coefficients[0, :, 0].ravel(), result[states + 2 : states + 2 + size])
    np.testing.assert_array_equal(found.summaries[0, :, 0].ravel(), result[states + 2 + size :])


def test_more_lanes_than_subjects_is_fine() -> None:
    assert LANES > 1
    assert (simulate(bodies(1))[1] == -1).all()
