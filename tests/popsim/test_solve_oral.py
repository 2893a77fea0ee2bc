"""Doses by mouth (depot, lag, bioavailability) against textbook forms, scipy and exact laws."""

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
from scipy.integrate import simpson, solve_ivp
from scipy.optimize import brentq, minimize_scalar

from popsim import kernels, solve

cases = SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("solver_cases.py"))))
few = settings(max_examples=cases.EXAMPLES, deadline=None, database=None)
window = cases.window
GRID = np.linspace(0.0, 60.0, 121)
COURSES = ["plasma", "effect_site"]
ORAL = {**cases.PROPOFOL, "ka": 0.05}


def by_mouth(*events: tuple[float, float, float, float], n: int = 1):
    """(time, bolus, rate, oral) for n patients."""
    line = cases.timeline(*(event[:3] for event in events), n=n)
    oral = np.zeros_like(line.time_min)
    oral[:, : len(events)] = [event[3] for event in events]
    return dataclasses.replace(line, oral_mg=oral)


def both(d, line, grid=GRID):
    return np.stack(solve.courses_on_grid(d, line, grid))


def one_compartment(ka: float, **others: float):
    return cases.people({"V1": 10.0, "CL": 1.0, "ke0": 0.3, "ka": ka, **others})


@pytest.mark.parametrize("ka", [1.0, 0.4, 0.02])
def test_one_compartment_is_the_textbook_curve(ka):
    """C = F D ka/(V (ka - k)) (exp(-k t) - exp(-ka t)), from the end of the lag on (Bateman; textbook)."""
    d, k, lag = one_compartment(ka, F=0.7, lag=2.25), 0.1, 2.25
    since = np.maximum(GRID - lag, 0.0)
    wanted = 0.7 * 100 * ka / (10 * (ka - k)) * (np.exp(-k * since) - np.exp(-ka * since))
    np.testing.assert_allclose(both(d, by_mouth((0.0, 0.0, 0.0, 100.0)))[0, 0], wanted, rtol=1e-12, atol=1e-15)


def test_where_ka_meets_the_elimination_rate_it_is_the_limit():
    """ka = k: C = D k t exp(-k t)/V; and with ke0 = k as well, Ce = D (k t)^2/2 exp(-k t)/V (textbook limits)."""
    plasma, site = both(cases.people({"V1": 10.0, "CL": 1.0, "ka": 0.1, "ke0": 0.1}), by_mouth((0.0, 0.0, 0.0, 100.0)))
    np.testing.assert_allclose(plasma[0], 10 * 0.1 * GRID * np.exp(-0.1 * GRID), rtol=1e-14)
    np.testing.assert_allclose(site[0], 10 * (0.1 * GRID) ** 2 / 2 * np.exp(-0.1 * GRID), rtol=1e-14)


def test_time_and_height_of_the_peak_are_the_textbooks():
    """t = ln(ka/k)/(ka - k); C there is D/V exp(-k t)."""
    found = window(one_compartment(0.4), by_mouth((0.0, 0.0, 0.0, 100.0)), "plasma", 0.0, math.inf, 0.0, 60.0)
    at = math.log(0.4 / 0.1) / 0.3
    assert found.highest_at_min[0] == pytest.approx(at, rel=1e-7)
    assert found.highest[0] == pytest.approx(10 * math.exp(-0.1 * at), rel=1e-14)
    assert found.lowest_at_min[0] == 0.0


def test_theophylline_at_its_published_estimates():
    """4 mg/kg at the estimates of the mixed-model fit (Pinheiro and Bates 2000, from memory: lKe -2.4547, lKa 0.46574,
    lCl -3.22722 per h and kg); wanted: the closed form at those estimates before rounding, so to 1e-5."""
    k, ka, cl = (np.exp([x]) for x in (-2.4547, 0.46574, -3.22722))
    d = solve.disposition({"V1": cl / k, "CL": cl, "ka": ka})
    plasma, _ = solve.courses_on_grid(d, by_mouth((0.0, 0.0, 0.0, 4.0)), np.array([0.25, 0.5, 1, 2, 4, 8, 12, 24]))
    wanted = [2.813081, 4.642201, 6.540058, 7.331231, 6.477056, 4.604878, 3.266005, 1.165213]
    np.testing.assert_allclose(plasma[0], wanted, rtol=1e-5)
    found = window(d, by_mouth((0.0, 0.0, 0.0, 4.0)), "plasma", 0.0, math.inf, 0.0, 24.0)
    assert found.highest_at_min[0] == pytest.approx(1.9375, abs=5e-5)


@pytest.mark.parametrize("method", ["LSODA", "DOP853"])
def test_scipys_integrators(method):
    """scipy.integrate.solve_ivp at rtol 1e-10, with the depot as a sixth equation, relative to the peak."""
    matrix = np.zeros((6, 6))
    matrix[:5, :5] = cases.rate_matrix(ORAL)
    matrix[5, 5], matrix[0, 5] = -ORAL["ka"], ORAL["ka"] / ORAL["V1"]
    start = np.array([20.0 / ORAL["V1"], 0.0, 0.0, 0.0, 3.0, 400.0])
    found = solve_ivp(lambda t, y: matrix @ y, (0.0, 60.0), start, method, GRID, rtol=1e-10, atol=1e-12)
    ours = both(cases.people(ORAL), by_mouth((0.0, 20.0, 3.0, 400.0)))[:, 0]
    for course, row in zip(ours, (0, 3), strict=True):
        assert np.abs(course - found.y[row]).max() < 1e-7 * course.max()


