"""Courses against 120-digit references, matrix exponentials and general integrators; exact laws; counts and bins."""

from __future__ import annotations

import csv
import os
import runpy
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import solve_ivp
from scipy.linalg import expm

from popsim import solve
from popsim.records import Timeline

HERE = Path(__file__)
REFERENCE = HERE.parents[1] / "reference"
cases = SimpleNamespace(**runpy.run_path(str(HERE.with_name("solver_cases.py"))))
few = settings(max_examples=cases.EXAMPLES, deadline=None, database=None)
times = st.integers(0, 1600).map(lambda eighths: eighths / 8)  # sums of such times are exact
amounts = st.just(0.0) | st.floats(1e-6, 500.0)
events = st.lists(st.tuples(times, amounts, amounts), min_size=1, max_size=5).map(sorted)
GRID = np.array([0.0, 0.5, 1.0, 2.0, 4.0, 4.5, 30.0, 90.0, 200.0, 600.0])


def reference() -> dict[str, np.ndarray]:
    """The stored sets, or those of another file that the script wrote (POPSIM_SOLVER_REFERENCE: 10,000, say)."""
    stored = Path(os.environ.get("POPSIM_SOLVER_REFERENCE", REFERENCE / "solver_reference.csv"))
    with stored.open(encoding="utf-8") as file:
        rows = list(csv.DictReader(line for line in file if not line.startswith("#")))
    rows = rows[::10] if cases.SLOW else rows
    return {name: np.array([row[name] if name == "family" else float(row[name]) for row in rows]) for name in rows[0]}


def short(until: np.ndarray, bolus: np.ndarray, rate: np.ndarray, oral: np.ndarray) -> Timeline:
    nothing = np.zeros_like(until)
    columns = ((nothing, until), (bolus, nothing), (rate, nothing), (oral, nothing))
    return Timeline(*(np.stack(column, 1) for column in columns))


# ---- against 120 digits, matrix exponentials, integrators ----


@pytest.mark.parametrize("which", ["plasma", "effect_site"])
def test_the_120_digit_reference(which):
    """mpmath, tests/reference/make_solver_reference.py: shipped-like, twelve decades, coincident rates, tiny flows, by
    mouth; 1,000 sets. Worst seen: 2.9e-15."""
    wanted = reference()
    n = len(wanted["set"])
    d = solve.disposition({name: wanted[name] for name in (*cases.NAMES, "ka")})
    line = short(*(wanted[name] for name in ("until_min", "bolus_mg", "rate_mg_per_min", "oral_mg")))
    at = wanted["time_min"]
    instant = solve.window_course(d, line, which, np.full(n, -np.inf), np.full(n, np.inf), at, at).at_end
    on_grid = np.empty(n)
    for i in range(n):
        rows = slice(i, i + 1)
        grid = np.array([0.0, at[i] / 3, at[i]])
        plasma, site = solve.courses_on_grid(cases.rows_of(d, rows), cases.rows_of(line, rows), grid)
        on_grid[i] = (plasma if which == "plasma" else site)[0, -1]
    keys = np.char.add(wanted["family"], wanted["set"].astype(int).astype(str))
    peak = np.array([wanted[which][keys == key].max() for key in keys])
    counted = wanted[which] > 1e-12 * peak
    assert counted.mean() > 0.8
    np.testing.assert_allclose(instant[counted], wanted[which][counted], rtol=1e-13)
    np.testing.assert_allclose(on_grid[counted], wanted[which][counted], rtol=1e-13)


