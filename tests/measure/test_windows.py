"""Windows and meals: published and exact examples, and dense numerical integration as an independent method."""

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from scipy.optimize import brentq

from cohort.measure.meals import ringing
from cohort.measure.outcomes import outcomes
from cohort.measure.roots import cross, roots, turn
from cohort.measure.scan import extremes, mean_between, scan, sd_between
from cohort.measure.turning import NEAR, sign_changes, turning_points
from cohort.measure.windows import above, excursions, insulin_window, mage
from cohort.model.body import body
from cohort.model.inputs import People
from cohort.model.protocol import Arm, AtEquilibrium, Bolus, Clamp, Constant, Meal, OnOff
from cohort.model.rest import at_rest
from cohort.model.taylor import SUMMARY
from cohort.program import Builder, run
from cohort.simulate.people import simulate, simulate_values

BODY = body("hepatic-lag")
NOMINAL = np.array(list(BODY.card.nominal.values()))
ORDER = 12


def summaries_of(a: np.ndarray) -> np.ndarray:
    """SUMMARY of each row, by plain numpy."""
    k = np.arange(a.shape[1])
    x = np.linspace(0, 1, 4001)
    values = np.array([np.polynomial.polynomial.polyval(x, row) for row in a])
    out = np.empty((len(a), len(SUMMARY)))
    out[:, 0] = (k * a).sum(axis=1)
    out[:, 1] = (k[2:] * np.abs(a[:, 2:])).sum(axis=1)
    out[:, 2] = (k[3:] * (k[3:] - 1) * np.abs(a[:, 3:])).sum(axis=1)
    out[:, 3] = np.abs(a[:, 1:]).sum(axis=1)
    out[:, 4] = (a / (k + 1)).sum(axis=1)
    out[:, 5] = np.trapezoid((values - a[:, :1]) ** 2, x, axis=1)
    out[:, 6] = a.sum(axis=1)
    return out


def course_of(function, times: np.ndarray):  # type: ignore[no-untyped-def]
    """A course whose steps are Taylor polynomials of `function(t, k)`, the k-th derivative, over k!."""
    start, h = times[:-1], np.diff(times)
    a = np.array([[function(t, k) * d**k for k in range(ORDER + 1)] for t, d in zip(start, h, strict=True)])
    return start.copy(), h.copy(), np.ascontiguousarray(a), summaries_of(a)


def lines(times: list[float], values: list[float]):  # type: ignore[no-untyped-def]
    """A course of straight lines through points."""
    start, h = np.array(times[:-1]), np.diff(times)
    a = np.zeros((len(h), ORDER + 1))
    a[:, 0], a[:, 1] = values[:-1], np.diff(values)
    return start, h, a, summaries_of(a)


def sinusoid(mean: float, amplitude: float, period: float, end: float):  # type: ignore[no-untyped-def]
    w = 2 * np.pi / period
    factorial = np.cumprod([1, *range(1, ORDER + 1)])

    def term(t: float, k: int) -> float:
        return float((mean if k == 0 else 0) + amplitude * w**k * np.sin(w * t + k * np.pi / 2) / factorial[k])

    return course_of(term, np.linspace(0, end, int(end / 8) + 1))


# ---- published and exact examples ---------------------------------------------------------------------------------


def test_incremental_area_of_the_fao_who_example() -> None:
    # FAO Food and Nutrition Paper 66 (1998), carbohydrates in human nutrition: mmol/L at 0..120 min, published as 114
    times = [0.0, 15, 30, 45, 60, 90, 120]
    read = scan(roots(ORDER + 1), *lines(times, [4.3, 6.3, 7.9, 5.3, 4.1, 4.6, 4.9]))
    assert above(read, 0.0, 120.0, 4.3)[1] == pytest.approx(113.95, abs=0.005)


def test_time_above_by_exact_crossing() -> None:
    # exact: 120, 200, 160 mg/dL at 0, 60, 120 min are above 180 for 15 + 30 min
    read = scan(roots(ORDER + 1), *lines([0.0, 60, 120], [120.0, 200, 160]))
    assert above(read, 0.0, 120.0, 180.0)[0] == pytest.approx(45.0, abs=1e-9)


