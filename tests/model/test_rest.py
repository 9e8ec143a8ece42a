"""Bodies at rest against published and independently computed values."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import brentq

from cohort.model.body import body
from cohort.model.rest import at_rest, spectrum
from cohort.program import run

BODY = body("hepatic-lag")
NOMINAL = np.array([*BODY.card.nominal.values(), 1.0])
TD = BODY.parameters.index("td")


def rest(Gin: float, **changed: float):  # type: ignore[no-untyped-def]
    parameters = NOMINAL.copy()
    for symbol, number in changed.items():
        parameters[BODY.parameters.index(symbol)] = number
    return at_rest(BODY, parameters[None], np.array([Gin]), np.zeros(1))


@pytest.mark.parametrize(
    ("Gin", "states", "eigenvalues"),
    [
        # High-accuracy solution of the form of BIOMD0000000372, two independent methods agreeing
        (
            216.0,
            (84.9047041699, 200.8498378213, 12546.3736042415),
            (0.002225471557 + 0.059253095985j, -0.033024400774, -0.122076042309 + 0.071473661522j, -0.255140714857),
        ),
        (
            108.0,
            (70.3767377959, 166.4826055386, 11940.8829080884),
            (0.000675219992 + 0.054512241316j, -0.032854290640, -0.120511550225 + 0.067539112223j, -0.252212124574),
        ),
    ],
)
def test_nominal_equilibrium_and_eigenvalues(Gin, states, eigenvalues) -> None:  # type: ignore[no-untyped-def]
    found = rest(Gin)
    np.testing.assert_allclose(found.states[0, :3], states, rtol=1e-11)
    np.testing.assert_allclose(found.states[0, 3:], states[0], rtol=1e-11)
    upper = found.eigenvalues[0][found.eigenvalues[0].imag >= 0]
    np.testing.assert_allclose(upper, eigenvalues, rtol=1e-8, atol=1e-11)


@pytest.mark.parametrize(
    ("symbol", "low", "high", "edge"),
    [
        # Edges of the windows of oscillation: bisection on the growth rate at high accuracy, form of BIOMD0000000372
        ("Gin", 60.0, 180.0, 98.963057),
        ("Gin", 180.0, 300.0, 253.939820),
        ("td", 10.0, 36.0, 23.542166),
        ("td", 36.0, 120.0, 69.927050),
    ],
)
def test_windows_of_oscillation(symbol: str, low: float, high: float, edge: float) -> None:
    def growth(x: float) -> float:
        found = rest(x) if symbol == "Gin" else rest(216.0, td=x)
        return float(found.eigenvalues[0, 0].real)

    assert brentq(growth, low, high, xtol=1e-9) == pytest.approx(edge, rel=1e-6, abs=1e-6)


def test_the_equilibrium_does_not_depend_on_the_delay() -> None:
    np.testing.assert_array_equal(rest(216.0, td=5.0).states, rest(216.0, td=500.0).states)


@pytest.mark.parametrize("model", ["hepatic-lag", "prompt-liver", "steady-liver"])
def test_random_bodies_are_truly_at_rest_and_their_spectra_agree_with_lapack(model: str) -> None:
    found = body(model)
    rng = np.random.default_rng(2)
    nominal = np.array([*found.card.nominal.values(), 1.0])
    parameters = nominal * np.exp(0.3 * rng.normal(size=(300, len(nominal))))
    Gin, Iin = rng.uniform(0, 400, 300), rng.uniform(0, 20, 300)
    at = at_rest(found, parameters, Gin, Iin)
    for i in range(0, 300, 30):
        rates = run(found.rates, [*at.states[i], Gin[i], Iin[i], *parameters[i]])
        assert np.abs(rates / at.states[i]).max() < 1e-13
    theirs = np.linalg.eigvals(at.jacobians)
    order = np.lexsort((-theirs.imag, -theirs.real))
    theirs = np.take_along_axis(theirs, order, axis=1)
    np.testing.assert_allclose(at.eigenvalues[:, 0], theirs[:, 0], atol=1e-11)
    # the others may be nearly double, where no method has more than half the digits: each must be exact for a
    # matrix within rounding of the given one, which is what its smallest singular value says
    for values, matrix in zip(at.eigenvalues, at.jacobians, strict=True):
        for value in values:
            gap = np.linalg.svd(matrix - value * np.eye(len(matrix)), compute_uv=False)[-1]
            assert gap < 1e-14 * np.linalg.norm(matrix) * 10


@settings(max_examples=60)
@given(st.integers(1, 9), st.integers(0, 10**6))
def test_spectrum_of_any_small_matrix(size: int, seed: int) -> None:
    rng = np.random.default_rng(seed)
    matrix = rng.normal(size=(size, size)) * 10.0 ** rng.integers(-2, 3)
    values = np.empty(size, np.complex128)
    spectrum(matrix, values)
    theirs = np.linalg.eigvals(matrix)
    assert values[0].real == pytest.approx(theirs.real.max(), rel=1e-8, abs=1e-8 * np.abs(theirs).max())
    assert values.sum().real == pytest.approx(np.trace(matrix), abs=1e-8 * np.abs(theirs).max() * size)


@pytest.mark.parametrize("poison", [np.nan, np.inf, 0.0])
def test_a_body_without_an_equilibrium_says_so_and_its_neighbours_do_not_notice(poison: float) -> None:
    parameters = np.tile(NOMINAL, (3, 1))
    parameters[1, BODY.parameters.index("Vg")] = poison
    found = at_rest(BODY, parameters, np.full(3, 216.0), np.zeros(3))
    alone = rest(216.0)
    assert np.isnan(found.states[1]).all() and np.isnan(found.eigenvalues[1]).all()
    for i in (0, 2):
        np.testing.assert_array_equal(found.states[i], alone.states[0])
        np.testing.assert_array_equal(found.eigenvalues[i], alone.eigenvalues[0])


def test_steady_liver_releases_what_the_nominal_body_releases_at_rest() -> None:
    nominal = at_rest(BODY, NOMINAL[None], np.array([216.0]), np.zeros(1))
    steady = body("steady-liver")
    held = at_rest(steady, np.array([[*steady.card.nominal.values(), 1.0]]), np.array([216.0]), np.zeros(1))
    np.testing.assert_allclose(held.states[0], nominal.states[0, :3], rtol=1e-12)


def test_a_body_whose_newton_steps_circle_between_two_points_is_solved_all_the_same() -> None:
    own = {"Vp": 3.863513, "Vi": 12.280119, "Vg": 11.858479, "E": 0.210329, "tp": 4.593237, "ti": 103.850893,
           "td": 43.29733, "Rm": 300.681801, "a1": 320.27618, "C1": 1637.601335, "C4": 171.732341, "Rg": 163.507038,
           "C5": 24.981052}  # fmt: skip
    found = rest(0.0, **own)
    place = [*found.states[0], 0.0, 0.0, *(own.get(p, NOMINAL[i]) for i, p in enumerate(BODY.parameters))]
    assert np.abs(run(BODY.rates, place)).max() < 1e-10


def test_every_body_within_wide_laws_has_an_equilibrium() -> None:
    rng = np.random.default_rng(5)
    n = 30_000
    parameters = NOMINAL * np.exp(0.3 * rng.standard_normal((n, len(NOMINAL))))
    parameters[:, -1] = 1.0
    um, u0 = (BODY.parameters.index(p) for p in ("Um", "U0"))
    parameters[:, um] = np.maximum(parameters[:, um], parameters[:, u0] + 1.0)
    found = at_rest(BODY, parameters, rng.choice([0.0, 54.0, 180.0, 400.0], n), np.zeros(n))
    assert np.isfinite(found.states).all() and np.isfinite(found.eigenvalues).all()
