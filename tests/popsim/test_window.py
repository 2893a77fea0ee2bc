"""Exact windows against brentq and mpmath roots, dense grids, tangents, narrow peaks and edges at doses."""

from __future__ import annotations

import math
import runpy
from pathlib import Path
from types import SimpleNamespace

import mpmath as mp
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import brentq, minimize_scalar

from popsim import kernels, solve

cases = SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("solver_cases.py"))))
few = settings(max_examples=cases.EXAMPLES, deadline=None, database=None)
window = cases.window
COURSES = ["plasma", "effect_site"]
BUSY = ((0.0, 100.0, 12.0), (4.0, 0.0, 3.0), (10.0, 40.0, 9.0), (10.0, 15.0, 9.0), (25.0, 0.0, 0.0), (40.0, 60.0, 2.0))


def one_compartment(volume: float = 10.0, clearance: float = 1.0, ke0: float = 0.3):
    return cases.people({"V1": volume, "CL": clearance, "ke0": ke0})


def value(d, line, which: str, at: float) -> float:
    return window(d, line, which, 0.0, math.inf, at, at).at_end[0]


# ---- known in closed form ----


def test_time_over_a_level_after_a_bolus_is_the_logarithm():
    """One compartment: C0 exp(-k t) passes c at ln(C0/c)/k (textbook)."""
    d = one_compartment()
    found = window(d, cases.timeline((0.0, 100.0, 0.0)), "plasma", 2.0, 6.0, 0.0, 40.0)
    above, below = math.log(10 / 6) / 0.1, 40 - math.log(10 / 2) / 0.1
    assert found.above[0] == pytest.approx(above / 40, rel=1e-13)
    assert found.below[0] == pytest.approx(below / 40, rel=1e-13)
    assert found.inside[0] == pytest.approx(1 - (above + below) / 40, rel=1e-13)
    assert found.highest[0] == pytest.approx(10.0, rel=1e-15)
    assert found.lowest[0] == found.at_end[0] == pytest.approx(10 * math.exp(-4), rel=1e-14)


def test_the_effect_site_peaks_where_the_textbook_says():
    """After a bolus, one compartment: t = ln(ke0/k)/(ke0 - k), where effect site and plasma meet (textbook)."""
    d, line = one_compartment(), cases.timeline((0.0, 100.0, 0.0))
    peak_at = math.log(0.3 / 0.1) / 0.2
    peak = 10 * math.exp(-0.1 * peak_at)
    found = window(d, line, "effect_site", 0.0, peak * 0.999, 0.0, 50.0)
    assert found.highest[0] == pytest.approx(peak, rel=1e-14)
    assert found.above[0] > 0


def test_the_peak_where_ke0_meets_the_elimination_rate():
    """ke0 = k: Ce = C0 k t exp(-k t), peak C0/e at 1/k (limit of the above)."""
    d, line = one_compartment(ke0=0.1), cases.timeline((0.0, 100.0, 0.0))
    found = window(d, line, "effect_site", 0.0, math.inf, 0.0, 1e6)
    assert found.highest[0] == pytest.approx(10 / math.e, rel=1e-14)
    assert found.at_end[0] == 0.0  # underflows long before


# ---- brute force and general root finders ----


@pytest.mark.parametrize("which", COURSES)
def test_shares_are_what_a_dense_grid_counts(which):
    """Midpoints of 40,001 equal parts, 30 patients, six events of which two coincide."""
    n, parts = (2, 2001) if cases.SLOW else (30, 40001)
    d, line = solve.disposition(cases.varied(n)), cases.timeline(*BUSY, n=n)
    edges = np.linspace(3.0, 57.0, parts + 1)
    course = solve.courses_on_grid(d, line, (edges[1:] + edges[:-1]) / 2)[which != "plasma"]
    found = window(d, line, which, 2.0, 4.0, 3.0, 57.0)
    counted = [(course < 2).mean(1), ((course >= 2) & (course <= 4)).mean(1), (course > 4).mean(1)]
    for ours, theirs in zip((found.below, found.inside, found.above), counted, strict=True):
        np.testing.assert_allclose(ours, theirs, atol=12 / parts)
    np.testing.assert_array_equal(found.touched, counted[1] > 0)
    assert (found.lowest <= course.min(1) * (1 + 1e-14)).all()
    assert (found.highest >= course.max(1) * (1 - 1e-14)).all()
    np.testing.assert_allclose(found.lowest, course.min(1), rtol=1e3 / parts)
    np.testing.assert_allclose(found.highest, course.max(1), rtol=1e3 / parts)


