"""Time courses against two trusted integrators, on random bodies and every kind of input."""

import ctypes

import numpy as np
import pytest
from scipy.integrate import solve_ivp
from sksundae.cvode import CVODE

from cohort.compiled import compile_program
from cohort.model.body import body
from cohort.model.inputs import People
from cohort.model.protocol import Arm, AtEquilibrium, AtState, Bolus, Constant, Meal, OnOff, Sine, Steps
from cohort.simulate.run import courses, prepare

BODY = body("hepatic-lag")
NOMINAL = np.array(list(BODY.card.nominal.values()))
VG = BODY.card.parameters.index("Vg")
START = AtState({"Ip": 200.0, "Ii": 200.0, "G": 12000.0, "x1": 60.0, "x2": 60.0, "x3": 60.0})
SEEN = ("glucose_mg_dl", "insulin_mu_l")


def random_bodies(n: int, cv: float, seed: int) -> np.ndarray:
    sigma = np.sqrt(np.log(1 + cv * cv))
    return NOMINAL * np.exp(sigma * np.random.default_rng(seed).normal(size=(n, len(NOMINAL))))


def nobody_weighs(n: int) -> People:
    return People(*(np.full(n, np.nan) for _ in range(4)))


def ours(values: np.ndarray, arm: Arm, grid: np.ndarray) -> np.ndarray:
    out = np.empty((len(values), len(SEEN), len(grid)))
    prepared = prepare(BODY, values, nobody_weighs(len(values)), arm, SEEN)
    for rows, found in courses(prepared, arm.duration_min):
        assert (found.status == -1).all()
        out[rows] = found.sample(grid)
    return out


def rates_function(secretion: float = 1.0):  # type: ignore[no-untyped-def]
    """The body's rates as a fast Python call: f(states, Gin, Iin, parameters) -> rates."""
    source = np.full(29, secretion)
    call = ctypes.CFUNCTYPE(None, ctypes.c_void_p, ctypes.c_void_p)(compile_program(BODY.rates))

    def rates(x: np.ndarray, Gin: float, Iin: float, parameters: np.ndarray) -> np.ndarray:
        source[:6], source[6], source[7], source[8:28] = x, Gin, Iin, parameters
        out = np.empty(6)
        call(source.ctypes.data, out.ctypes.data)
        return out

    return rates


def state_at_start(values: np.ndarray, arm: Arm) -> np.ndarray:
    return prepare(BODY, values, nobody_weighs(len(values)), arm, SEEN).x0


def test_two_hundred_random_bodies_under_a_constant_infusion() -> None:
    arm = Arm("constant", 1440.0, start=START, glucose=(Constant(216.0),))
    values, grid = random_bodies(200, 0.15, 11), np.arange(0.0, 1441.0, 10.0)
    found = ours(values, arm, grid)
    rates = rates_function()
    x0 = state_at_start(values[:1], arm)[0]
    for i, parameters in enumerate(values):
        reference = solve_ivp(
            lambda t, x, p=parameters: rates(x, 216.0, 0.0, p),
            (0, 1440), x0, method="DOP853", rtol=1e-12, atol=1e-9, t_eval=grid,
        )  # fmt: skip
        np.testing.assert_allclose(found[i, 0], reference.y[2] / (10 * parameters[VG]), rtol=1e-6)
        np.testing.assert_allclose(found[i, 1], reference.y[0] / parameters[0], rtol=5e-6)


def test_sundials_agrees_on_random_bodies() -> None:
    arm = Arm("constant", 1440.0, start=START, glucose=(Constant(216.0),))
    values, grid = random_bodies(200, 0.3, 12), np.arange(0.0, 1441.0, 10.0)
    found = ours(values, arm, grid)
    rates = rates_function()
    x0 = state_at_start(values[:1], arm)[0]
    for i, parameters in enumerate(values):
        solver = CVODE(into(rates, parameters), method="BDF", rtol=1e-11, atol=1e-9, max_num_steps=200_000)
        reference = solver.solve(grid, x0)
        np.testing.assert_allclose(found[i, 0], reference.y[:, 2] / (10 * parameters[VG]), rtol=1e-6)


def into(rates, parameters: np.ndarray):  # type: ignore[no-untyped-def]
    """The field as SUNDIALS takes it: f(t, x, out)."""

    def field(t, x, out):  # type: ignore[no-untyped-def]
        out[:] = rates(x, 216.0, 0.0, parameters)

    return field


def one_meal(t: float, time: float, amount: float, a: float, stages: int) -> float:
    tau = t - time
    return amount * np.exp(-tau / a) / a if stages == 1 else amount * tau * np.exp(-tau / a) / a**2


