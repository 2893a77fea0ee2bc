"""Varvel's measures and the intervals, against hand-worked cases and general statistics libraries."""

import doctest
import math

import numpy as np
import pytest
from scipy import stats

from popsim.scoring import measures
from popsim.scoring.measures import Resampled, performance, prediction_errors, verdict


def test_examples_in_the_docstrings():
    assert doctest.testmod(measures).failed == 0


def test_errors_of_nothing_predicted_are_not_numbers():
    assert np.isnan(prediction_errors(np.array([1.0, 1.0]), np.array([0.0, np.nan]))).all()


def test_measures_worked_by_hand():
    """Errors -20, -10, 0, 10, 40 % at 0, 15, 30, 45, 60 min: medians 0 and 10, deviations 20, 10, 0, 10, 40."""
    found = performance(np.array([-20.0, -10.0, 0.0, 10.0, 40.0]), np.array([0.0, 15.0, 30.0, 45.0, 60.0]))
    assert found["mdpe_percent"] == 0 and found["mdape_percent"] == 10 and found["wobble_percent"] == 10
    slope = stats.linregress([0, 0.25, 0.5, 0.75, 1.0], [20, 10, 0, 10, 40]).slope  # scipy.stats
    assert found["divergence_percent_per_h"] == pytest.approx(slope, rel=1e-12)


@pytest.mark.parametrize("seed", range(5))
def test_measures_as_scipy_has_them(seed):
    """scipy.stats: median_abs_deviation (wobble), linregress (divergence)."""
    rng = np.random.default_rng(seed)
    errors, times = rng.normal(5, 20, 23), np.sort(rng.uniform(0, 300, 23))
    found = performance(errors, times)
    assert found["wobble_percent"] == pytest.approx(stats.median_abs_deviation(errors), rel=1e-12)
    slope = stats.linregress(times / 60, np.abs(errors)).slope
    assert found["divergence_percent_per_h"] == pytest.approx(slope, rel=1e-9)


def test_one_measurement_has_no_divergence():
    found = performance(np.array([12.0]), np.array([5.0]))
    assert found["mdape_percent"] == 12 and math.isnan(found["divergence_percent_per_h"])
    assert all(math.isnan(value) for value in performance(np.empty(0), np.empty(0)).values())


def test_interval_of_a_median_as_scipy_has_it():
    """scipy.stats.bootstrap, percentile method, of the same 40 numbers: the limits differ by the luck of resampling."""
    values = np.random.default_rng(1).normal(20, 10, 40)
    middle, low, high = Resampled(3, 40).median(values)
    theirs = stats.bootstrap((values,), np.median, method="percentile", n_resamples=4000, rng=2).confidence_interval
    assert middle == np.median(values)
    assert low == pytest.approx(theirs.low, abs=1.0) and high == pytest.approx(theirs.high, abs=1.0)


def test_interval_of_a_median_covers():
    """Of 200 samples of 30, the 95 % interval holds the true median in about 95 % (binomial: 180 to 199)."""
    rng = np.random.default_rng(7)
    resampled = Resampled(3, 30)
    hits = 0
    for _ in range(200):
        _, low, high = resampled.median(rng.normal(10, 5, 30))
        hits += low <= 10 <= high
    assert 178 <= hits <= 199


def test_share_resamples_people_not_measurements():
    """Two halves of people, all in or all out: its interval is that of a binomial of people, far wider than of 400."""
    hits, of = np.repeat([10, 0], 20), np.full(40, 10)
    share, low, high = Resampled(3, 40).share(hits, of)
    exact = stats.binom(40, 0.5).ppf([0.025, 0.975]) / 40  # scipy.stats
    assert share == 0.5
    assert low == pytest.approx(exact[0], abs=0.04) and high == pytest.approx(exact[1], abs=0.04)


def test_nobody_and_one_person():
    assert all(math.isnan(value) for value in Resampled(1, 3).median(np.full(3, np.nan)))
    middle, low, high = Resampled(1, 3).median(np.array([np.nan, 4.0, np.nan]))
    assert middle == 4.0 and math.isnan(low) and math.isnan(high)


@pytest.mark.parametrize(("low", "high", "people", "said"), [
    (1.0, 5.0, 10, "a"), (-5.0, -1.0, 10, "b"), (-1.0, 2.0, 10, "cannot tell"), (0.0, 2.0, 10, "cannot tell"),
    (1.0, 5.0, 5, "cannot tell"), (math.nan, math.nan, 10, "cannot tell")])
def test_verdicts(low, high, people, said):
    assert verdict(low, high, people) == said
