"""The traced bodies against published values, hand-derived slopes and finite differences."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cohort.errors import StudyError
from cohort.model import equations as eq
from cohort.model.body import body
from cohort.model.catalogue import MODELS
from cohort.model.trace import derivative, evaluator, exp, log, name
from cohort.program import run

NOMINAL = dict(MODELS["hepatic-lag"].nominal)


def value(function, **known: float) -> float:  # type: ignore[no-untyped-def]
    """Evaluate one published function at numbers."""
    names = list(known)
    expression = function(**{n: name(n) for n in names})
    return run(evaluator("value", names, [expression]), list(known.values()))[0]


def parameters_of(*names: str) -> dict[str, float]:
    return {n: NOMINAL[n] for n in names}


@pytest.mark.parametrize(
    ("function", "arguments", "expected"),
    [
        # BIOMD0000000372 at its filed starting state: G, Ii, x3
        (eq.f1, {"G": 12342.61665, **parameters_of("Vg", "Rm", "C1", "a1")}, 15.174877041143),
        (eq.f2, {"G": 12342.61665, **parameters_of("Vg", "Ub", "C2")}, 71.9863579104227),
        (eq.f3, {"G": 12342.61665, **parameters_of("Vg", "C3")}, 1.234261665),
        (
            eq.f4,
            {"Ii": 243.2865183, **parameters_of("Vi", "E", "ti", "U0", "Um", "beta", "C4")},
            204.190214963962,
        ),
        (eq.f5, {"x": 104.5878705, **parameters_of("Vp", "Rg", "alpha", "C5")}, 12.7950632297315),
    ],
)
def test_f1_to_f5_as_filed(function, arguments, expected) -> None:  # type: ignore[no-untyped-def]
    # BIOMD0000000372 (Tolic, Mosekilde & Sturis 2000), evaluated from the filed formulas
    assert value(function, **arguments) == pytest.approx(expected, rel=1e-12)


def hand_slopes(G: float, Ii: float, x3: float) -> dict[str, float]:
    """f1' .. f5' by the quotient rule on paper."""
    p = NOMINAL
    f1 = value(eq.f1, G=G, **parameters_of("Vg", "Rm", "C1", "a1"))
    f4 = value(eq.f4, Ii=Ii, **parameters_of("Vi", "E", "ti", "U0", "Um", "beta", "C4"))
    f5 = value(eq.f5, x=x3, **parameters_of("Vp", "Rg", "alpha", "C5"))
    s = (f4 - p["U0"]) / (p["Um"] - p["U0"])
    return {
        "f1": f1 * (1 - f1 / p["Rm"]) / (p["a1"] * p["Vg"]),
        "f2": p["Ub"] * math.exp(-G / (p["C2"] * p["Vg"])) / (p["C2"] * p["Vg"]),
        "f3": 1 / (p["C3"] * p["Vg"]),
        "f4": (p["Um"] - p["U0"]) * s * (1 - s) * p["beta"] / Ii,
        "f5": -f5 * (1 - f5 / p["Rg"]) * p["alpha"] / p["Vp"],
    }


@given(st.floats(4000.0, 30000.0), st.floats(10.0, 900.0), st.floats(5.0, 400.0))
def test_traced_derivatives_are_the_hand_derived_slopes(G: float, Ii: float, x3: float) -> None:
    expected = hand_slopes(G, Ii, x3)
    arguments = {
        "f1": (eq.f1, "G", G, ("Vg", "Rm", "C1", "a1")),
        "f2": (eq.f2, "G", G, ("Vg", "Ub", "C2")),
        "f3": (eq.f3, "G", G, ("Vg", "C3")),
        "f4": (eq.f4, "Ii", Ii, ("Vi", "E", "ti", "U0", "Um", "beta", "C4")),
        "f5": (eq.f5, "x", x3, ("Vp", "Rg", "alpha", "C5")),
    }
    for label, (function, variable, at, used) in arguments.items():
        expression = function(**{variable: name(variable)}, **{u: name(u) for u in used})
        slope = derivative(expression, {variable: name("one")})
        program = evaluator("slope", [variable, "one", *used], [slope])
        found = run(program, [at, 1.0, *(NOMINAL[u] for u in used)])[0]
        assert found == pytest.approx(expected[label], rel=1e-9, abs=1e-14)


@pytest.mark.parametrize("model", list(MODELS))
def test_jacobian_against_finite_differences(model: str) -> None:
    found = body(model)
    rng = np.random.default_rng(5)
    states = np.array([found.card.typical[s] for s in found.card.states]) * rng.uniform(
        0.6, 1.6, len(found.card.states)
    )
    rest = [216.0, 1.0, *found.card.nominal.values(), 1.0]
    n = len(states)
    exact = np.array(run(found.jacobian, [*states, *rest])).reshape(n, n)
    for j in range(n):
        h = 1e-6 * states[j]
        up, down = states.copy(), states.copy()
        up[j], down[j] = up[j] + h, down[j] - h
        difference = (np.array(run(found.rates, [*up, *rest])) - np.array(run(found.rates, [*down, *rest]))) / (2 * h)
        np.testing.assert_allclose(exact[:, j], difference, rtol=3e-7, atol=3e-9)


@settings(max_examples=20)
@given(st.floats(0.3, 4.0), st.floats(0.5, 1.5))
def test_size_scaling_leaves_concentrations_and_times_alone(c: float, spread: float) -> None:
    """Volumes, flows and amounts times c: every rate times c (algebra of the equations)."""
    scaled = ("Vp", "Vi", "Vg", "E", "Rm", "Ub", "U0", "Um", "Rg")
    found = body("hepatic-lag")
    states = np.array([found.card.typical[s] for s in found.card.states]) * spread
    small = [*states, 216.0, 2.0, *NOMINAL.values(), 1.0]
    large = [*(c * states), c * 216.0, c * 2.0, *(v * (c if k in scaled else 1.0) for k, v in NOMINAL.items()), 1.0]
    np.testing.assert_allclose(run(found.rates, large), c * np.array(run(found.rates, small)), rtol=1e-11, atol=1e-11)


@settings(max_examples=20)
@given(st.floats(0.3, 4.0), st.floats(0.5, 1.5))
def test_time_scaling_divides_every_rate(q: float, spread: float) -> None:
    """Times times q, flows over q: every rate over q (algebra of the equations)."""
    factor = {"tp": q, "ti": q, "td": q} | dict.fromkeys(("E", "Rm", "Ub", "U0", "Um", "Rg"), 1 / q)
    found = body("hepatic-lag")
    states = np.array([found.card.typical[s] for s in found.card.states]) * spread
    fast = [*states, 216.0, 2.0, *NOMINAL.values(), 1.0]
    slow = [*states, 216.0 / q, 2.0 / q, *(v * factor.get(k, 1.0) for k, v in NOMINAL.items()), 1.0]
    np.testing.assert_allclose(run(found.rates, slow), np.array(run(found.rates, fast)) / q, rtol=1e-11, atol=1e-11)


def test_the_prompt_liver_is_the_limit_of_a_vanishing_lag() -> None:
    lag, prompt = body("hepatic-lag"), body("prompt-liver")
    shared = [90.0, 200.0, 12000.0]
    settled = run(lag.rates, [*shared, 90.0, 90.0, 90.0, 216.0, 0.0, *NOMINAL.values(), 1.0])
    direct = run(prompt.rates, [*shared, 216.0, 0.0, *prompt.card.nominal.values(), 1.0])
    np.testing.assert_allclose(settled[:3], direct, rtol=1e-14)


def test_an_unknown_symbol_is_named() -> None:
    with pytest.raises(KeyError, match="'mystery'"):
        evaluator("broken", ["x"], [name("x") * name("mystery")])


def test_an_unknown_model_suggests_the_nearest() -> None:
    with pytest.raises(StudyError, match="did you mean 'hepatic-lag'"):
        body("hepatic-lga")


def test_expressions_read_as_written() -> None:
    x = name("x")
    assert repr(2 * x + exp(x) / log(x)) == "add(mul(2.0, x), div(exp(x), log(x)))"
    assert repr(x**2) == "mul(x, x)"
    assert repr(1 - x) == "add(1.0, mul(-1.0, x))"
    assert run(evaluator("p", ["x"], [x**-2, 3 - x, 1 / x]), [2.0]) == [0.25, 1.0, 0.5]
