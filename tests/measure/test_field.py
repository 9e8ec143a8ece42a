"""Facts of the field, each with its source, as the models show them."""

import ctypes

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from cohort.compiled import compile_program
from cohort.measure.outcomes import outcomes
from cohort.model.body import body
from cohort.model.inputs import People
from cohort.model.protocol import Arm, AtEquilibrium, AtState, Constant, Meal
from cohort.population import Recipe, Stratum, draw
from cohort.population.laws import Lognormal
from cohort.simulate.people import simulate, simulate_values

BODY = body("hepatic-lag")
NOMINAL = np.array(list(BODY.card.nominal.values()))
WIDE = np.array([[*NOMINAL, np.nan, np.nan]])
NOBODY = np.array([np.nan])


def swings(course, begin: float, end: float) -> float:  # type: ignore[no-untyped-def]
    values = course.sample(np.linspace(begin, end, 2000))[0, 0]
    return float(values.max() - values.min())


def test_a_meal_rings_and_dies_out() -> None:
    # Sturis et al., Am J Physiol 1991;260:E801-E809 (abstract): damped oscillation after a meal
    arm = Arm("meal", 4320.0, glucose=(Meal(60.0, 60_000.0, 40.0, stages=2),))
    course = simulate("hepatic-lag", {}, arm)
    assert swings(course, 300.0, 700.0) > 2.0
    assert swings(course, 3600.0, 4320.0) < 0.05 * swings(course, 300.0, 700.0)
    assert outcomes("hepatic-lag", WIDE, NOBODY, arm).meals["ringing_cycles"][0] >= 1


def test_a_constant_infusion_sustains_a_rhythm_of_about_two_hours() -> None:
    # Keener & Sneyd, Mathematical Physiology (from memory): about 2 h; generous band 80-180 min is common practice
    found = outcomes("hepatic-lag", WIDE, NOBODY, Arm("i", 2880.0, glucose=(Constant(216.0),))).outcomes
    assert 80.0 < found["period_min"][0] < 180.0
    assert 0.0 < found["insulin_lag_min"][0] < 15.0  # Sturis et al. 1991 (abstract): glucose slightly ahead


@pytest.mark.parametrize(("rate", "oscillates"), [(20.0, 0), (180.0, 1), (420.0, 0)])
def test_too_little_and_too_much_glucose_stop_it(rate: float, oscillates: int) -> None:
    # Li & Kuang, SIAM J Appl Math 2007;67:757-776 (abstract): favourable is an infusion that is not overwhelming
    found = outcomes("hepatic-lag", WIDE, NOBODY, Arm("i", 600.0, glucose=(Constant(rate),))).outcomes
    assert found["oscillates"][0] == oscillates


@pytest.mark.parametrize(("td", "oscillates"), [(8.0, 0), (30.0, 1), (45.0, 1), (120.0, 0)])
def test_too_short_and_too_long_a_delay_stop_it(td: float, oscillates: int) -> None:
    # Sturis et al. 1991 (abstract): sustained oscillation needs a delay of 30-45 min
    wide = WIDE.copy()
    wide[0, BODY.card.parameters.index("td")] = td
    found = outcomes("hepatic-lag", wide, NOBODY, Arm("i", 600.0, glucose=(Constant(216.0),))).outcomes
    assert found["oscillates"][0] == oscillates


def test_counting_peaks_in_a_day_is_wrong_for_tens_and_two_hundred_hours_side_with_the_regime() -> None:
    laws = {"td": Lognormal(30.0, 0.25), "Rm": Lognormal(210.0, 0.3), "C4": Lognormal(80.0, 0.3)}
    recipe = Recipe(5, 600, "random", BODY.card.parameters, BODY.card.nominal, (Stratum("all", 1.0, laws),))
    people = draw(recipe, 0, 600)
    own = np.ascontiguousarray(people.values[:, :20])
    nobody = np.full(600, np.nan)
    arm = Arm("i", 1440.0, glucose=(Constant(216.0),))
    found = outcomes("hepatic-lag", people.values, nobody, arm).outcomes
    course = simulate_values(BODY, own, People(nobody, nobody, nobody, nobody), arm, ("glucose_mg_dl",))
    glucose = course.sample(np.arange(0, 1441.0, 5.0))[:, 0]
    peaks = ((glucose[:, 1:-1] > glucose[:, :-2]) & (glucose[:, 1:-1] > glucose[:, 2:])).sum(axis=1)
    naive = peaks >= 6
    disagree = np.flatnonzero(naive != (found["oscillates"] == 1))
    assert len(disagree) >= 20
    disagree = disagree[np.abs(found["growth_per_min"][disagree]) > 3e-4]  # what 200 h can tell
    call = ctypes.CFUNCTYPE(None, ctypes.c_void_p, ctypes.c_void_p)(compile_program(BODY.rates))
    sides = 0
    for i in disagree[:: max(len(disagree) // 10, 1)]:
        source, out = np.concatenate([np.zeros(6), [216.0, 0.0], own[i], [1.0]]), np.empty(6)

        def rates(_: float, x: np.ndarray, source=source, out=out) -> np.ndarray:  # type: ignore[no-untyped-def]
            source[:6] = x
            call(source.ctypes.data, out.ctypes.data)
            return out

        long = solve_ivp(rates, (0, 12000), [200, 200, 12000, 60, 60, 60], method="DOP853", rtol=1e-9, atol=1e-6,
                         t_eval=np.arange(0, 12001, 5.0)).y[2]  # fmt: skip
        early, late = np.ptp(long[800:1400]), np.ptp(long[1800:])
        swing = found["glucose_amplitude_mg_dl"][i]
        settled = late / (10 * own[i][2])
        sides += settled > 0.75 * swing if found["oscillates"][i] == 1 else late < max(0.5 * early, 0.01)  # mg: gone
    assert sides == len(disagree[:: max(len(disagree) // 10, 1)])


def test_the_regime_never_depends_on_where_the_arm_starts() -> None:
    starts = (
        AtEquilibrium(0.0), AtEquilibrium(0.5),
        AtState({"Ip": 200.0, "Ii": 200.0, "G": 12000.0, "x1": 60.0, "x2": 60.0, "x3": 60.0}),
    )  # fmt: skip
    found = [
        outcomes("hepatic-lag", WIDE, NOBODY, Arm("i", 300.0, start=s, glucose=(Constant(216.0),))).outcomes
        for s in starts
    ]
    for name in ("regime", "period_min", "glucose_amplitude_mg_dl"):
        assert found[0][name] == found[1][name] == found[2][name]