def test_a_sinusoid() -> None:
    # exact: amplitude a, period P: SD a / sqrt 2, MAGE 2 a, positive area per cycle above the mean a P / pi
    read = scan(roots(ORDER + 1), *sinusoid(120.0, 20.0, 120.0, 2880.0))
    assert mean_between(read, 0.0, 2880.0) == pytest.approx(120.0, rel=1e-10)
    assert sd_between(read, 0.0, 2880.0) == pytest.approx(20 / np.sqrt(2), rel=1e-8)
    assert mage(read, 0.0, 2880.0) == pytest.approx(40.0, rel=1e-7)
    assert above(read, 0.0, 1200.0, 120.0)[1] == pytest.approx(10 * 20 * 120 / np.pi, rel=1e-7)
    assert np.isnan(mage(read, 0.0, 1000.0))
    highest, when, lowest = extremes(read, 0.0, 100.0)
    assert (highest, lowest) == (pytest.approx(140.0, rel=1e-9), pytest.approx(100.0, rel=1e-9))
    assert when == pytest.approx(30.0, abs=0.02)


def test_turning_points_of_a_sinusoid_are_exact() -> None:
    start, h, a, marks = sinusoid(0.0, 1.0, 110.0, 1100.0)
    times, values = np.empty(100), np.empty(100)
    count = turning_points(roots(ORDER + 1), start, h, a, marks, NEAR, times, values)
    np.testing.assert_allclose(times[:count], 27.5 + 55.0 * np.arange(20), atol=1e-6)
    np.testing.assert_allclose(np.abs(values[:count]), 1.0, rtol=1e-10)


def test_excursions_pass_over_small_reversals() -> None:
    sizes = np.empty(20)
    turns = np.array([100.0, 150.0, 145.0, 180.0, 90.0, 92.0, 60.0, 130.0])
    assert sizes[: excursions(turns, 20.0, sizes)].tolist() == [80.0, -120.0, 70.0]
    assert excursions(np.array([100.0, 101.0]), 20.0, sizes) == 0
    assert excursions(np.array([100.0]), 20.0, sizes) == 0


def test_ringing_counts_rises_and_falls_beyond_one() -> None:
    assert ringing(np.array([90.0, 95.0, 91.0, 93.0, 92.5, 92.6])) == 1
    assert ringing(np.array([90.0])) == 0


def test_a_corner_and_a_jump_are_turning_points() -> None:
    start, h, a, marks = lines([0.0, 10, 20, 30], [5.0, 9.0, 2.0, 4.0])
    times, values = np.empty(10), np.empty(10)
    assert times[: turning_points(roots(ORDER + 1), start, h, a, marks, NEAR, times, values)].tolist() == [10.0, 20.0]
    a[2, 0] += 50.0
    marks = summaries_of(a)
    count = turning_points(roots(ORDER + 1), start, h, a, marks, NEAR, times, values)
    assert values[:count].tolist() == [9.0, 2.0, 52.0]
    out = np.empty(3)
    insulin_window(start, h, a, marks, 0.0, 30.0, out)
    assert out.tolist() == [pytest.approx((70 + 55 + 530) / 30), 54.0, 2.0]


# ---- against dense numerics --------------------------------------------------------------------------------------


def random_people(n: int, seed: int) -> np.ndarray:
    return NOMINAL * np.exp(0.2 * np.random.default_rng(seed).normal(size=(n, len(NOMINAL))))


def nobody(n: int) -> np.ndarray:
    return np.full(n, np.nan)


ARMS = {
    "steady": Arm("steady", 2880.0, 600.0, glucose=(Constant(180.0),), start=AtEquilibrium(0.2)),
    "meals": Arm(
        "meals", 2880.0, 1440.0,
        glucose=tuple(Meal(h * 60.0, 60_000.0, 40.0, 2, repeat_min=1440.0) for h in (7, 12, 18)),
    ),
    "doses": Arm("doses", 1440.0, 0.0, glucose=(OnOff(250.0, 180.0, 0.3), Bolus(400.0, 8000.0)), insulin=(Bolus(700.0, 400.0),)),
    "clamp": Arm("clamp", 1440.0, 300.0, glucose=(Constant(150.0),), clamp=Clamp(130.0, 600.0)),
}  # fmt: skip


