"""Counts: doses to four digits, shares as fixed-point integers, merging."""

from __future__ import annotations

import runpy
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from covariates.problems import ProblemsError
from popsim.counted import KEY_COUNT, decimal_keys, decimal_quantile, decimal_value
from popsim.records import Judged
from popsim.tally import ONE, PairTally, Tally, TargetTally

cases = SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("judge_cases.py"))))


def key(value: float) -> int:
    return int(decimal_keys(np.array([value]))[0])


@pytest.mark.parametrize(
    ("value", "counted"),
    [
        (0.0, 0.0),
        (600.04, 600.0),
        (9999.7, 10000.0),
        (9999.4, 9999.0),
        (0.3, 0.3),
        (1e-9, 1e-9),
        (9.99e8, 9.99e8),
        (0.00123449, 0.001234),
        (1.0, 1.0),
        (0.99999, 1.0),
        (1234.5, 1234.0),
    ],
)
def test_by_hand(value, counted):
    assert decimal_value(key(value)) == counted


def test_powers_of_ten_are_their_own():
    powers = [float(f"1e{k}") for k in range(-9, 9)]
    for value in powers:
        for near in (value, np.nextafter(value, 0) if value > 1e-9 else value, np.nextafter(value, np.inf)):
            assert decimal_value(key(near)) == value


@given(st.floats(1e-9, 9.9e8))
def test_round_trip_within_half_a_digit(value):
    counted = decimal_value(key(value))
    assert abs(counted / value - 1) <= 0.5e-3 * (1 + 1e-9)
    assert decimal_value(key(counted)) == counted
    assert float(f"{value:.3e}") == pytest.approx(counted, rel=1.0001e-3)  # halves may round either way


def test_every_key_is_a_value_of_its_own_ascending():
    some = np.unique(
        np.concatenate([np.arange(30), np.random.default_rng(1).integers(0, KEY_COUNT, 3000), [KEY_COUNT - 1]])
    )
    values = [decimal_value(int(k)) for k in some]
    assert (np.diff(values) > 0).all()
    inside = [(k, value) for k, value in zip(some, values, strict=True) if value < 9.999e8]
    assert [key(value) for _, value in inside] == [k for k, _ in inside]


@pytest.mark.parametrize("value", [np.nan, np.inf, -1.0, 1e-10, 1e9, 1e300])
def test_a_dose_that_cannot_be_counted_is_said_not_clipped(value):
    with pytest.raises(ProblemsError, match="check the units"):
        decimal_keys(np.array([1.0, value]))


@given(st.lists(st.integers(0, 9999), min_size=1, max_size=60), st.sampled_from([0.05, 0.25, 0.5, 0.75, 0.95]))
def test_quantiles_as_numpys_inverted_cdf(values, share):
    """numpy.quantile(method="inverted_cdf"): the smallest value with at least that share at or below."""
    counts = np.bincount(decimal_keys(np.array(values, dtype=float)), minlength=KEY_COUNT)
    assert decimal_quantile(counts, share) == np.quantile(values, share, method="inverted_cdf")


def test_quantile_of_nobody():
    assert np.isnan(decimal_quantile(np.zeros(KEY_COUNT, dtype=np.int64), 0.5))


def zeros():
    return [np.zeros(2, dtype=np.int64) for _ in range(13)]


def some_judged(n: int, seed: int) -> Judged:
    luck = np.random.default_rng(seed)
    shares = luck.dirichlet([1, 2, 1], n).T
    failed = luck.random(n) < 0.1
    shares[:, failed] = np.nan
    flags = (luck.random((5, n)) < 0.5) & ~failed
    value = np.where(failed, np.nan, np.where(flags[4], np.inf, shares[1]))
    return Judged(failed, flags[0], *shares, *flags[1:], {"value": value})


def part(judged: Judged, rows) -> Judged:
    arrays = {name: values[rows] for name, values in vars(judged).items() if name != "measures"}
    return Judged(**arrays, measures={name: values[rows] for name, values in judged.measures.items()})


