"""Regimes and limit cycles against published values, textbook oscillators and brute-force integration."""

import ctypes

import numpy as np
import pytest
from scipy.integrate import solve_ivp
from scipy.optimize import brentq
from sksundae.cvode import CVODE

from cohort.compiled import compile_program
from cohort.measure.cycle import Held, displaced, find_orbits
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


def orbits_of_random_bodies(n: int, seed: int):  # type: ignore[no-untyped-def]
    """(subjects, their orbits, their cycles) of the oscillators among n random bodies."""
    parameters = random_parameters(n, 0.15, seed)
    Gin, none = np.full(n, 216.0), np.zeros(n)
    rest = at_rest(BODY, parameters, Gin, none)
    rows = np.flatnonzero(rest.eigenvalues[:, 0].real > 1e-7)
    subjects = Held(BODY, parameters, Gin, none, rest).take(rows)
    orbits = find_orbits(subjects, displaced(subjects))
    assert orbits.found.all()
    return subjects, orbits, cycles(BODY, subjects.parameters, subjects.Gin, subjects.Iin)


def by_events(subjects, orbits, i: int):  # type: ignore[no-untyped-def]
    """From a state of the orbit, two turns by DOP853: period, glucose extremes, insulin extremes, lag."""
    field = rates_of(subjects.parameters[i], 216.0)

    def flat(state: int, direction: float):  # type: ignore[no-untyped-def]
        def event(t, x):  # type: ignore[no-untyped-def]
            return field(t, x)[state]

        event.direction = direction
        return event

    events = [flat(2, -1.0), flat(2, 1.0), flat(0, -1.0), flat(0, 1.0)]
    out = solve_ivp(field, (0, 2.3 * orbits.period[i]), orbits.state[i], method="DOP853", rtol=1e-12, atol=1e-9,
                    events=events)  # fmt: skip
    highs, _, crests, _ = out.t_events
    Vp, Vg = subjects.parameters[i, 0], subjects.parameters[i, 2]
    return (
        highs[1] - highs[0], out.y_events[1][0][2] / (10 * Vg), out.y_events[0][0][2] / (10 * Vg),
        out.y_events[3][0][0] / Vp, out.y_events[2][0][0] / Vp, (crests[0] - highs[0]) % (highs[1] - highs[0]),
    )  # fmt: skip


def test_two_hundred_random_orbits_against_dop853_with_events() -> None:
    subjects, orbits, found = orbits_of_random_bodies(560, 21)
    assert len(found.period) >= 200
    for i in range(len(found.period)):
        period, low, high, trough, crest, lag = by_events(subjects, orbits, i)
        if found.growth[i] > 1e-5:
            assert found.period[i] == pytest.approx(period, rel=1e-6)
        assert found.turn[i, 0, :2] == pytest.approx([low, high], rel=1e-6)
        assert found.turn[i, 1, :2] == pytest.approx([trough, crest], rel=1e-6)
        assert (found.turn[i, 1, 3] - found.turn[i, 0, 3]) % found.period[i] == pytest.approx(lag, abs=1e-3)
        swing = found.turn[i, 0, 1] - found.turn[i, 0, 0]
        assert swing == pytest.approx(high - low, rel=1e-5, abs=1e-6)


def test_fifty_orbits_close_under_sundials() -> None:
    subjects, orbits, _ = orbits_of_random_bodies(160, 22)
    assert len(orbits.period) >= 50
    for i in range(50):
        field = rates_of(subjects.parameters[i], 216.0)
        solver = CVODE(into(field), method="Adams", rtol=1e-11, atol=1e-8, max_num_steps=100_000)
        out = solver.solve(np.array([0.0, orbits.period[i]]), orbits.state[i])
        np.testing.assert_allclose(out.y[-1], orbits.state[i], rtol=1e-6)


def into(field):  # type: ignore[no-untyped-def]
    """A field as SUNDIALS takes it: f(t, x, out)."""

    def write(t, x, out):  # type: ignore[no-untyped-def]
        out[:] = field(t, x)

    return write


def test_a_settled_integration_ends_on_the_orbit() -> None:
    """Brute force: from far off, integrate until the transient is gone; the orbit found is where one ends."""
    subjects, _, found = orbits_of_random_bodies(120, 23)
    strong = np.flatnonzero(found.growth > 2e-3)[:8]
    assert len(strong) == 8
    for i in strong:
        start = subjects.rest.states[i].copy()
        start[2] *= 1.3
        field = rates_of(subjects.parameters[i], 216.0)
        settle = 40.0 * found.period[i]
        out = solve_ivp(field, (0, settle), start, method="DOP853", rtol=1e-11, atol=1e-8, dense_output=True)
        late = out.sol(np.linspace(settle - 2 * found.period[i], settle, 40_001))[2] / (10 * subjects.parameters[i, 2])
        assert found.turn[i, 0, :2] == pytest.approx([late.min(), late.max()], rel=1e-6)


def test_a_second_attractor_is_found_beside_a_stable_equilibrium() -> None:
    # r' = mu r + r^3 - r^5 about (2, 0), mu just below 0: stable at rest, and an orbit of radius^2 = 1/2 + sqrt(1/4 + mu)
    mu = -5e-4
    found = toys.cycles_of(toys.toy("shifted", toys.shifted_subcritical, mu=mu))
    assert REGIMES[found.regime[0]] == "bistable"
    assert found.bistable_searched[0]
    radius = np.sqrt(0.5 + np.sqrt(0.25 + mu))
    assert found.turn[0, 0, :2] == pytest.approx([2 - radius, 2 + radius], rel=1e-8)
    assert found.period[0] == pytest.approx(2 * np.pi, rel=1e-8)
    supercritical = toys.cycles_of(toys.toy("shifted", toys.shifted_supercritical, mu=mu))
    assert REGIMES[supercritical.regime[0]] == "damped"
    assert supercritical.bistable_searched[0]


def test_the_subcritical_orbit_at_its_published_radius() -> None:
    # exact: at mu = -0.1 the stable orbit has r = .9420, the unstable one .3357
    body_ = toys.toy("subcritical", toys.subcritical, mu=-0.1)
    parameters = np.array([[-0.1, 1.0]] * 2)
    none = np.zeros(2)
    subjects = Held(body_, parameters, none, none, at_rest(body_, parameters, none, none))
    orbits = find_orbits(subjects, np.array([[0.5, 0.0], [0.3, 0.0]]), (6,))
    assert orbits.found.tolist() == [True, False]
    assert np.hypot(*orbits.state[0]) == pytest.approx(0.9420, abs=5e-5)


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
