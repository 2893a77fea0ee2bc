"""Counts and bins over patients against numpy's own comparisons and quantiles of the kept courses."""

from __future__ import annotations

import runpy
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from popsim import solve

cases = SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("solver_cases.py"))))
GRID = np.append(0.5 * np.arange(150), [80.0, 90.0])  # several chunks of times, several lengths of step
CURVE = (93.0, 0.0, 3.0, 1.5, 1.9)
SHARES = (0.05, 0.25, 0.5, 0.75, 0.95)


def empty(groups: int, times: int, kind: type = np.int64) -> tuple[np.ndarray, np.ndarray]:
    return np.zeros((groups, times, 3), dtype=np.int64), np.zeros((groups, times, solve.BIN_COUNT), dtype=kind)


def binned(values: np.ndarray) -> np.ndarray:
    """Bins (B,) of some values: effects before any drug, which are the baseline."""
    n = len(values)
    one = np.ones(n)
    d = solve.disposition({"V1": one, "CL": one, "ke0": one})
    counts, bins = empty(1, 1)
    solve.count_over_time(d, cases.timeline((0.0, 0.0, 0.0), n=n), np.zeros(1), (values, one, one, one, one),
                          0 * one, one, np.ones((n, 1), dtype=bool), counts, bins)  # fmt: skip
    return bins[0, 0]


def counted(d, line, course, low, high, members, kind: type = np.int64, grid=GRID):
    counts, bins = empty(members.shape[1], grid.size, kind)
    solve.count_over_time(d, line, grid, course, low, high, members, counts, bins)
    return counts, bins


def some(n: int, groups: int):
    """Patients of whom one has no course; doses inside steps, by mouth too; limits; members."""
    luck = np.random.default_rng(3)
    values = {**cases.varied(n), "ka": np.full(n, 0.1), "lag": luck.uniform(0, 10, n)}
    values["CL"][5] = np.nan
    line = cases.timeline((0.0, 100.0, 12.0), (10.2, 0.0, 9.0), (30.0, 20.0, 0.0), n=n)
    line.time_min[:, 1] += luck.uniform(0, 5, n)
    line.oral_mg[::2, 1] = 200.0
    members = luck.random((n, groups)) < 0.6
    return solve.disposition(values), line, luck.uniform(0.5, 2.0, n), luck.uniform(2.0, 5.0, n), members


@pytest.mark.parametrize("kind", [np.int32, np.int64])
@pytest.mark.parametrize("course", ["plasma", "effect_site", "effect"])
def test_counts_are_numpys_comparisons_of_the_kept_courses(course, kind):
    """More patients than a byte can count, more groups than a word holds."""
    n, groups = (70, 9) if cases.SLOW else (330, 9)
    d, line, low, high, members = some(n, groups)
    plasma, site = solve.courses_on_grid(d, line, GRID)
    values, wanted = plasma if course == "plasma" else site, course
    if course == "effect":
        wanted, low, high = tuple(np.full(n, x) for x in CURVE), np.full(n, 40.0), np.full(n, 60.0)
        ratio = site / CURVE[2]
        r = ratio ** np.where(ratio > 1, CURVE[4], CURVE[3])
        values = CURVE[0] * (1 - r / (1 + r))
    counts, bins = counted(d, line, wanted, low, high, members, kind)
    edges = solve.bin_layout()
    for g in range(groups):
        chosen = values[members[:, g] & (np.arange(n) != 5)]
        limits = (limit[members[:, g] & (np.arange(n) != 5), None] for limit in (low, high))
        under, over = (chosen < next(limits)), (chosen > next(limits))
        zones = np.stack([under.sum(0), (~under & ~over).sum(0), over.sum(0)], axis=1)
        np.testing.assert_array_equal(counts[g], zones)
        for t in (0, 1, 63, 64, 151):
            np.testing.assert_array_equal(bins[g, t].sum(), len(chosen))
            if course != "effect":  # numpy's power and the machine's differ in the last digit
                np.testing.assert_array_equal(bins[g, t][2:], np.histogram(chosen[:, t], edges[2:])[0])