def test_the_stored_reference_is_what_its_script_computes():
    """A few rows anew at 150 digits; the script shares nothing with popsim."""
    script = runpy.run_path(str(REFERENCE / "make_solver_reference.py"))
    wanted = reference()
    for i in range(0, len(wanted["set"]), max(1, len(wanted["set"]) // 12)):
        p = {name: wanted[name][i] for name in (*cases.NAMES, "ka")}
        given = (wanted[name][i] for name in ("bolus_mg", "oral_mg", "rate_mg_per_min", "until_min", "time_min"))
        assert script["course"](p, *given) == (wanted["plasma"][i], wanted["effect_site"][i])


@pytest.mark.parametrize("drug", ["PROPOFOL", "REMIFENTANIL"])
def test_scipys_matrix_exponential(drug):
    """scipy.linalg.expm of the linear system with its input, piece by piece, relative to the peak."""
    p = getattr(cases, drug)
    line = cases.timeline((0.0, 100.0, 12.0), (7.3, 0.0, 8.0), (40.0, 20.0, 0.0))
    grid = np.linspace(0.0, 120.0, 61)
    matrix = cases.rate_matrix(p)
    state, wanted = np.zeros(5), np.empty((2, grid.size))
    for t, now in enumerate(grid):
        before = grid[t - 1] if t else 0.0
        for at, bolus, rate in zip(*(column[0, :3] for column in (line.time_min, line.bolus_mg, line.rate_mg_per_min)),
                                   strict=True):  # fmt: skip
            if before < at <= now or at == now == 0.0:
                state = expm(matrix * (at - before)) @ state
                state[0] += bolus / p["V1"]
                state[4] = rate
                before = at
        state = expm(matrix * (now - before)) @ state
        wanted[:, t] = state[0], state[3]
    for ours, theirs in zip(solve.courses_on_grid(cases.people(p), line, grid), wanted, strict=True):
        assert np.abs(ours[0] - theirs).max() < 1e-12 * theirs.max()


@pytest.mark.parametrize("method", ["LSODA", "DOP853"])
@pytest.mark.parametrize("drug", ["PROPOFOL", "REMIFENTANIL"])
def test_scipys_integrators(drug, method):
    """scipy.integrate.solve_ivp at rtol 1e-10, relative to the peak."""
    p = getattr(cases, drug)
    matrix = cases.rate_matrix(p)
    grid = np.linspace(0.0, 90.0, 31)
    start = np.array([100.0 / p["V1"], 0.0, 0.0, 0.0, 10.0])
    found = solve_ivp(lambda t, y: matrix @ y, (0.0, 90.0), start, method, grid, rtol=1e-10, atol=1e-12)
    ours = solve.courses_on_grid(cases.people(p), cases.timeline((0.0, 100.0, 10.0)), grid)
    for course, row in zip(ours, (0, 3), strict=True):
        assert np.abs(course[0] - found.y[row]).max() < 1e-7 * course.max()


# ---- exact laws ----


def both(d, line, grid=GRID):
    return np.stack(solve.courses_on_grid(d, line, grid))


@few
@given(events, events)
def test_superposition(one, other):
    """The system is linear: what two protocols do together is the sum of what each does."""
    d = cases.people(cases.PROPOFOL)
    moments = sorted({at for at, _, _ in one + other})

    def merged(*protocols):
        rows = []
        for at in moments:
            bolus = sum(b for protocol in protocols for t, b, _ in protocol if t == at)
            rate = sum(([r for t, _, r in protocol if t <= at] or [0.0])[-1] for protocol in protocols)
            rows.append((at, bolus, rate))
        return both(d, cases.timeline(*rows))

    together = merged(one, other)
    np.testing.assert_allclose(together, merged(one) + merged(other), rtol=1e-12, atol=1e-12 * together.max())


@few
@given(events, st.floats(0.01, 100.0))
def test_double_the_dose_double_the_level(one, times_more):
    d = cases.people(cases.PROPOFOL)
    more = [(at, bolus * times_more, rate * times_more) for at, bolus, rate in one]
    np.testing.assert_allclose(both(d, cases.timeline(*more)), times_more * both(d, cases.timeline(*one)), rtol=1e-13)


@few
@given(events, times)
def test_the_clock_does_not_matter(one, later):
    d = cases.people(cases.REMIFENTANIL)
    shifted = [(at + later, bolus, rate) for at, bolus, rate in one]
    early = both(d, cases.timeline(*one), np.array([300.0, 301.0]))
    late = both(d, cases.timeline(*shifted), np.array([300.0, 301.0]) + later)
    np.testing.assert_allclose(late, early, rtol=1e-11)


@few
@given(events)
def test_what_is_given_is_eliminated(one):
    """Mass balance: CL times the area under plasma over all time is the dose (textbook)."""
    one = [*one, (250.0, 0.0, 0.0)]
    total = sum(bolus for _, bolus, _ in one)
    total += sum(rate * (then - at) for (at, _, rate), (then, _, _) in zip(one, one[1:], strict=False))
    area, status = solve.area_under_curve(cases.people(cases.PROPOFOL), cases.timeline(*one), "plasma",
                                          np.zeros(1), np.full(1, 1e6))  # fmt: skip
    assert status[0] == 0
    assert cases.PROPOFOL["CL"] * area[0] == pytest.approx(total, rel=1e-12, abs=1e-300)


@few
@given(events)
def test_never_negative(one):
    assert (both(cases.people(cases.PROPOFOL, cases.REMIFENTANIL), cases.timeline(*one, n=2)) >= 0).all()


def test_steady_state_of_an_infusion_is_rate_over_clearance():
    """Textbook: R/CL, in plasma and at the effect site alike."""
    for p in (cases.PROPOFOL, cases.REMIFENTANIL):
        level = both(cases.people(p), cases.timeline((0.0, 0.0, 9.0)), np.array([0.0, 1e5]))[:, 0, 1]
        np.testing.assert_allclose(level, 9.0 / p["CL"], rtol=1e-13)


def test_three_time_constants_95_percent_five_half_lives_97_percent():
    """Common practice: of the way to steady state in one compartment, to the digits of the rule."""
    volume, clearance = 20.0, 2.0
    d = solve.disposition({"V1": np.array([volume]), "CL": np.array([clearance])})
    constant = volume / clearance
    grid = np.array([0.0, 3 * constant, 5 * np.log(2) * constant])
    reached = solve.courses_on_grid(d, cases.timeline((0.0, 0.0, 1.0)), grid)[0][0] * clearance
    assert round(reached[1], 2) == 0.95
    assert round(reached[2], 2) == 0.97


@pytest.mark.parametrize("which", ["plasma", "effect_site"])
def test_area_while_infusing_is_what_a_fine_grid_says(which):
    """Simpson's rule (scipy) on 20,001 points from 3 to 47 min."""
    from scipy.integrate import simpson

    d, line = cases.people(cases.PROPOFOL), cases.timeline((0.0, 100.0, 5.0), (60.0, 0.0, 0.0))
    grid = np.linspace(3.0, 47.0, 201 if cases.SLOW else 20001)
    area, _ = solve.area_under_curve(d, line, which, np.array([3.0]), np.array([47.0]))
    wanted = simpson(solve.courses_on_grid(d, line, grid)[which != "plasma"][0], x=grid)
    assert area[0] == pytest.approx(wanted, rel=1e-4 if cases.SLOW else 1e-11)


# ---- patients, grids, events ----


def test_one_failing_patient_never_spoils_the_rest():
    values = cases.varied(40)
    line = cases.timeline((0.0, 100.0, 10.0), (30.0, 0.0, 0.0), n=40)
    whole = both(solve.disposition(values), line)
    values["CL"][7], values["V2"][20] = np.nan, -1.0
    line.bolus_mg[33, 0] = -5.0
    spoilt = both(solve.disposition(values), line)
    failed = np.isin(np.arange(40), [7, 20, 33])
    assert np.isnan(spoilt[:, failed]).all()
    np.testing.assert_array_equal(spoilt[:, ~failed], whole[:, ~failed])


def test_the_same_bytes_for_any_split_of_the_block():
    values = cases.varied(101)
    line = cases.timeline((0.0, 100.0, 10.0), (11.3, 5.0, 8.0), (30.0, 0.0, 0.0), n=101)
    line.time_min[:, 1] += np.linspace(0, 5, 101)
    d = solve.disposition(values)
    whole = both(d, line)
    parts = [both(cases.rows_of(d, rows), cases.rows_of(line, rows))
             for rows in (slice(0, 1), slice(1, 34), slice(34, 100), slice(100, 101))]  # fmt: skip
    np.testing.assert_array_equal(np.concatenate(parts, axis=1), whole)


@few
@given(events)
def test_events_anywhere_on_any_grid_are_what_instants_say(one):
    """Two routes to the same value: steps of a grid with events inside, and one exact walk to each time."""
    d, line = cases.people(cases.PROPOFOL), cases.timeline(*one)
    for column, which in enumerate(("plasma", "effect_site")):
        course = both(d, line)[column][0]
        for t, at in enumerate(GRID):
            instant = cases.window(d, line, which, 0.0, np.inf, at, at).at_end[0]
            assert course[t] == pytest.approx(instant, rel=1e-12, abs=1e-300)


def test_a_value_at_a_dose_is_just_after_it_and_doses_at_one_time_add_up():
    d = cases.people(cases.PROPOFOL)
    line = cases.timeline((2.0, 10.0, 0.0), (2.0, 20.0, 0.0), (2.0, 0.0, 0.0))
    plasma, site = both(d, line, np.array([0.0, 1.0, 2.0, 2.5]))
    assert plasma[0, :3] == pytest.approx([0.0, 0.0, 30.0 / cases.PROPOFOL["V1"]], rel=1e-15)
    assert site[0, :3].tolist() == [0.0, 0.0, 0.0]
    assert site[0, 3] > 0


@pytest.mark.parametrize(("every", "count"), [(0.1, 901), (0.5, 181), (1 / 3, 300), (7.7, 50)])
def test_a_uniform_grid_has_one_step_length_whatever_the_rounding(every, count):
    grid = np.append(every * np.arange(count), every * (count - 1) + every / 7)
    length_of, lengths = solve._steps(grid)
    assert lengths.size == 2
    np.testing.assert_allclose(np.cumsum(lengths[length_of], dtype=np.longdouble), grid[1:], rtol=1e-14)


@few
@given(st.lists(st.floats(0.0, 1e3), min_size=2, max_size=30, unique=True).map(sorted))
def test_any_grid_is_met_by_its_steps(grid):
    length_of, lengths = solve._steps(np.array(grid))
    np.testing.assert_allclose(grid[0] + np.cumsum(lengths[length_of]), grid[1:], rtol=1e-13, atol=1e-12)


def test_without_an_effect_site_it_stays_zero():
    d = solve.disposition({"V1": np.array([10.0]), "CL": np.array([1.0])})
    plasma, site = solve.courses_on_grid(d, cases.timeline((0.0, 100.0, 1.0)), GRID)
    assert (plasma > 0).all()
    assert (site == 0).all()


@pytest.mark.parametrize("spoil", [
    {"time_min": np.array([[5.0, 1.0]])}, {"time_min": np.array([[np.nan, 1.0]])},
    {"time_min": np.array([[np.inf, 1.0]])}, {"rate_mg_per_min": np.array([[np.nan, 0.0]])},
    {"bolus_mg": np.array([[-1.0, 0.0]])}, {"bolus_mg": np.array([[np.inf, 0.0]])},
])  # fmt: skip
def test_a_bad_timeline_gives_no_course(spoil):
    good = {"time_min": np.array([[0.0, 1.0]]), "bolus_mg": np.ones((1, 2)), "rate_mg_per_min": np.ones((1, 2))}
    d = cases.people(cases.PROPOFOL)
    assert np.isfinite(both(d, Timeline(**good))).all()
    assert np.isnan(both(d, Timeline(**{**good, **spoil}))).all()


@pytest.mark.parametrize("grid", [[], [0.0, 0.0], [1.0, 0.5], [0.0, np.inf], [[0.0, 1.0]]])
def test_a_bad_grid_is_refused(grid):
    with pytest.raises(ValueError, match="grid"):
        solve.courses_on_grid(cases.people(cases.PROPOFOL), cases.timeline((0.0, 1.0, 0.0)), np.array(grid))


def test_wrong_shapes_are_refused():
    d = cases.people(cases.PROPOFOL)
    with pytest.raises(ValueError, match=r"time_min has shape \(2, 3\), not \(1, 3\)"):
        solve.courses_on_grid(d, cases.timeline((0.0, 1.0, 0.0), n=2), GRID)
    with pytest.raises(ValueError, match="CL has shape"):
        solve.disposition({"V1": np.ones(2), "CL": np.ones(3)})
    with pytest.raises(ValueError, match="without V2"):
        solve.disposition({"V1": np.ones(2), "CL": np.ones(2), "Q2": np.ones(2)})


@pytest.mark.parametrize("drug", ["PROPOFOL", "REMIFENTANIL"])
def test_a_thousand_steps_lose_no_digits(drug):
    """The recursion over 1,081 times of 0.1 min against one single step to each time."""
    d, line = cases.people(getattr(cases, drug)), cases.timeline((0.0, 100.0, 12.0))
    grid = 0.1 * np.arange(1081)
    for course, which in zip(solve.courses_on_grid(d, line, grid), ("plasma", "effect_site"), strict=True):
        at_once = [cases.window(d, line, which, 0.0, np.inf, at, at).at_end[0] for at in grid]
        np.testing.assert_allclose(course[0], at_once, rtol=2e-13)