def glucose_rate(kind: str, t: float, middle: float) -> float:
    """The inputs below written a second time, on the stretch whose middle is given."""
    if kind == "meals":
        total = 0.0
        for time in (300.0, 1740.0):
            total += one_meal(t, time, 60_000.0, 40.0, 2) if middle > time else 0.0
        return total + (one_meal(t, 720.0, 80_000.0, 60.0, 1) if middle > 720.0 else 0.0)
    if kind == "waves":
        return 100 * (1 + 0.33 * np.sin(2 * np.pi * t / 120)) + 60 * (1 + 0.5 * np.sin(2 * np.pi * t / 77 + 1.0))
    if kind == "on-off":
        return 300.0 if middle % 200.0 < 80.0 else 0.0
    return {True: 120.0, False: 240.0}[middle < 600.0]


CASES: dict[str, tuple[Arm, list[float]]] = {
    "meals": (
        Arm(
            "meals", 2880.0,
            glucose=(Meal(300.0, 60_000.0, 40.0, stages=2, repeat_min=1440.0), Meal(720.0, 80_000.0, 60.0)),
        ),
        [0, 300, 720, 1740, 2880],
    ),
    "waves": (
        Arm("waves", 1440.0, start=AtEquilibrium(0.05), glucose=(Sine(100.0, 0.33, 120.0), Sine(60.0, 0.5, 77.0, 1.0))),
        [0, 1440],
    ),
    "on-off": (
        Arm("on-off", 1440.0, glucose=(OnOff(300.0, 200.0, 0.4),)),
        sorted({*range(0, 1440, 200), *range(80, 1440, 200), 1440}),
    ),
    "steps": (Arm("steps", 1440.0, glucose=(Steps((0.0, 600.0), (120.0, 240.0)),)), [0, 600, 1440]),
}  # fmt: skip


@pytest.mark.parametrize("kind", list(CASES))
def test_every_input_restarted_by_hand_at_its_jumps(kind: str) -> None:
    arm, stops = CASES[kind]
    values, grid = random_bodies(12, 0.2, 13), np.arange(0.0, arm.duration_min + 1, 5.0)
    found, x0 = ours(values, arm, grid), state_at_start(values, arm)
    rates = rates_function()
    for i, parameters in enumerate(values):
        x = x0[i]
        for begin, end in zip(stops[:-1], stops[1:], strict=True):
            inside = grid[(grid > begin) & (grid < end)]
            reference = solve_ivp(
                lambda t, x, p=parameters, m=(begin + end) / 2: rates(x, glucose_rate(kind, t, m), 0.0, p),
                (begin, end), x, method="DOP853", rtol=1e-12, atol=1e-9, t_eval=np.append(inside, end),
            )  # fmt: skip
            here = np.searchsorted(grid, inside)
            np.testing.assert_allclose(found[i, 0, here], reference.y[2, :-1] / (10 * parameters[VG]), rtol=1e-6)
            x = reference.y[:, -1]


def test_boluses_and_insulin_infusion() -> None:
    arm = Arm(
        "doses", 600.0, glucose=(Constant(100.0), Bolus(200.0, 5000.0)), insulin=(Constant(3.0), Bolus(300.0, 300.0))
    )
    values, grid = random_bodies(25, 0.2, 14), np.arange(0.0, 601.0, 5.0)
    found, x0 = ours(values, arm, grid), state_at_start(values, arm)
    rates = rates_function()
    for i, parameters in enumerate(values):
        x = x0[i].copy()
        for begin, end in ((0, 200), (200, 300), (300, 600)):
            x[2] += 5000.0 * (begin == 200)
            x[0] += 300.0 * (begin == 300)
            inside = grid[(grid > begin) & (grid < end)]
            reference = solve_ivp(
                lambda t, x, p=parameters: rates(x, 100.0, 3.0, p),
                (begin, end), x, method="DOP853", rtol=1e-12, atol=1e-9, t_eval=np.append(inside, end),
            )  # fmt: skip
            here = np.searchsorted(grid, inside)
            np.testing.assert_allclose(found[i, 0, here], reference.y[2, :-1] / (10 * parameters[VG]), rtol=1e-6)
            x = reference.y[:, -1]


def test_insulin_that_fades_away_is_followed_to_the_end() -> None:
    """Secretion suppressed and no insulin given: amounts fall by dozens of orders of magnitude, use tends to U0."""
    arm = Arm("suppressed", 2880.0, glucose=(Constant(50.0),), secretion=0.0)
    values, grid = random_bodies(12, 0.2, 15), np.arange(0.0, 2881.0, 60.0)
    found, x0 = ours(values, arm, grid), state_at_start(values, arm)
    rates = rates_function(secretion=0.0)
    for i, parameters in enumerate(values):
        reference = solve_ivp(
            lambda t, x, p=parameters: rates(x, 50.0, 0.0, p),
            (0, 1440), x0[i], method="DOP853", rtol=1e-12, atol=1e-30, t_eval=grid[grid <= 1440],
        )  # fmt: skip
        n = len(reference.t)
        np.testing.assert_allclose(found[i, 0, :n], reference.y[2] / (10 * parameters[VG]), rtol=1e-6)
        np.testing.assert_allclose(found[i, 1, :n], reference.y[0] / parameters[0], rtol=1e-5)
    assert (found[:, 1, -1] > 0).all() and (found[:, 1, -1] < 1e-6).all()