@pytest.mark.parametrize("which", COURSES)
@pytest.mark.parametrize("drug", ["PROPOFOL", "REMIFENTANIL"])
def test_crossings_are_brentqs(drug, which):
    """scipy.optimize.brentq on the course, between the signs of a fine grid, inside one interval between events."""
    d, line = cases.people(getattr(cases, drug)), cases.timeline((0.0, 60.0, 2.0), (30.0, 0.0, 0.0))
    grid = np.linspace(0.001, 29.999, 3001)
    course = solve.courses_on_grid(d, line, grid)[which != "plasma"][0]
    low, high = np.quantile(course, [0.3512345, 0.8012345])
    found = window(d, line, which, low, high, grid[0], grid[-1])
    wanted = 0.0
    for level, share in ((low, found.below[0]), (high, found.inside[0] + found.below[0])):
        under = course < level
        turns = np.nonzero(under[1:] != under[:-1])[0]
        roots = [brentq(lambda t, c=level: value(d, line, which, t) - c, grid[j], grid[j + 1], xtol=1e-13)
                 for j in turns]  # fmt: skip
        marks = np.array([grid[0], *roots, grid[-1]])
        pieces = np.diff(marks)
        wanted = pieces[::2].sum() if under[0] else pieces[1::2].sum()
        assert share == pytest.approx(wanted / (grid[-1] - grid[0]), abs=1e-12)
    assert wanted > 0


@pytest.mark.parametrize("which", COURSES)
def test_extremes_are_scipys(which):
    """minimize_scalar around the best point of a grid."""
    d, line = cases.people(cases.PROPOFOL), cases.timeline(*BUSY)
    grid = np.linspace(10.01, 24.99, 1499)
    course = solve.courses_on_grid(d, line, grid)[which != "plasma"][0]
    found = window(d, line, which, 0.0, math.inf, 10.01, 24.99)
    for ours, sign in ((found.lowest[0], 1), (found.highest[0], -1)):
        best = grid[(sign * course).argmin()]
        polished = minimize_scalar(lambda t, s=sign: s * value(d, line, which, t), method="bounded",
                                   bounds=(max(best - 0.01, 10.01), min(best + 0.01, 24.99)))  # fmt: skip
        wanted = sign * min(polished.fun, (sign * course).min())
        assert ours == pytest.approx(wanted, rel=1e-9)
        assert sign * ours <= sign * wanted * (1 + sign * 1e-13)


def test_a_crossing_is_mpmaths_to_twelve_digits():
    """Effect site after a bolus, three compartments: mpmath.findroot on the 60-digit course."""
    p = cases.PROPOFOL
    d, line = cases.people(p), cases.timeline((0.0, 100.0, 0.0))
    with mp.workdps(60):
        matrix = mp.matrix(cases.rate_matrix(p).tolist())
        v1, cl, v2, q2, v3, q3, ke0 = (mp.mpf(p[name]) for name in cases.NAMES)
        matrix[0, 0], matrix[0, 1], matrix[0, 2] = -(cl + q2 + q3) / v1, q2 / v1, q3 / v1
        matrix[1, 0], matrix[1, 1], matrix[2, 0], matrix[2, 2] = q2 / v2, -q2 / v2, q3 / v3, -q3 / v3
        start = mp.matrix([100 / v1, 0, 0, 0, 0])

        def site(t):
            return (mp.expm(matrix * t) * start)[3]

        up = mp.findroot(lambda t: site(t) - 1.5, (0.5, 1.5), solver="anderson")
        down = mp.findroot(lambda t: site(t) - 1.5, (7.0, 9.0), solver="anderson")
    found = window(d, line, "effect_site", 1.5, math.inf, 0.0, 20.0)
    assert found.inside[0] * 20 == pytest.approx(float(down - up), rel=1e-12)