@pytest.mark.parametrize("name", list(ARMS))
def test_window_outcomes_against_a_grid_of_seconds(name: str) -> None:
    arm, n = ARMS[name], 12
    values = random_people(n, 5)
    found = outcomes("hepatic-lag", np.column_stack([values, np.full((n, 2), np.nan)]), nobody(n), arm).outcomes
    people = People(nobody(n), nobody(n), nobody(n), nobody(n))
    course = simulate_values(BODY, values, people, arm, ("glucose_mg_dl", "insulin_mu_l"))
    step = 0.05
    t = np.linspace(arm.settle_min, arm.duration_min, round((arm.duration_min - arm.settle_min) / step) + 1)
    glucose, insulin = course.sample(t)[:, 0], course.sample(t)[:, 1]
    width = arm.duration_min - arm.settle_min
    np.testing.assert_allclose(found["glucose_mean_mg_dl"], np.trapezoid(glucose, t) / width, rtol=5e-5)
    np.testing.assert_allclose(found["glucose_peak_mg_dl"], glucose.max(axis=1), rtol=2e-5)
    np.testing.assert_allclose(found["glucose_nadir_mg_dl"], glucose.min(axis=1), rtol=2e-5)
    at_a_dose = 0.5 * step * np.abs(np.diff(insulin)).max(axis=1) / width  # the grid's error where insulin jumps
    assert (np.abs(found["insulin_mean_mu_l"] - np.trapezoid(insulin, t) / width) < at_a_dose * 1.05 + 1e-4).all()
    np.testing.assert_allclose(found["insulin_peak_mu_l"], insulin.max(axis=1), rtol=2e-3)
    np.testing.assert_allclose(found["insulin_nadir_mu_l"], insulin.min(axis=1), rtol=1e-4)
    mean = np.trapezoid(glucose, t) / width
    sd = np.sqrt(np.trapezoid((glucose - mean[:, None]) ** 2, t) / width)
    np.testing.assert_allclose(found["glucose_sd_mg_dl"], sd, rtol=3e-4, atol=1e-4)  # doses: the grid's own error
    for column, level, sign in (
        ("time_above_140_min", 140.0, 1),
        ("time_below_70_min", 70.0, -1),
        ("time_above_180_min", 180.0, 1),
    ):
        spent = (sign * glucose > sign * level).sum(axis=1) * step
        np.testing.assert_allclose(found[column], spent, atol=0.6)
    when = arm.settle_min + found["time_to_peak_min"]
    assert (when <= t[glucose.argmax(axis=1)] + 0.06).all()  # of equal peaks the first
    there = np.array([course.sample(when[i : i + 1])[i, 0, 0] for i in range(n)])
    np.testing.assert_allclose(there, found["glucose_peak_mg_dl"], rtol=3e-6)
    before = np.full(n, glucose[:, 0])
    if arm.settle_min:
        period = np.where(np.isfinite(found["linear_period_min"]), found["linear_period_min"], 60.0)
        for i in range(n):
            past = np.linspace(arm.settle_min - period[i], arm.settle_min, 4001)
            before[i] = np.trapezoid(course.sample(past)[i, 0], past) / period[i]
    area = np.trapezoid(np.maximum(glucose - before[:, None], 0.0), t)
    np.testing.assert_allclose(found["iauc_mg_dl_min"], area, rtol=2e-3, atol=1.0)


def test_meal_rows_against_a_grid() -> None:
    arm, n = ARMS["meals"], 8
    values = random_people(n, 6)
    wide = np.column_stack([values, np.full(n, 50.0), np.full(n, 0.9)])
    meals = outcomes("hepatic-lag", wide, nobody(n), arm).meals
    assert len(meals["row"]) == 6 * n
    assert meals["meal_time_min"][:6].tolist() == [420.0, 720.0, 1080.0, 1860.0, 2160.0, 2520.0]
    people = People(nobody(n), np.full(n, 50.0), np.full(n, 0.9), nobody(n))
    course = simulate_values(BODY, values, people, arm, ("glucose_mg_dl",))
    t = np.arange(0, 2880.05, 0.1)
    glucose = course.sample(t)[:, 0]
    for i in range(6 * n):
        begin = meals["meal_time_min"][i]
        until = [720.0, 1080.0, 1860.0, 2160.0, 2520.0, 2880.0][i % 6]
        g = glucose[meals["row"][i]]
        inside, early, past = (
            (t >= begin) & (t <= until),
            (t >= begin) & (t <= begin + 120),
            (t >= begin - 60) & (t <= begin),
        )
        base = np.trapezoid(g[past], t[past]) / 60.0
        assert meals["baseline_mg_dl"][i] == pytest.approx(base, rel=1e-4)
        assert meals["peak_mg_dl"][i] == pytest.approx(g[inside].max(), rel=1e-5)
        assert meals["time_to_peak_min"][i] == pytest.approx(t[inside][g[inside].argmax()] - begin, abs=0.11)
        assert meals["iauc_mg_dl_min"][i] == pytest.approx(
            np.trapezoid(np.maximum(g[early] - base, 0), t[early]), rel=5e-4
        )


