"""Regimes and limit cycles against published values, textbook oscillators and brute-force integration."""

import ctypes

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from cohort.compiled import compile_program
from cohort.measure.regime import BISTABLE, DAMPED, FAILED, QUIET, SUSTAINED, UNDECIDED, cycles
from cohort.model.body import body
from cohort.model.rest import at_rest
from cohort.quantities import REGIMES
from tests.measure import toys

BODY = body("hepatic-lag")
NOMINAL = np.array([*BODY.card.nominal.values(), 1.0])


def nominal_cycles(*Gin: float):  # type: ignore[no-untyped-def]
    return cycles(BODY, np.tile(NOMINAL, (len(Gin), 1)), np.array(Gin), np.zeros(len(Gin)))


@pytest.mark.parametrize(
    ("Gin", "period", "glucose", "insulin", "lag"),
    [
        # High-accuracy solutions of the form of BIOMD0000000372, two independent integrators agreeing
        (216.0, 109.664669617, (108.232177, 142.512052, 124.100277), (18.696133, 43.293403, 28.907006), 4.749492),
        (108.0, 117.249942305, (108.388464, 128.419557, 118.508121), (17.844595, 29.515735, 23.328992), 5.335035),
    ],
)
def test_the_nominal_limit_cycle(Gin, period, glucose, insulin, lag) -> None:  # type: ignore[no-untyped-def]
    found = nominal_cycles(Gin)
    assert REGIMES[found.regime[0]] == "sustained"
    assert found.period[0] == pytest.approx(period, rel=1e-9)
    np.testing.assert_allclose(found.turn[0, 0, :3], glucose, rtol=1e-8)
    np.testing.assert_allclose(found.turn[0, 1, :3], insulin, rtol=3e-8)
    assert (found.turn[0, 1, 3] - found.turn[0, 0, 3]) % found.period[0] == pytest.approx(lag, abs=1e-5)
    assert found.error[0] < 1e-8


@pytest.mark.parametrize(
    ("mu", "period", "amplitude"),
    [
        # van der Pol: computed to high accuracy by two methods; at mu 5 the eigenvalues are real, yet it oscillates
        (0.1, 6.287111272, 2.000103980),
        (1.0, 6.663286859, 2.008619861),
        (5.0, 11.612230667, 2.021508062),
    ],
)
def test_van_der_pol(mu: float, period: float, amplitude: float) -> None:
    found = toys.cycles_of(toys.toy("vdp", toys.van_der_pol, mu=mu))
    assert found.regime[0] == SUSTAINED
    assert found.period[0] == pytest.approx(period, rel=1e-8)
    low, high = found.turn[0, 0, :2]
    assert (high, -low) == (pytest.approx(amplitude, rel=1e-8), pytest.approx(amplitude, rel=1e-8))
    assert np.isnan(found.linear_period[0]) == (mu > 2)


@pytest.mark.parametrize(("B", "period", "linear"), [(2.1, 6.322066, 6.2911), (3.0, 7.156920, 7.2552)])
def test_brusselator(B: float, period: float, linear: float) -> None:
    # Hopf point at B = 2 for A = 1 (exact); periods computed to the digits shown
    found = toys.cycles_of(toys.toy("brusselator", toys.brusselator, A=1.0, B=B))
    assert found.regime[0] == SUSTAINED
    assert found.period[0] == pytest.approx(period, rel=2e-7)
    assert found.linear_period[0] == pytest.approx(linear, rel=2e-5)


def test_brusselator_below_its_hopf_point_is_damped() -> None:
    found = toys.cycles_of(toys.toy("brusselator", toys.brusselator, A=1.0, B=1.9))
    assert found.regime[0] == DAMPED


def test_subcritical_normal_form_is_stable_at_rest_far_from_its_fold() -> None:
    # r' = mu r + r^3 - r^5 has its fold at mu = -1/4 (exact): at -0.3 there is no orbit, at +0.1 only an orbit
    below = toys.cycles_of(toys.toy("subcritical", toys.subcritical, mu=-0.3))
    assert below.regime[0] == DAMPED or below.regime[0] == QUIET
    above = toys.cycles_of(toys.toy("subcritical", toys.subcritical, mu=0.1))
    assert above.regime[0] == SUSTAINED
    radius = np.sqrt(0.5 + np.sqrt(0.25 + 0.1))
    assert above.turn[0, 0, 1] == pytest.approx(radius, rel=1e-8)
    assert above.period[0] == pytest.approx(2 * np.pi, rel=1e-8)


def rates_of(parameters: np.ndarray, Gin: float):  # type: ignore[no-untyped-def]
    call = ctypes.CFUNCTYPE(None, ctypes.c_void_p, ctypes.c_void_p)(compile_program(BODY.rates))
    source = np.concatenate([np.zeros(6), [Gin, 0.0], parameters])

    def field(t, x):  # type: ignore[no-untyped-def]
        source[:6] = x
        out = np.empty(6)
        call(source.ctypes.data, out.ctypes.data)
        return out

    return field


def random_parameters(n: int, cv: float, seed: int) -> np.ndarray:
    sigma = np.sqrt(np.log(1 + cv * cv))
    values = NOMINAL * np.exp(sigma * np.random.default_rng(seed).normal(size=(n, len(NOMINAL))))
    values[:, -1] = 1.0
    return values