# ---- tangents, narrow peaks, double turns ----


@pytest.mark.parametrize("aside", [1e-13, 1e-11, 1e-9, 1e-6])
def test_just_over_and_just_under_a_tangent(aside):
    """Near its peak Ce = C0 k t exp(-k t) is peak (1 - s^2/2 ...), s = k t - 1: inside for 2 sqrt(2 aside)/k."""
    d, line = one_compartment(ke0=0.1), cases.timeline((0.0, 100.0, 0.0))
    peak = 10 / math.e
    reached = window(d, line, "effect_site", peak * (1 - aside), math.inf, 0.0, 40.0)
    assert reached.touched[0]
    assert reached.inside[0] * 40 == pytest.approx(2 * math.sqrt(2 * aside) / 0.1, rel=3e-2 if aside < 1e-12 else 2e-3)
    missed = window(d, line, "effect_site", peak * (1 + aside), math.inf, 0.0, 40.0)
    assert not missed.touched[0]
    assert missed.inside[0] == 0.0
    assert missed.below[0] == 1.0


@pytest.mark.parametrize("when", [1e-9, 1e-6, 1e-3, 1.0, 999.0])
def test_a_narrow_peak_between_events_counts(when):
    """A fast effect site (ke0 from 1e1 to 1e10 per min) peaks early in a long interval; a bolus late in one too."""
    ke0 = 10.0 / when
    d = one_compartment(ke0=ke0)
    start = 0.0 if when < 2 else when
    line = cases.timeline((start, 100.0, 0.0), (1e4, 0.0, 0.0))
    wait = math.log(ke0 / 0.1) / (ke0 - 0.1)
    peak = 10 * math.exp(-0.1 * wait)
    found = window(d, line, "effect_site", 0.0, peak * (1 - 1e-6), 0.0, 1e4)
    assert found.highest[0] == pytest.approx(peak, rel=1e-13)
    assert found.above[0] > 0


def test_an_overshoot_that_comes_back_to_steady_state_is_found():
    """A loading dose with its infusion: the effect site rises over R/CL and comes back from above; far on, plasma and
    effect site differ by less than rounding, and the peak must be found all the same."""
    d = one_compartment()
    for end in (60.0, 600.0, 1e4, 1e6):
        found = window(d, cases.timeline((0.0, 100.0, 5.0)), "effect_site", 0.0, 5.5, 0.0, end)
        assert found.highest[0] > 6.0
        assert found.above[0] > 0
        assert found.at_end[0] == pytest.approx(5.0, rel=0.01)


def test_plasma_that_turns_twice_in_one_interval():
    """After a bolus, a lower rate: plasma falls as drug spreads, rises to steady state; then nothing is missed."""
    d = cases.people(cases.PROPOFOL)
    line = cases.timeline((0.0, 40.0, 9.0))
    found = window(d, line, "plasma", 0.0, math.inf, 0.0, 5000.0)
    grid = np.concatenate([np.linspace(0.0, 60.0, 6001), [5000.0]])
    course = solve.courses_on_grid(d, line, grid)[0][0]
    inner = course[:-1].argmin()
    assert 0 < inner < 6000
    assert found.lowest[0] == pytest.approx(course.min(), rel=1e-6)
    assert found.lowest[0] <= course.min()
    assert found.highest[0] == pytest.approx(course[0], rel=1e-15)


@few
@given(st.tuples(*[st.floats(-3, 3)] * 8), st.tuples(*[st.floats(0, 1)] * 3), st.floats(0, 5), st.floats(-3, 4),
       st.just(0.0) | st.floats(0, 100))  # fmt: skip
