"""Borders, windows, folds and regions: published and exact values, and independent scans."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cohort.measure.folds import fold_beyond
from cohort.measure.hopf import INFUSION, Plane, Setting, crossings, curves, described, first_lyapunov, grid
from cohort.measure.regime import cycles
from cohort.model.body import body
from cohort.simulate.run import with_secretion
from tests.measure.toys import brusselator, shifted_subcritical, shifted_supercritical, toy, van_der_pol


def setting(model: str = "hepatic-lag", infusion: float = 216.0) -> Setting:
    found = body(model)
    return Setting(found, np.array(list(found.card.nominal.values())), infusion)


# ---- values ---------------------------------------------------------------------------------------------------------


def test_windows_of_the_published_body() -> None:
    # computed with two independent methods, form B: infusion 98.963057 - 253.939820 mg/min at td 36 min; td 23.542166 -
    # 69.927050 min at 216 mg/min
    assert crossings(setting(), INFUSION, 10.0, 600.0) == pytest.approx([98.963057, 253.939820], rel=1e-7)
    assert crossings(setting(), "td", 2.0, 500.0) == pytest.approx([23.542166, 69.927050], rel=1e-7)


def test_the_brusselator_begins_at_two_with_period_two_pi() -> None:
    # exact: A 1, Hopf at B = 1 + A^2, period 2 pi / A, born attracting
    found = toy("brusselator", brusselator, A=1.0, B=1.5)
    at = Setting(found, np.array([1.0, 1.5]), 0.0)
    border = described(at, ("B",), crossings(at, "B", 1.0, 5.0)[:, None])
    assert border.points[:, 0] == pytest.approx([2.0], abs=1e-12)
    assert border.period == pytest.approx([2 * np.pi], rel=1e-12)
    assert border.kind == ("hopf",)
    assert border.lyapunov[0] < 0.0


def test_the_lyapunov_coefficient_of_the_normal_form() -> None:
    # exact: r' = mu r + s r^3 in states of size 1: l1 = 2 s with |q| = 1, whatever the frequency
    for text, s in ((shifted_subcritical, 1.0), (shifted_supercritical, -1.0)):
        found = toy("normal", text, mu=0.0)
        at = Setting(found, np.array([0.0]), 0.0)
        points = np.array([[0.0]])
        assert first_lyapunov(found, at.rest(("mu",), points), *at.spread(("mu",), points)) == pytest.approx(
            [2.0 * s], abs=1e-9
        )


def test_van_der_pol_has_no_border_above_zero() -> None:
    found = toy("van der Pol", van_der_pol, mu=1.0)
    at = Setting(found, np.array([1.0]), 0.0)
    assert len(crossings(at, "mu", 0.01, 10.0)) == 0
    assert described(at, ("mu",), np.array([[0.1]])).period == pytest.approx(
        [6.29105], rel=1e-5
    )  # exact: 2 pi / sqrt(1 - mu^2/4)


def test_a_subcritical_strip_ends_where_the_normal_form_says() -> None:
    # exact: r' = mu r + r^3 - r^5 has orbits for mu > -1/4
    found = toy("subcritical", shifted_subcritical, mu=-0.1)
    at = Setting(found, np.array([-0.1]), 0.0)
    border = crossings(at, "mu", -1.0, 1.0)
    fold = fold_beyond(at, ("mu",), border, np.array([-0.5]))
    assert fold is not None
    assert fold[0] == pytest.approx(-0.25, abs=1e-6)
    over = toy("supercritical", shifted_supercritical, mu=-0.1)
    assert fold_beyond(Setting(over, np.array([-0.1]), 0.0), ("mu",), np.zeros(1), np.array([-0.5])) is None


def test_a_longer_chain_tends_to_the_discrete_delay() -> None:
    # first Hopf delay of the discrete delay at 216 mg/min, computed two ways: 14.55516 min. The chain's excess falls as 1/n.
    firsts = {n: crossings(setting(f"lag-chain-{n}"), "td", 5.0, 60.0)[0] for n in (3, 6, 8, 9, 10, 11, 12)}
    assert firsts[3] == pytest.approx(23.542166, rel=1e-7)
    excess = {n: first - 14.55516 for n, first in firsts.items()}
    assert excess[12] / excess[6] == pytest.approx(0.5, abs=0.1)
    n = np.array([8, 9, 10, 11, 12])
    fit = np.polynomial.polynomial.polyfit(1.0 / n, [firsts[int(k)] for k in n], 4)
    assert fit[0] == pytest.approx(14.55516, rel=2e-4)


def test_the_extended_form_has_its_computed_cycle() -> None:
    # computed, two integrators: period 100.9179 min, glucose 119.9530-148.5541 mg/dL, insulin 18.0526-37.3340 mU/L, lead 3.7705
    found = body("release-by-glucose")
    parameters = with_secretion(np.array([list(found.card.nominal.values())]), 1.0)
    tends = cycles(found, parameters, np.array([216.0]), np.zeros(1))
    assert tends.period[0] == pytest.approx(100.9179, rel=1e-6)
    assert tends.turn[0, 0, :2] == pytest.approx([119.9530, 148.5541], rel=1e-6)
    assert tends.turn[0, 1, :2] == pytest.approx([18.0526, 37.3340], rel=2e-6)
    assert tends.turn[0, 1, 3] - tends.turn[0, 0, 3] == pytest.approx(3.7705, abs=1e-3)


# ---- curves ---------------------------------------------------------------------------------------------------------


@settings(max_examples=20)
@given(st.floats(0.2, 0.8), st.floats(0.2, 0.8), st.floats(0.08, 0.19))
def test_a_circle_is_followed_all_round(x: float, y: float, r: float) -> None:
    def function(s: np.ndarray) -> np.ndarray:
        return (s[:, 0] - x) ** 2 + (s[:, 1] - y) ** 2 - r * r

    side = np.linspace(0, 1, 30)
    values = np.array([[(a - x) ** 2 + (b - y) ** 2 - r * r for a in side] for b in side])
    (curve,) = curves(function, values)
    assert np.abs(np.hypot(*(curve - [x, y]).T) - r).max() < 1e-9
    assert np.array_equal(curve[0], curve[-1])
    assert np.hypot(*np.diff(curve, axis=0).T).sum() == pytest.approx(2 * np.pi * r, rel=0.01)


def test_two_curves_that_leave_the_square_are_both_followed_to_its_sides() -> None:
    def function(s: np.ndarray) -> np.ndarray:
        return (s[:, 0] - 0.3 - 0.1 * s[:, 1]) * (s[:, 0] - 0.7)

    side = np.linspace(0, 1, 20)
    found = curves(function, np.array([function(np.array([[a, b] for a in side])) for b in side]))
    assert len(found) == 2
    for curve in found:
        assert sorted([curve[0, 1], curve[-1, 1]]) == pytest.approx([0.0, 1.0], abs=1e-9)


def test_the_region_of_the_body_agrees_with_windows_and_with_a_finer_grid() -> None:
    at = setting()
    plane = Plane(("td", INFUSION), np.array([10.0, 50.0]), np.array([100.0, 300.0]))
    growth = at.growth(plane.names, grid(plane, 40)).reshape(40, 40)
    (curve,) = curves(lambda s: at.growth(plane.names, plane.points(s)), growth)
    points = plane.points(curve)
    assert np.abs(at.growth(plane.names, points)).max() < 1e-12
    # where the curve crosses 216 mg/min it is at the window's ends
    crossing = [
        p[0] + (216.0 - p[1]) * (q[0] - p[0]) / (q[1] - p[1])
        for p, q in zip(points[:-1], points[1:], strict=True)
        if (p[1] - 216.0) * (q[1] - 216.0) < 0.0
    ]
    assert sorted(crossing) == pytest.approx([23.542166, 69.927050], rel=2e-4)  # straight between points
    border = described(at, plane.names, points)
    assert set(border.kind) == {"hopf"}
    assert (border.lyapunov < 0.0).all()