def settled_extremes(parameters: np.ndarray, Gin: float, orbit, period: float):  # type: ignore[no-untyped-def]
    """Period and glucose extremes by DOP853 with events, from 60 cycles out."""
    field = rates_of(parameters, Gin)

    def peak(t, x):  # type: ignore[no-untyped-def]
        return field(t, x)[2]

    peak.direction = -1.0
    out = solve_ivp(field, (0, 14 * period), orbit, method="DOP853", rtol=1e-12, atol=1e-9, events=peak)
    times, states = out.t_events[0], np.array(out.y_events[0])
    return np.diff(times)[-1], states[-1, 2] / (10 * parameters[2]), times, states


def test_periods_of_two_hundred_random_bodies_against_dop853_with_events() -> None:
    parameters = random_parameters(520, 0.15, 21)
    Gin = np.full(len(parameters), 216.0)
    found = cycles(BODY, parameters, Gin, np.zeros(len(parameters)))
    rest = at_rest(BODY, parameters, Gin, np.zeros(len(parameters)))
    strong = np.flatnonzero((found.regime == SUSTAINED) & (found.growth > 1e-3))[:200]
    assert len(strong) >= 100
    for i in strong[:40]:
        start = rest.states[i].copy()
        start[2] *= 1.08
        cycles_needed = 12.0 / found.growth[i] / found.period[i] / 2
        field = rates_of(parameters[i], 216.0)
        settle = min(max(cycles_needed, 12.0), 60.0) * found.period[i]
        near = solve_ivp(field, (0, settle), start, method="DOP853", rtol=1e-12, atol=1e-9).y[:, -1]
        period, high, _, _ = settled_extremes(parameters[i], 216.0, near, found.period[i])
        assert found.period[i] == pytest.approx(period, rel=1e-6)
        assert found.turn[i, 0, 1] == pytest.approx(high, rel=1e-6)


def test_the_orbit_closes_under_an_independent_integrator_for_every_body() -> None:
    """One turn of the orbit by DOP853 comes back to where it began, near the border and far from it."""
    from cohort.measure.cycle import Held, displaced, find_orbits

    parameters = random_parameters(700, 0.15, 22)
    Gin = np.full(len(parameters), 216.0)
    rest = at_rest(BODY, parameters, Gin, np.zeros(len(parameters)))
    rows = np.flatnonzero(rest.eigenvalues[:, 0].real > 1e-7)
    subjects = Held(BODY, parameters, Gin, np.zeros(len(parameters)), rest).take(rows)
    orbits = find_orbits(subjects, displaced(subjects))
    assert orbits.found.all()
    assert len(rows) >= 200
    for i in range(len(rows)):
        out = solve_ivp(
            rates_of(subjects.parameters[i], 216.0), (0, orbits.period[i]), orbits.state[i],
            method="DOP853", rtol=1e-11, atol=1e-9,
        )  # fmt: skip
        np.testing.assert_allclose(out.y[:, -1], orbits.state[i], rtol=2e-8)


def test_amplitude_grows_as_the_square_root_next_to_the_border() -> None:
    td = 23.542166 + np.array([0.02, 0.04, 0.08])
    parameters = np.tile(NOMINAL, (3, 1))
    parameters[:, BODY.parameters.index("td")] = td
    found = cycles(BODY, parameters, np.full(3, 216.0), np.zeros(3))
    assert (found.regime == SUSTAINED).all()
    swing = found.turn[:, 0, 1] - found.turn[:, 0, 0]
    np.testing.assert_allclose(swing / swing[0], np.sqrt([1, 2, 4]), rtol=2e-3)  # Hopf's theorem
    drift = found.period - found.linear_period
    np.testing.assert_allclose(drift / drift[0], [1, 2, 4], rtol=5e-3)


def test_regimes_at_the_ends_of_the_window() -> None:
    found = nominal_cycles(0.0, 98.9, 99.0, 253.9, 254.0, 420.0)
    assert [REGIMES[r] for r in found.regime] == ["damped", "damped", "sustained", "sustained", "damped", "damped"]
    assert np.isnan(found.period[[0, 1, 4, 5]]).all()
    assert np.isfinite(found.period[[2, 3]]).all()


def test_a_body_on_the_border_is_undecided_and_a_broken_one_failed() -> None:
    from scipy.optimize import brentq

    edge = brentq(lambda g: nominal_cycles(g).growth[0], 98.0, 100.0, xtol=1e-12)
    assert REGIMES[nominal_cycles(edge).regime[0]] == "undecided"
    broken = NOMINAL.copy()
    broken[0] = np.nan
    assert cycles(BODY, broken[None], np.array([216.0]), np.zeros(1)).regime[0] == FAILED


def test_subjects_do_not_see_each_other() -> None:
    parameters = random_parameters(40, 0.2, 23)
    Gin, none = np.full(40, 216.0), np.zeros(40)
    together = cycles(BODY, parameters, Gin, none)
    order = np.random.default_rng(0).permutation(40)
    shuffled = cycles(BODY, parameters[order], Gin, none)
    np.testing.assert_array_equal(shuffled.regime, together.regime[order])
    np.testing.assert_array_equal(shuffled.period, together.period[order])
    np.testing.assert_array_equal(shuffled.turn, together.turn[order])


def test_without_the_hepatic_lag_nothing_oscillates() -> None:
    # Sturis et al., Am J Physiol 1991;260:E801-E809 (abstract): the delay is necessary
    for model in ("prompt-liver", "steady-liver"):
        found = body(model)
        parameters = np.tile([*found.card.nominal.values(), 1.0], (5, 1))
        regimes = cycles(found, parameters, np.array([54.0, 108.0, 162.0, 216.0, 300.0]), np.zeros(5)).regime
        assert not np.isin(regimes, (SUSTAINED, BISTABLE, UNDECIDED)).any()