def test_monotone_between_the_turning_points(powers, state, rate, length_power, depot):
    """Any rates over six decades, any state: between neighbouring cuts the course never turns back (dense sampling)."""
    d = cases.people({name: 10.0**power for name, power in zip((*cases.NAMES, "ka"), powers, strict=True)})
    state, length = (*state, 0.7, depot), 10.0**length_power
    row = np.array([*d.rates[0], *d.weights[0], d.ke0[0], d.ka[0]])
    slopes = kernels._slopes(state, rate, row)
    for kind in (kernels.PLASMA, kernels.EFFECT_SITE):
        cuts, roots = np.zeros(6), np.zeros(4)
        count = kernels._monotone_cuts(kind, length, cuts, roots, state, rate, slopes, row)
        for a, b in zip(cuts[: count - 1], cuts[1:count], strict=True):
            inside = np.concatenate([a + (b - a) * np.geomspace(1e-9, 1, 40), np.linspace(a, b, 40)])
            inside.sort()
            course = np.array([kernels._function(kind, t, state, rate, slopes, row)[0] for t in inside])
            moves = np.diff(course)
            noise = 1e-13 * course.max()
            assert (moves >= -noise).all() or (moves <= noise).all()


# ---- moments ----


def test_when_it_first_is_in_range_and_last_above_it_is_the_logarithm():
    """One compartment: C0 exp(-k t) falls to 6 and to 2 at ln(C0/c)/k (textbook)."""
    d, line = one_compartment(), cases.timeline((0.0, 100.0, 0.0))
    found = window(d, line, "plasma", 2.0, 6.0, 0.0, 40.0)
    assert found.first_inside_min[0] == found.last_above_min[0] == pytest.approx(math.log(10 / 6) / 0.1, rel=1e-13)
    assert (found.highest_at_min[0], found.lowest_at_min[0]) == (0.0, 40.0)
    never = window(d, line, "plasma", 11.0, 12.0, 0.0, 40.0)
    assert (never.first_inside_min[0], never.last_above_min[0]) == (math.inf, -math.inf)
    assert not never.touched[0]
    later = window(d, line, "plasma", 0.0, 20.0, 3.0, 40.0)
    assert (later.first_inside_min[0], later.last_above_min[0]) == (3.0, -math.inf)
    assert window(d, line, "plasma", 0.0, 0.1, 3.0, 40.0).last_above_min[0] == 40.0


@pytest.mark.parametrize("which", COURSES)
def test_moments_are_those_of_a_dense_grid(which):
    """30 patients, six events: the first grid time in range, the last above, the extremes', to one grid step."""
    n, parts = (3, 2001) if cases.SLOW else (30, 40001)
    d, line = solve.disposition(cases.varied(n)), cases.timeline(*BUSY, n=n)
    grid = np.linspace(3.0, 57.0, parts)
    course = solve.courses_on_grid(d, line, grid)[COURSES.index(which)]
    found = window(d, line, which, 2.0, 4.0, 3.0, 57.0)
    step = grid[1] - grid[0]
    inside, above = (course >= 2) & (course <= 4), course > 4
    first = np.where(inside.any(1), grid[inside.argmax(1)], np.inf)
    last = np.where(above.any(1), grid[parts - 1 - above[:, ::-1].argmax(1)], -np.inf)
    for ours, theirs in ((found.first_inside_min, first), (found.last_above_min, last)):
        np.testing.assert_array_equal(np.isfinite(ours), np.isfinite(theirs))
        np.testing.assert_allclose(ours, theirs, atol=1.01 * step)
    np.testing.assert_allclose(found.highest_at_min, grid[course.argmax(1)], atol=1.01 * step)
    np.testing.assert_allclose(found.lowest_at_min, grid[course.argmin(1)], atol=1.01 * step)


@pytest.mark.parametrize("which", COURSES)
def test_moments_are_brentqs(which):
    """scipy.optimize.brentq on the course, rising into the range and, infusion over, falling below its upper limit."""
    d, line = cases.people(cases.PROPOFOL), cases.timeline((0.0, 0.0, 12.0), (60.0, 0.0, 0.0))
    found = window(d, line, which, 2.0, 4.0, 0.0, 200.0)
    into = brentq(lambda t: value(d, line, which, t) - 2.0, 1e-6, 60.0, xtol=1e-13)
    out = brentq(lambda t: value(d, line, which, t) - 4.0, 60.0 if which == "plasma" else 61.0, 200.0, xtol=1e-13)
    assert found.first_inside_min[0] == pytest.approx(into, rel=1e-12)
    assert found.last_above_min[0] == pytest.approx(out, rel=1e-12)