def test_lag_and_bioavailability_shift_and_scale_that_patient_alone():
    d = cases.people({**ORAL, "F": 1.0, "lag": 0.0}, {**ORAL, "F": 0.25, "lag": 3.5})
    plasma, site = both(d, by_mouth((1.0, 0.0, 0.0, 100.0), n=2), np.array([1.0, 4.5, 10.0, 13.5, 40.0, 43.5]))
    for course in (plasma, site):
        np.testing.assert_allclose(course[1, [1, 3, 5]], 0.25 * course[0, [0, 2, 4]], rtol=1e-12)


def test_an_infusion_runs_on_while_a_dose_waits_out_its_lag():
    """Superposition: the lagged dose neither stops the infusion nor is lost at its end."""
    d = cases.people({**ORAL, "lag": 7.3})
    steps = (0.0, 10.0, 4.0), (5.0, 0.0, 2.0), (9.0, 0.0, 6.0), (30.0, 0.0, 0.0)
    together = both(d, by_mouth(*((*step, oral) for step, oral in zip(steps, (0.0, 100.0, 0.0, 50.0), strict=True))))
    infusion = both(d, by_mouth(*((*step, 0.0) for step in steps)))
    doses = both(d, by_mouth((5.0, 0.0, 0.0, 100.0), (30.0, 0.0, 0.0, 50.0)))
    assert (doses[0, 0, GRID < 12.3] == 0).all()
    np.testing.assert_allclose(together, infusion + doses, rtol=1e-13)


@few
@given(st.floats(1e-3, 1e3), st.floats(0.1, 1.0), st.floats(0.0, 60.0))
def test_what_is_absorbed_is_eliminated(ka, share, lag):
    """CL times the area under plasma, and under the effect site, over all time is F times the dose (textbook)."""
    d = cases.people({**ORAL, "ka": ka, "F": share, "lag": lag})
    for which in COURSES:
        area, status = solve.area_under_curve(d, by_mouth((0.0, 0.0, 0.0, 100.0)), which, np.zeros(1), np.full(1, 1e6))
        assert status[0] == 0
        assert ORAL["CL"] * area[0] == pytest.approx(100 * share, rel=1e-12)


@pytest.mark.parametrize("which", COURSES)
def test_areas_are_what_a_fine_grid_says(which):
    """Simpson's rule (scipy)."""
    d, line = cases.people(ORAL), by_mouth((0.0, 50.0, 2.0, 300.0))
    grid = np.linspace(3.0, 47.0, 201 if cases.SLOW else 20001)
    area, _ = solve.area_under_curve(d, line, which, np.array([3.0]), np.array([47.0]))
    wanted = simpson(both(d, line, grid)[COURSES.index(which), 0], x=grid)
    assert area[0] == pytest.approx(wanted, rel=1e-4 if cases.SLOW else 1e-12)


@pytest.mark.parametrize("which", COURSES)
def test_windows_are_brentqs_and_scipys_extremes(which):
    d, line = cases.people(ORAL), by_mouth((0.0, 30.0, 1.0, 900.0))
    inner = np.linspace(0.01, 60.0, 6001)
    course = both(d, line, inner)[COURSES.index(which), 0]

    def value(t):
        return window(d, line, which, 0.0, math.inf, t, t).at_end[0]

    peak = minimize_scalar(lambda t: -value(t), method="bounded", bounds=(0.05, 59.0), options={"xatol": 1e-9})
    level = 0.9 * course[500:].max()
    found = window(d, line, which, level, math.inf, 5.0, 60.0)
    over = (course >= level)[inner >= 5.0]
    later = inner[inner >= 5.0]
    roots = [brentq(lambda t: value(t) - level, later[j], later[j + 1], xtol=1e-13)
             for j in np.nonzero(over[1:] != over[:-1])[0]]  # fmt: skip
    pieces = np.diff([5.0, *roots, 60.0])
    assert len(roots) > 0
    assert found.inside[0] * 55 == pytest.approx(pieces[int(not over[0]) :: 2].sum(), rel=1e-11)
    assert found.first_inside_min[0] == pytest.approx(5.0 if over[0] else roots[0], rel=1e-12)
    if which == "effect_site":
        assert found.highest[0] == pytest.approx(-peak.fun, rel=1e-13)
        assert found.highest_at_min[0] == pytest.approx(peak.x, rel=1e-6)


def test_by_mouth_without_absorption_is_a_status_of_that_patient_alone():
    d = cases.people({**ORAL, "ka": 0.0}, ORAL)
    found = window(d, by_mouth((0.0, 0.0, 0.0, 100.0), n=2), "plasma", 0.0, 1.0, 0.0, 9.0)
    assert found.status.tolist() == [kernels.NO_ABSORPTION, 0]
    assert np.isnan(both(d, by_mouth((0.0, 0.0, 0.0, 100.0), n=2))[0, 0]).all()
    assert window(d, by_mouth((0.0, 9.0, 0.0, 0.0), n=2), "plasma", 0.0, 1.0, 0.0, 9.0).status.tolist() == [0, 0]


@pytest.mark.parametrize(("name", "value", "code"), [
    ("ka", -1.0, kernels.NOT_POSITIVE), ("F", 0.0, kernels.NOT_POSITIVE), ("lag", -0.1, kernels.NOT_POSITIVE),
    ("ka", math.nan, kernels.NOT_FINITE), ("F", math.inf, kernels.NOT_FINITE),
])  # fmt: skip
def test_parameters_of_absorption_that_cannot_be(name, value, code):
    whole = {**ORAL, "F": 0.5, "lag": 1.0}
    assert cases.people({**whole, name: value}, whole).status.tolist() == [code, 0]
