"""What counts as attained: each rule, one-sided ranges, instants, effects that fall, those who fail."""

from __future__ import annotations

import numpy as np
import pytest

from covariates.problems import ProblemsError
from covariates.sheet import read_sheet
from popsim.records import WindowCourse
from popsim.study_records import Target
from popsim.target import concentration_limits, grid_course, judge, window_of

REMIFENTANIL, BIS = read_sheet("remifentanil_minto_1997"), read_sheet("propofol_eleveld_2018")
INF = float("inf")
PERSON = {"E0": 93.0, "Emax": 0.0, "C50": 3.0, "gamma": 2.0, "gamma_above": 2.0}


def target(rule="share", low=3.0, high=6.0, quantity="effect_site", start=15.0, end=60.0, share=0.8) -> Target:
    return Target("wanted", quantity, low, high, "mg/L", "3 to 6", start, end, rule, share, "80 % of the time")


def course(inside=(1.0,), below=None, above=None, touched=True, lowest=4.0, highest=5.0, at_end=4.5, status=0):
    inside = np.array(inside, dtype=float)
    n = len(inside)
    below = 1 - inside if below is None else np.array(below, dtype=float)
    above = np.zeros(n) if above is None else np.array(above, dtype=float)
    of_all = (touched, lowest, highest, at_end, status, 0.0, 0.0, 0.0, 0.0)
    return WindowCourse(below, inside, above, *(np.broadcast_to(np.array(x), (n,)) for x in of_all))


def attained(asked: Target, found: WindowCourse, model=REMIFENTANIL, values=None) -> list[bool]:
    n = len(found.inside)
    return judge(asked, model, values or {}, found, np.zeros(n, dtype=bool)).attained.tolist()


def test_share_of_the_time_with_its_slack():
    """80 % found to within rounding is 80 %; a millionth short is not."""
    shares = (0.8, 0.8 - 1e-12, 0.8 - 1e-6, 0.81, 0.0)
    assert attained(target(), course(shares)) == [True, True, False, True, False]


def test_at_any_time_a_touch_counts():
    assert attained(target("any"), course((0.0, 0.0), touched=np.array([True, False]))) == [True, False]


def test_always_is_about_extremes():
    found = course((1.0,) * 4, lowest=np.array([3.0, 2.999, 3.0, 4.0]), highest=np.array([6.0, 6.0, 6.001, 5.0]))
    assert attained(target("always"), found) == [True, False, False, True]


def test_at_the_end():
    assert attained(target("end"), course((0.5,) * 4, at_end=np.array([2.9, 3.0, 6.0, 6.1]))) == [
        False,
        True,
        True,
        False,
    ]


@pytest.mark.parametrize(("low", "high", "wanted"), [(3.0, INF, [False, True, True]), (-INF, 6.0, [True, True, False])])
def test_one_sided(low, high, wanted):
    value = np.array([1.0, 4.0, 50.0])
    found = course((1.0,) * 3, lowest=value, highest=value, at_end=value)
    for rule in ("always", "end"):
        result = judge(target(rule, low, high), REMIFENTANIL, {}, found, np.zeros(3, dtype=bool))
        assert result.attained.tolist() == wanted
        assert result.far_below.tolist() == [low == 3.0, False, False]
        assert result.far_above.tolist() == [False, False, high == 6.0]


def test_far_below_and_far_above():
    """Below half the lower limit, above twice the upper one; the limits themselves are not beyond."""
    found = course((0.5,) * 4, lowest=np.array([1.5, 1.49, 4.0, 4.0]), highest=np.array([5.0, 5.0, 12.0, 12.1]))
    result = judge(target(), REMIFENTANIL, {}, found, np.zeros(4, dtype=bool))
    assert result.far_below.tolist() == [False, True, False, False]
    assert result.far_above.tolist() == [False, False, False, True]


def test_far_from_limits_below_zero_means_nothing():
    """Half of -10 lies inside a range that begins at -10."""
    found = course((1.0,), lowest=-7.0, highest=-6.0)
    result = judge(target(low=-10.0, high=-5.0), REMIFENTANIL, {}, found, np.zeros(1, dtype=bool))
    assert not result.far_below[0] and not result.far_above[0]