def test_a_meals_glucose_adds_up_to_its_amount() -> None:
    """Mass balance: what enters is what is used less what is released, plus what is left."""
    arm = Arm("meal", 1440.0, glucose=(Meal(60.0, 50_000.0, 45.0, stages=2, bioavailability=0.8),))
    course = simulate("hepatic-lag", {}, arm)
    t = np.linspace(0, 1440, 200_001)
    seen = course.sample(t)[0]
    glucose, release = seen[0] * 100.0, seen[3]
    p = BODY.card.nominal
    # the use functions written a second time; interstitial insulin from its own balance with plasma insulin
    interstitial = np.empty_like(t)
    interstitial[0] = seen[1][0] * p["Vp"] * 2.3655913978494625  # at rest: r = (E/Vp) / (E/Vi + 1/ti)
    dt = t[1] - t[0]
    for i in range(len(t) - 1):
        mid = 0.5 * (seen[1][i] + seen[1][i + 1])
        decay = p["E"] / p["Vi"] + 1 / p["ti"]
        rest = p["E"] * mid / decay
        interstitial[i + 1] = rest + (interstitial[i] - rest) * np.exp(-decay * dt)
    u = interstitial / p["C4"] * (1 / p["Vi"] + 1 / (p["E"] * p["ti"]))
    use = p["Ub"] * (1 - np.exp(-glucose / (p["C2"] * p["Vg"])))
    use = use + glucose / (p["C3"] * p["Vg"]) * (p["U0"] + (p["Um"] - p["U0"]) / (1 + u ** -p["beta"]))
    entered = glucose[-1] - glucose[0] + np.trapezoid(use - release, t)
    assert entered == pytest.approx(50_000.0 * 0.8, rel=1e-6)


# ---- clamp -------------------------------------------------------------------------------------------------------


def test_the_clamp_holds_and_its_rate_is_the_balance() -> None:
    arm = Arm("clamp", 2880.0, glucose=(Constant(216.0),), clamp=Clamp(120.0, 720.0))
    course = simulate("hepatic-lag", {}, arm)
    seen = course.sample(np.array([700.0, 900.0, 2000.0, 2880.0]))[0]
    assert course.columns[-1] == "clamp_rate_mg_per_min"
    np.testing.assert_allclose(seen[0, 1:], 120.0, rtol=1e-12)
    assert seen[-1, 0] == 0.0

    def held(Gin: float) -> float:
        rest = at_rest(BODY, np.array([[*NOMINAL, 1.0]]), np.array([Gin]), np.zeros(1))
        return float(rest.states[0, 2]) / 100.0 - 120.0

    assert seen[-1, -1] == pytest.approx(brentq(held, 50, 300, xtol=1e-10), rel=1e-6)


def test_a_clamp_abolishes_the_rhythm() -> None:
    # common practice: with glucose held the feedback loop is open
    free = Arm("free", 4320.0, 2880.0, glucose=(Constant(216.0),))
    held = Arm("held", 4320.0, 2880.0, glucose=(Constant(216.0),), clamp=Clamp(125.0, 600.0))
    wide = np.array([[*NOMINAL, np.nan, np.nan]])
    swing = [
        float(o["insulin_peak_mu_l"][0] - o["insulin_nadir_mu_l"][0])
        for o in (outcomes("hepatic-lag", wide, nobody(1), arm).outcomes for arm in (free, held))
    ]
    assert swing[0] > 20.0
    assert swing[1] < 1e-3