def test_sums_are_fixed_point_and_do_not_depend_on_order():
    judged = some_judged(5000, 1)
    members = np.stack([np.ones(5000, dtype=np.int64), (np.arange(5000) % 3 == 0).astype(np.int64)], axis=1)
    whole, parts = TargetTally(*zeros(), None, None), TargetTally(*zeros(), None, None)
    outside = np.arange(5000) % 7 == 0
    whole.add(judged, members, outside)
    order = np.random.default_rng(2).permutation(5000)
    for rows in np.array_split(order, 7):
        parts.add(part(judged, rows), members[rows], outside[rows])
    for name, counts in vars(whole).items():
        if isinstance(counts, np.ndarray):
            assert counts.tolist() == getattr(parts, name).tolist(), name
    assert (whole.measures["value"] == parts.measures["value"]).all()
    assert whole.attained_outside[0] == (judged.attained & outside).sum()
    assert whole.measures["value"].sum(axis=1)[0] == (~judged.failed).sum()
    assert whole.measures["value"][0, -1] == np.isinf(judged.measures["value"]).sum()
    assert whole.inside_squared[0] / ONE == pytest.approx((judged.inside[~judged.failed] ** 2).sum(), abs=1e-5)
    fine = ~judged.failed
    assert (whole.below + whole.inside + whole.above)[0] == int(fine.sum()) * ONE
    assert whole.inside[0] / ONE == pytest.approx(judged.inside[fine].sum(), abs=5000 * 2**-33)
    assert whole.failed.tolist() == [int(judged.failed.sum()), int(judged.failed[::3].sum())]


def test_pairs_by_hand():
    def with_attained(attained, failed):
        blank = np.zeros(4)
        return Judged(np.array(failed), np.array(attained), blank, blank, blank, *[blank > 0] * 4)

    pair = PairTally(*(np.zeros(1, dtype=np.int64) for _ in range(5)), gained=np.zeros((1, 2001), dtype=np.int64))
    pair.add(
        with_attained([True, True, False, False], [False] * 4),
        with_attained([True, False, True, False], [False, True, False, False]),
        np.ones((4, 1), dtype=np.int64),
    )
    assert {name: int(value[0]) for name, value in vars(pair).items() if name != "gained"} == {
        "failed": 1,
        "both": 1,
        "only_a": 1,
        "only_b": 1,
        "neither": 1,
    }
    assert pair.gained.sum() == pair.gained[0, 1000] == 3  # nobody gains; the failed one has no share


def test_merged_counts_equal_those_of_one(tmp_path):
    """Two halves of a study's blocks, counted apart and merged, equal the whole."""
    asked = cases.study(tmp_path, count=9000, variability="scale = 1.3", every="30 min")
    one, _ = cases.judged(asked)
    three, _ = cases.judged(asked, threads=3)
    from popsim.tally import _arrays

    for mine, theirs in zip(_arrays(one.tally), _arrays(three.tally), strict=True):
        assert (mine == theirs).all()
    assert one.tally.statuses == three.tally.statuses
    assert one.tally.failing == three.tally.failing
    twice = Tally.empty(asked, len(asked.grid_min()), one.tally.cuts)
    twice.merge(one.tally)
    twice.merge(three.tally)
    assert twice.patients.tolist() == (2 * one.tally.patients).tolist()
    assert twice.statuses == {code: 2 * count for code, count in one.tally.statuses.items()}


def test_who_could_not_be_simulated_is_counted_and_the_first_are_named(tmp_path):
    """In any order of blocks: the ten smallest numbers of each reason."""
    asked = cases.study(tmp_path, count=10, every="30 min")
    early, late = (Tally.empty(asked, len(asked.grid_min()), {}) for _ in range(2))
    late.add_statuses(0, np.array([0, 3, 3, 0, 4]), first=101)
    early.add_statuses(0, np.full(9, 3), first=1)
    late.merge(early)
    assert late.statuses == {(0, 3): 11, (0, 4): 1}
    assert late.failing == {(0, 3): [*range(1, 10), 102], (0, 4): [105]}
