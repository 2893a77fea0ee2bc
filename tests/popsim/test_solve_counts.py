"""Counts and bins over patients against numpy's own comparisons and quantiles."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from popsim import solve

SHARES = (0.05, 0.25, 0.5, 0.75, 0.95)


def empty(groups: int, times: int, kind: type = np.int64) -> tuple[np.ndarray, np.ndarray]:
    return np.zeros((groups, times, 3), dtype=np.int64), np.zeros((groups, times, solve.BIN_COUNT), dtype=kind)


def binned(values: np.ndarray) -> np.ndarray:
    """Bins (B,) of some values."""
    n = len(values)
    counts, bins = empty(1, 1)
    solve.tally_on_grid(values[:, None], np.zeros(n), np.ones(n), np.ones((n, 1), dtype=bool), counts, bins)
    return bins[0, 0]


@pytest.mark.parametrize("kind", [np.int32, np.int64])
def test_counts_are_numpys_comparisons(kind):
    luck = np.random.default_rng(3)
    n, times, groups = 200, 21, 3
    values = np.exp(luck.standard_normal((n, times)))
    values[5] = np.nan
    low, high = luck.uniform(0.5, 1.0, n), luck.uniform(1.0, 3.0, n)
    values[6], values[7] = low[6], high[7]
    members = luck.random((n, groups)) < 0.6
    counts, bins = empty(groups, times, kind)
    solve.tally_on_grid(values, low, high, members, counts, bins)
    for g in range(groups):
        chosen = values[members[:, g]]
        limits = low[members[:, g], None], high[members[:, g], None]
        wanted = [chosen < limits[0], (chosen >= limits[0]) & (chosen <= limits[1]), chosen > limits[1]]
        np.testing.assert_array_equal(counts[g], np.stack([zone.sum(0) for zone in wanted], axis=1))
        np.testing.assert_array_equal(bins[g].sum(1), counts[g].sum(1))


def test_any_order_of_patients_and_blocks_counts_the_same():
    luck = np.random.default_rng(4)
    values, members = luck.lognormal(size=(90, 12)), luck.random((90, 2)) < 0.5
    low, high = np.full(90, 0.5), np.full(90, 2.0)
    whole, parts = empty(2, 12), empty(2, 12)
    solve.tally_on_grid(values, low, high, members, *whole)
    for rows in (slice(50, 90), slice(0, 7), slice(7, 50)):
        solve.tally_on_grid(values[rows], low[rows], high[rows], members[rows], *parts)
    for one, other in zip(whole, parts, strict=True):
        np.testing.assert_array_equal(one, other)


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
    values = np.concatenate([[-1.0, 0.0, 5e-324, 1e-9, 1e9, np.inf], inner, np.nextafter(inner, 0), 1.001 * inner])
    wanted = np.bincount(np.searchsorted(edges, values, side="right").clip(1, solve.BIN_COUNT) - 1,
                         minlength=solve.BIN_COUNT)  # fmt: skip
    np.testing.assert_array_equal(binned(values), wanted)


def test_what_lies_beyond_the_bins_is_said_and_nothing_gives_nothing():
    beyond = binned(np.array([-1.0, 0.0, 1e9]))
    assert solve.percentiles_from_bins(beyond, (0.0, 0.5, 1.0)).tolist() == [-np.inf, 0.0, np.inf]
    nothing = solve.percentiles_from_bins(np.zeros((2, 3, solve.BIN_COUNT), dtype=np.int32), SHARES)
    assert nothing.shape == (2, 3, 5)
    assert np.isnan(nothing).all()


def test_wrong_shapes_and_limits_are_refused():
    counts, bins = empty(1, 2)
    good = {"values": np.ones((3, 2)), "low": np.zeros(3), "high": np.ones(3), "members": np.ones((3, 1), dtype=bool),
            "counts": counts, "bins": bins}  # fmt: skip
    solve.tally_on_grid(**good)
    for name, bad in (("low", np.zeros(2)), ("high", np.full(3, np.nan)), ("members", np.ones((3, 1))),
                      ("counts", counts[:, :1]), ("bins", bins[:, :, :-1]), ("bins", bins.astype(float))):  # fmt: skip
        with pytest.raises(ValueError, match=r"shape|must be|not a number"):
            solve.tally_on_grid(**{**good, name: bad})
    with pytest.raises(ValueError, match="not from 0 to 1"):
        solve.percentiles_from_bins(bins, (50.0,))