def test_a_dose_that_jumps_over_the_range_is_not_its_first_time_in_range():
    line = cases.timeline((10.0, 1000.0, 0.0))
    found = window(one_compartment(), line, "plasma", 20.0, 50.0, 0.0, 30.0)
    assert found.first_inside_min[0] == found.last_above_min[0] == pytest.approx(10 + math.log(2) / 0.1, rel=1e-13)
    assert found.highest_at_min[0] == 10.0


# ---- edges, instants, levels ----


def test_a_window_begins_after_the_doses_at_its_start_and_ends_before_those_at_its_end():
    d = one_compartment()
    line = cases.timeline((0.0, 100.0, 0.0), (10.0, 1000.0, 0.0))
    found = window(d, line, "plasma", 0.0, math.inf, 0.0, 10.0)
    assert found.highest[0] == pytest.approx(10.0, rel=1e-15)
    assert found.at_end[0] == found.lowest[0] == pytest.approx(10 * math.exp(-1), rel=1e-14)
    after = window(d, line, "plasma", 0.0, math.inf, 10.0, 11.0)
    assert after.highest[0] == pytest.approx(100 + 10 / math.e, rel=1e-14)


def test_an_instant_is_after_the_doses_at_that_time():
    d = one_compartment()
    line = cases.timeline((0.0, 100.0, 0.0), (10.0, 1000.0, 0.0))
    for low, high, shares, touched in ((1.0, 200.0, (0, 1, 0), True), (150.0, 200.0, (1, 0, 0), False),
                                       (1.0, 50.0, (0, 0, 1), False)):  # fmt: skip
        found = window(d, line, "plasma", low, high, 10.0, 10.0)
        assert (found.below[0], found.inside[0], found.above[0]) == shares
        assert found.touched[0] == touched
        assert found.lowest[0] == found.highest[0] == found.at_end[0] == pytest.approx(100 + 10 / math.e, rel=1e-14)


def test_a_dose_inside_the_window_shows_its_trough_and_its_peak_and_jumps_over_the_range():
    d = one_compartment()
    line = cases.timeline((0.0, 100.0, 0.0), (10.0, 1000.0, 0.0))
    found = window(d, line, "plasma", 20.0, 50.0, 5.0, 11.0)
    assert found.lowest[0] == pytest.approx(10 / math.e, rel=1e-14)
    assert found.highest[0] == pytest.approx(100 + 10 / math.e, rel=1e-14)
    assert not found.touched[0]
    assert (found.below[0], found.inside[0], found.above[0]) == pytest.approx((5 / 6, 0.0, 1 / 6), rel=1e-15)


def test_before_the_first_dose_there_is_nothing():
    line = cases.timeline((30.0, 100.0, 0.0))
    found = window(one_compartment(), line, "plasma", 1.0, 20.0, 0.0, 31.0)
    assert found.below[0] == pytest.approx(30 / 31, rel=1e-15)
    assert found.lowest[0] == 0.0
    assert window(one_compartment(), line, "plasma", 0.0, 20.0, 0.0, 29.0).inside[0] == 1.0


@pytest.mark.parametrize("which", COURSES)
def test_whole_shares_are_whole(which):
    """Always inside is exactly 1, never is exactly 0: "always" and "at any time" hang on it."""
    d, line = solve.disposition(cases.varied(20)), cases.timeline(*BUSY, n=20)
    for low, high, column in ((-math.inf, math.inf, "inside"), (0.0, 1e9, "inside"), (1e8, 1e9, "below"),
                              (-2.0, -1.0, "above")):  # fmt: skip
        found = window(d, line, which, low, high, 1.0, 52.3)
        assert (getattr(found, column) == 1.0).all()
        assert ((found.below + found.inside + found.above) == 1.0).all()