@pytest.mark.parametrize("rule", ["share", "any", "always", "end"])
def test_failed_and_undosed_do_not_attain(rule):
    found = course((1.0,) * 3, lowest=np.array([4.0, 4.0, np.nan]), status=np.array([0, 0, 2]))
    result = judge(target(rule), REMIFENTANIL, {}, found, np.array([False, True, False]))
    assert result.attained.tolist() == [True, False, False]
    assert result.failed.tolist() == [False, True, True]
    assert not result.far_below.any() and not result.far_above.any()


def person(n=1):
    return {name: np.full(n, value) for name, value in PERSON.items()}


def test_an_effect_that_falls_exchanges_the_sides():
    """BIS 40 to 60 with C50 3 and steepness 2: 93/60 = 1 + (C/3)^2 gives 2.2249, 93/40 gives 3.4533 mg/L."""
    asked = target(low=40.0, high=60.0, quantity="effect")
    low, high = concentration_limits(asked, BIS, person(), 1)
    np.testing.assert_allclose([low[0], high[0]], [3 * 0.55**0.5, 3 * 1.325**0.5], rtol=1e-12)
    found = course((0.5,), below=(0.2,), above=(0.3,), lowest=0.0, highest=30.0)
    result = judge(asked, BIS, person(), found, np.zeros(1, dtype=bool))
    assert (result.below[0], result.inside[0], result.above[0]) == (0.3, 0.5, 0.2)
    assert result.far_below[0] and not result.far_above[0]  # 93 is not above 120; 93 / 101 is below 20


def test_rules_on_an_effect():
    asked = {rule: target(rule, 40.0, 60.0, "effect") for rule in ("always", "end")}
    within = course((1.0,), lowest=2.3, highest=3.4, at_end=3.0)
    beyond = course((0.9,), lowest=2.3, highest=3.6, at_end=3.6)
    for rule in asked:
        assert attained(asked[rule], within, BIS, person()) == [True]
        assert attained(asked[rule], beyond, BIS, person()) == [False]


@pytest.mark.parametrize(("low", "high"), [(94.0, 99.0), (-9.0, -1.0), (-INF, 60.0), (40.0, INF)])
def test_effect_limits_out_of_reach_are_still_in_order(low, high):
    found_low, found_high = concentration_limits(target(low=low, high=high, quantity="effect"), BIS, person(), 1)
    assert found_low[0] <= found_high[0]


def test_limits_of_concentrations_are_the_same_for_everyone():
    low, high = concentration_limits(target(), REMIFENTANIL, {}, 3)
    assert low.tolist() == [3.0] * 3 and high.tolist() == [6.0] * 3


def test_windows_by_attribute():
    times = {"closure_min": np.array([30.0, 90.0]), "closure_h": np.array([0.5, 1.5])}
    for name in times:
        start, end = window_of(target(start=15.0, end=name), times.__getitem__, 2, 90.0)
        assert start.tolist() == [15.0, 15.0] and end.tolist() == [30.0, 90.0]
    start, end = window_of(target(start="closure_h", end="closure_h"), times.__getitem__, 2, 90.0)
    assert start.tolist() == end.tolist() == [30.0, 90.0]


@pytest.mark.parametrize("minutes", [90.5, -1.0, np.nan, np.inf])
def test_a_window_past_the_runs_end_is_refused(minutes):
    """Nobody is dosed after the run's end: a window there would be judged against doses that were cut off."""
    times = {"closure_min": np.array([30.0, minutes])}
    with pytest.raises(ProblemsError) as caught:
        window_of(target(end="closure_min"), times.__getitem__, 2, 90.0)
    assert "closure_min" in str(caught.value) and "90 min" in str(caught.value)


def test_the_course_quantity():
    assert grid_course(target(quantity="plasma"), BIS, person()) == "plasma"
    assert grid_course(target(), BIS, person()) == "effect_site"
    curve = grid_course(target(quantity="effect"), BIS, person())
    assert [column.tolist() for column in curve] == [[93.0], [0.0], [3.0], [2.0], [2.0]]