@settings(max_examples=25)
@given(st.floats(60.0, 200.0))
def test_a_clamp_gives_nothing_while_glucose_is_above_target(target: float) -> None:
    arm = Arm("clamp", 600.0, glucose=(Constant(216.0),), clamp=Clamp(target, 200.0))
    course = simulate("hepatic-lag", {}, arm)
    t = np.arange(200.5, 600.0, 1.0)
    glucose, rate = course.sample(t)[0, 0], course.sample(t)[0, -1]
    assert (rate >= -1e-9).all()
    assert (rate[glucose > target * (1 + 1e-9)] == 0.0).all()
    assert (glucose >= target * (1 - 1e-9)).all()


def test_the_step_program_summarises_its_polynomials() -> None:
    stepper = BODY.stepper(("glucose_mg_dl",), True)
    constants = run(stepper.hoisted, [*NOMINAL, 1.0])
    states = [90.0, 190.0, 11500.0, 80.0, 85.0, 95.0]
    result = run(stepper.step, [*states, *(1 / s for s in states), 1e9, 216.0, 0.0, *constants])
    a = np.array(result[8 : 8 + stepper.order + 1])
    found = np.array(result[8 + stepper.order + 1 :])
    np.testing.assert_allclose(found, summaries_of(a[None])[0], rtol=1e-6, atol=1e-9)
    assert Builder("none", 0).finish([]).flops == 0


# ---- roots of many steps at once ------------------------------------------------------------------------------------


@given(
    st.lists(st.floats(-1, 1), min_size=ORDER - 1, max_size=ORDER - 1),
    st.floats(0.05, 0.95),
    st.floats(0.3, 3.0),
    st.booleans(),
)
def test_one_root_is_found_as_brent_finds_it(rest: list[float], place: float, steep: float, up: bool) -> None:
    # a strictly rising (or falling) polynomial through 0 at `place`: slope at least half of `steep`
    k = np.arange(2, ORDER + 1)
    tail = 0.5 * steep * np.array(rest) / np.sum(k * np.abs(rest)) if np.any(rest) else np.zeros(ORDER - 1)
    a = np.array([0.0, steep, *tail]) * (1.0 if up else -1.0)
    a[0] = -np.polynomial.polynomial.polyval(place, a)
    raised = a + 7.0 * (np.arange(ORDER + 1) == 0)
    x, area, change = run(cross(ORDER + 1), [*raised, raised.sum(), 7.0])
    assert change < 1e-4
    assert x == pytest.approx(place, abs=1e-8)
    exact = np.polynomial.polynomial.polyint(raised)
    assert area == pytest.approx(np.polynomial.polynomial.polyval(x, exact), rel=1e-12)
    bowl = np.polynomial.polynomial.polyint(a)[: ORDER + 1]  # its slope is a without the last power
    slope = bowl[1:] * np.arange(1, ORDER + 1)
    if slope[0] * slope.sum() < 0.0:
        root = brentq(lambda t: np.polynomial.polynomial.polyval(t, slope), 0.0, 1.0, xtol=1e-14)
        x, there, change = run(turn(ORDER + 1), [*bowl, slope.sum()])
        assert x == pytest.approx(root, abs=1e-8)
        assert there == pytest.approx(np.polynomial.polynomial.polyval(root, bowl), abs=1e-12)


@given(st.lists(st.floats(-1, 1), min_size=ORDER + 1, max_size=ORDER + 1), st.floats(0.3, 1.2))
def test_what_is_said_of_sign_changes_is_true(raw: list[float], shrink: float) -> None:
    a = (np.array(raw) * shrink ** np.arange(ORDER + 1))[None, :]
    said = sign_changes(a, summaries_of(a), 0)
    slopes = np.polynomial.polynomial.polyval(np.linspace(0, 1, 4001), a[0, 1:] * np.arange(1, ORDER + 1))
    assume(
        min(abs(slopes[0]), abs(slopes[-1])) > 1e-9
    )  # nearer 0 an end's change of sign is between the points looked at
    signs = np.sign(slopes[np.abs(slopes) > 1e-12])
    if said >= 0:
        assert np.count_nonzero(np.diff(signs)) == said