def test_any_order_of_patients_and_blocks_counts_the_same():
    d, line, low, high, members = some(90, 2)
    whole, parts = counted(d, line, "plasma", low, high, members), empty(2, GRID.size)
    for rows in (slice(50, 90), slice(0, 7), slice(7, 50)):
        solve.count_over_time(cases.rows_of(d, rows), cases.rows_of(line, rows), GRID, "plasma", low[rows], high[rows],
                              members[rows], *parts)  # fmt: skip
    for one, other in zip(whole, parts, strict=True):
        np.testing.assert_array_equal(one, other)


def test_shares_alone_need_no_bins():
    d, line, low, high, members = some(40, 3)
    counts, _ = empty(3, GRID.size)
    solve.count_over_time(d, line, GRID, "plasma", low, high, members, counts)
    np.testing.assert_array_equal(counts, counted(d, line, "plasma", low, high, members)[0])


@settings(max_examples=30, deadline=None, database=None)
@given(st.lists(st.floats(-24, 15.9).map(lambda power: 2.0**power) | st.just(0.0), min_size=1, max_size=60))
def test_percentiles_are_numpys_within_their_bin(values):
    """numpy.quantile (linear), to 1/128 = 0.78 %: under 0.8 %."""
    values = np.array(values)
    found = solve.percentiles_from_bins(binned(values), SHARES)
    np.testing.assert_allclose(found, np.quantile(values, SHARES), rtol=1 / 128)


def test_percentiles_of_many_are_closer():
    values = np.random.default_rng(5).lognormal(1.0, 0.5, 20000)
    found = solve.percentiles_from_bins(binned(values), SHARES)
    np.testing.assert_allclose(found, np.quantile(values, SHARES), rtol=1e-3)


def test_bins_are_numpys_histogram_of_the_layout():
    edges = solve.bin_layout()
    assert edges.size == solve.BIN_COUNT + 1
    assert (np.diff(edges) > 0).all()
    inner = edges[3:-1]
    assert inner[0] == 2.0**-24
    assert inner[-1] == 2.0**16
    assert inner.size == 40 * 128 + 1
    assert (np.diff(inner) / inner[:-1]).max() == 1 / 128
    values = np.concatenate([[-1.0, 0.0, 5e-324, 1e-9, 1e9, 1e300], inner, np.nextafter(inner, 0), 1.001 * inner])
    wanted = np.bincount(np.searchsorted(edges, values, side="right").clip(1, solve.BIN_COUNT) - 1,
                         minlength=solve.BIN_COUNT)  # fmt: skip
    np.testing.assert_array_equal(binned(values), wanted)


def test_what_lies_beyond_the_bins_is_said_and_nothing_gives_nothing():
    beyond = binned(np.array([-1.0, 0.0, 1e9, np.nan]))
    assert solve.percentiles_from_bins(beyond, (0.0, 0.5, 1.0)).tolist() == [-np.inf, 0.0, np.inf]
    nothing = solve.percentiles_from_bins(np.zeros((2, 3, solve.BIN_COUNT), dtype=np.int32), SHARES)
    assert nothing.shape == (2, 3, 5)
    assert np.isnan(nothing).all()


def test_wrong_shapes_and_limits_are_refused():
    counts, bins = empty(1, 2)
    one = np.ones(3)
    good = {"disposition": cases.people(*[cases.PROPOFOL] * 3), "timeline": cases.timeline((0.0, 1.0, 0.0), n=3),
            "grid_min": np.arange(2.0), "course": "plasma", "low": 0 * one, "high": one,
            "members": np.ones((3, 1), dtype=bool), "counts": counts, "bins": bins}  # fmt: skip
    solve.count_over_time(**good)
    for name, bad in (("low", np.zeros(2)), ("high", np.full(3, np.nan)), ("members", np.ones((3, 1))),
                      ("counts", counts[:, :1]), ("bins", bins[:, :, :-1]), ("bins", bins.astype(float)),
                      ("course", "biophase"), ("course", (one, one)), ("grid_min", np.zeros(2))):  # fmt: skip
        with pytest.raises(ValueError, match=r"shape|are \(|not a number|not one of|parameters|grid"):
            solve.count_over_time(**{**good, name: bad})
    with pytest.raises(ValueError, match="not from 0 to 1"):
        solve.percentiles_from_bins(bins, (50.0,))
