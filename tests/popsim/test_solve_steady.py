"""Steady state of a repeated regimen against textbook sums and against simulating the doses one by one."""

from __future__ import annotations

import dataclasses
import math
import runpy
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from popsim import kernels, solve
from popsim.records import Timeline

cases = SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("solver_cases.py"))))
few = settings(max_examples=cases.EXAMPLES // 2, deadline=None, database=None)
window = cases.window
COURSES = ["plasma", "effect_site"]
ORAL = {**cases.PROPOFOL, "CL": 6.0, "ka": 0.05, "F": 0.8, "lag": 7.0}
SLOWEST = solve.disposition({name: np.array([value]) for name, value in ORAL.items()}).rates[0, 0]


def repeated(line: Timeline, interval: float) -> Timeline:
    return dataclasses.replace(line, interval_min=np.full(len(line.time_min), interval))


def one_by_one(administrations: list[tuple[float, float, float, float]], interval: float, times: int) -> Timeline:
    """(start, bolus, rate, minutes it runs), each given `times` times, as one long timeline; bolus by mouth if rate
    is nan."""
    edges: dict[float, list[float]] = {}
    for k in range(times):
        for start, dose, rate, lasts in administrations:
            edges.setdefault(start + k * interval, [0.0, 0.0, 0.0])
            if math.isnan(rate):
                edges[start + k * interval][2] += dose
            else:
                edges[start + k * interval][0] += dose
                edges[start + k * interval][1] += rate
                edges.setdefault(start + k * interval + lasts, [0.0, 0.0, 0.0])[1] -= rate
    at = sorted(edges)
    bolus, change, oral = np.array([edges[t] for t in at]).T
    rate = np.maximum(np.cumsum(change), 0.0)
    return Timeline(np.array([at]), bolus[None], np.where(rate < 1e-12, 0.0, rate)[None], oral[None])


def test_accumulation_is_the_textbooks():
    """One compartment, a bolus every tau: peak D/V/(1 - exp(-k tau)), trough that times exp(-k tau) (textbook)."""
    d = cases.people({"V1": 10.0, "CL": 1.0})
    found = window(d, repeated(cases.timeline((0.0, 100.0, 0.0)), 8.0), "plasma", 0.0, math.inf, 0.0, 8.0)
    peak = 10 / (1 - math.exp(-0.8))
    assert found.highest[0] == pytest.approx(peak, rel=1e-14)
    assert found.lowest[0] == found.at_end[0] == pytest.approx(peak * math.exp(-0.8), rel=1e-14)
    assert (found.highest_at_min[0], found.lowest_at_min[0]) == (0.0, 8.0)


def test_steady_state_by_mouth_is_the_textbooks():
    """C = F D ka/(V (ka - k)) (exp(-k t)/(1 - exp(-k tau)) - exp(-ka t)/(1 - exp(-ka tau))) (textbook)."""
    d = cases.people({"V1": 10.0, "CL": 1.0, "ka": 0.4, "F": 0.5})
    line = dataclasses.replace(repeated(cases.timeline((0.0, 0.0, 0.0)), 12.0), oral_mg=np.array([[100.0, 0.0, 0.0]]))
    t = np.linspace(0.0, 12.0, 25)
    terms = [np.exp(-rate * t) / -math.expm1(-rate * 12.0) for rate in (0.1, 0.4)]
    wanted = 0.5 * 100 * 0.4 / (10 * 0.3) * (terms[0] - terms[1])
    np.testing.assert_allclose(solve.courses_on_grid(d, line, t)[0][0], wanted, rtol=1e-13)


REGIMENS = {
    "bolus": [(0.0, 100.0, 0.0, 0.0)],
    "two boluses": [(5.0, 100.0, 0.0, 0.0), (20.0, 30.0, 0.0, 0.0)],
    "infusion": [(10.0, 0.0, 5.0, 30.0)],
    "infusion over the interval's end": [(40.0, 0.0, 5.0, 35.0)],
    "infusion longer than two intervals": [(10.0, 20.0, 5.0, 130.0)],
    "by mouth, the lag over the interval's end": [(55.0, 300.0, math.nan, 0.0)],
    "all together": [(0.0, 20.0, 3.0, 70.0), (30.0, 200.0, math.nan, 0.0), (59.0, 0.0, 1.0, 200.0)],
}


@pytest.mark.parametrize("name", REGIMENS)
def test_it_is_where_doses_given_one_by_one_lead(name):
    """As many intervals of 60 min as leave nothing of the beginning."""
    d, interval = cases.people(ORAL), 60.0
    times = math.ceil(40 / SLOWEST / interval)
    long, once = one_by_one(REGIMENS[name], interval, times), one_by_one(REGIMENS[name], interval, 1)
    begin = (times - 5) * interval  # longer after none is missing
    grid = np.linspace(0.0, interval, 13)[:-1] + 0.3
    steady = solve.courses_on_grid(d, repeated(once, interval), grid)
    wanted = solve.courses_on_grid(d, long, grid + begin)
    for ours, theirs in zip(steady, wanted, strict=True):
        np.testing.assert_allclose(ours, theirs, rtol=1e-11)
    for which in COURSES:
        level = float(np.median(wanted[which != "plasma"]))
        ours = window(d, repeated(once, interval), which, level, math.inf, 0.0, interval)
        theirs = window(d, long, which, level, math.inf, begin, begin + interval)
        assert ours.status[0] == 0
        for field in ("inside", "lowest", "highest"):
            assert getattr(ours, field)[0] == pytest.approx(getattr(theirs, field)[0], rel=1e-9)


@few
@given(st.floats(0.1, 1e5), st.floats(1.0, 1e3), st.floats(0.01, 3.0), st.floats(0.0, 2.0), st.floats(-6, 2))
def test_the_average_level_is_the_dose_over_clearance_and_interval(interval, dose, lasts, lag, ka_power):
    """Over one interval at steady state what comes in goes out: CL x area = F x dose, in plasma and effect site,
    however long an infusion or a lag lasts (in intervals). Textbook."""
    d = cases.people({**ORAL, "lag": lag * interval, "ka": 10.0**ka_power})
    infused = (0.3 * interval, 0.0, dose / (lasts * interval), lasts * interval)
    once = one_by_one([infused, (0.9 * interval, dose, math.nan, 0.0), (0.0, dose, 0.0, 0.0)], interval, 1)
    for which in COURSES:
        area, status = solve.area_under_curve(d, repeated(once, interval), which, np.zeros(1), np.full(1, interval))
        assert status[0] == 0
        assert ORAL["CL"] * area[0] == pytest.approx(dose * 2.8, rel=1e-12)


@pytest.mark.parametrize("which", COURSES)
def test_an_interval_ends_as_it_began(which):
    d, line = cases.people(cases.PROPOFOL), repeated(cases.timeline((10.0, 100.0, 3.0), (20.0, 0.0, 0.0)), 45.0)
    begin, end = (window(d, line, which, 0.0, math.inf, at, at).at_end[0] for at in (0.0, 45.0))
    assert begin == pytest.approx(end, rel=1e-14)
    assert begin > 0


def test_patients_who_repeat_and_who_do_not_stand_side_by_side():
    d = cases.people(cases.PROPOFOL, cases.PROPOFOL, cases.PROPOFOL)
    line = cases.timeline((0.0, 100.0, 3.0), (20.0, 0.0, 0.0), n=3)
    line.interval_min[:] = np.inf, 60.0, 90.0
    found = window(d, line, "plasma", 1.0, 4.0, 0.0, 60.0)
    for i, interval in enumerate((np.inf, 60.0, 90.0)):
        one = repeated(cases.timeline((0.0, 100.0, 3.0), (20.0, 0.0, 0.0)), interval)
        alone = window(cases.people(cases.PROPOFOL), one, "plasma", 1.0, 4.0, 0.0, 60.0)
        assert found.inside[i] == alone.inside[0]
        assert found.lowest[i] == alone.lowest[0]


@pytest.mark.parametrize(("interval", "end", "code"), [
    (60.0, 61.0, kernels.BAD_WINDOW), (0.0, 0.0, kernels.BAD_EVENT), (-5.0, 0.0, kernels.BAD_EVENT),
    (math.nan, 0.0, kernels.BAD_EVENT), (60.0, 60.0, 0),
])  # fmt: skip
def test_what_does_not_fit_an_interval_is_a_status(interval, end, code):
    line = repeated(cases.timeline((0.0, 100.0, 0.0)), interval)
    assert window(cases.people(cases.PROPOFOL), line, "plasma", 0.0, 1.0, 0.0, end).status[0] == code


def test_a_grid_past_the_interval_is_refused():
    line = repeated(cases.timeline((0.0, 100.0, 0.0)), 60.0)
    with pytest.raises(ValueError, match="interval"):
        solve.courses_on_grid(cases.people(cases.PROPOFOL), line, np.array([0.0, 61.0]))