def test_the_range_is_closed():
    """A level that stands exactly on a limit is in range."""
    d, line = one_compartment(), cases.timeline((0.0, 100.0, 0.0))
    exact = value(d, line, "plasma", 5.0)
    assert window(d, line, "plasma", exact, exact, 5.0, 5.0).inside[0] == 1.0
    assert window(d, line, "plasma", 0.0, exact, 0.0, 5.0).touched[0]
    assert window(d, line, "plasma", exact, 20.0, 0.0, 5.0).inside[0] == 1.0
    assert window(d, line, "plasma", 0.0, exact, 0.0, 5.0).inside[0] == 0.0


@few
@given(st.lists(st.tuples(st.floats(0, 60), st.floats(0, 200), st.floats(0, 50)), min_size=1, max_size=5).map(sorted),
       st.floats(0, 60), st.floats(0, 60), st.floats(0, 20), st.floats(0, 20))  # fmt: skip
def test_shares_add_up_and_agree_with_extremes(events, a, b, c, e):
    d, line = cases.people(cases.PROPOFOL), cases.timeline(*events)
    for which in COURSES:
        found = window(d, line, which, min(c, e), max(c, e), min(a, b), max(a, b))
        shares = np.array([found.below[0], found.inside[0], found.above[0]])
        assert shares.sum() == pytest.approx(1.0, abs=1e-15)
        assert (shares >= 0).all()
        assert found.lowest[0] <= found.at_end[0] <= found.highest[0]
        assert (shares[0] > 0) <= (found.lowest[0] < min(c, e))
        assert (shares[2] > 0) <= (found.highest[0] > max(c, e))
        assert (shares[1] > 0) <= found.touched[0]


@few
@given(st.floats(1, 59))
def test_a_window_is_the_sum_of_its_parts(cut):
    d, line = cases.people(cases.PROPOFOL), cases.timeline(*BUSY)
    for which in COURSES:
        whole, first, second = (window(d, line, which, 2.0, 4.0, *ends) for ends in ((0, 60), (0, cut), (cut, 60)))
        parts = first.inside[0] * cut + second.inside[0] * (60 - cut)
        assert whole.inside[0] * 60 == pytest.approx(parts, abs=1e-11)
        assert whole.lowest[0] == pytest.approx(min(first.lowest[0], second.lowest[0]), rel=1e-12)


# ---- what cannot be judged ----


@pytest.mark.parametrize(("low", "high", "start", "end", "code"), [
    (1.0, 2.0, math.nan, 5.0, kernels.BAD_WINDOW), (1.0, 2.0, 0.0, math.inf, kernels.BAD_WINDOW),
    (1.0, 2.0, 5.0, 4.0, kernels.BAD_WINDOW), (math.nan, 2.0, 0.0, 5.0, kernels.BAD_LIMITS),
    (3.0, 2.0, 0.0, 5.0, kernels.BAD_LIMITS),
])  # fmt: skip
def test_a_window_that_makes_no_sense_is_a_status_of_that_patient_alone(low, high, start, end, code):
    d, line = cases.people(cases.PROPOFOL, cases.PROPOFOL), cases.timeline((0.0, 100.0, 0.0), n=2)
    limits = (np.array([given, fine]) for given, fine in ((low, 1.0), (high, 2.0), (start, 0.0), (end, 5.0)))
    found = solve.window_course(d, line, "plasma", *limits)
    assert found.status.tolist() == [code, 0]
    assert np.isnan(found.inside[0])
    assert np.isfinite(found.inside[1])
    assert not found.touched[0]


def test_an_effect_site_that_does_not_exist_is_not_judged():
    d = solve.disposition({"V1": np.array([10.0]), "CL": np.array([1.0])})
    found = window(d, cases.timeline((0.0, 1.0, 0.0)), "effect_site", 0.0, 1.0, 0.0, 1.0)
    assert found.status[0] == kernels.NO_EFFECT_SITE
    with pytest.raises(ValueError, match="'biophase'"):
        window(d, cases.timeline((0.0, 1.0, 0.0)), "biophase", 0.0, 1.0, 0.0, 1.0)
