"""Lognormal mathematics against general libraries and worked numbers."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import special, stats

from covariates.variability import (
    cholesky_factor,
    covariance_from,
    cv_from_omega,
    omega_from_cv,
    omega_from_variance,
    with_effect,
)


# scipy.stats.lognorm: standard deviation over mean of a lognormal distribution of that omega.
@pytest.mark.parametrize("omega", [0.0404, 0.3, 0.610, 1.2])
def test_cv_is_that_of_the_lognormal_distribution(omega):
    lognormal = stats.lognorm(s=omega)
    assert cv_from_omega(omega) == pytest.approx(lognormal.std() / lognormal.mean(), rel=1e-10)


# Variances of ln and their CVs, computed independently from the definition.
WORKED = [(0.610, 91.7), (0.597, 90.4), (0.265, 55.1), (0.346, 64.3), (0.209, 48.2)]


@pytest.mark.parametrize(("variance", "percent"), WORKED)
def test_worked_coefficients_of_variation(variance, percent):
    assert abs(100 * cv_from_omega(omega_from_variance(variance)) - percent) <= 0.05


@given(st.floats(0, 5))
def test_there_and_back(cv):
    assert cv_from_omega(omega_from_cv(cv)) == pytest.approx(cv, rel=1e-9, abs=1e-12)


def test_small_ones_are_nearly_the_same_and_large_ones_are_not():
    assert omega_from_cv(0.05) == pytest.approx(0.05, rel=1e-3)
    assert omega_from_cv(0.9) < 0.78


def test_arrays_keep_their_shape():
    assert omega_from_cv([0.1, 0.2]).shape == (2,)
    assert isinstance(omega_from_cv(0.1), np.float64)


@pytest.mark.parametrize("function", [omega_from_cv, cv_from_omega, omega_from_variance])
@pytest.mark.parametrize("wrong", [-0.1, np.nan, np.inf])
def test_impossible_spreads_are_refused(function, wrong):
    with pytest.raises(ValueError, match="finite and not negative"):
        function(wrong)


def test_covariance_keeps_the_order_of_the_sds():
    matrix = covariance_from({"CL": 0.2, "V1": 0.5, "V2": 1.0}, {("V1", "CL"): 0.5})
    np.testing.assert_allclose(matrix, [[0.04, 0.05, 0], [0.05, 0.25, 0], [0, 0, 1]], rtol=1e-15)


@pytest.mark.parametrize(
    ("sds", "correlations", "says"),
    [
        ({"V1": 0.0}, {}, "V1 must be above 0"),
        ({"V1": -1.0}, {}, "V1 must be above 0"),
        ({"V1": np.nan}, {}, "V1 must be above 0"),
        ({"V1": 1.0, "CL": 1.0}, {("V1", "CL"): 1.0}, "between -1 and 1"),
        ({"V1": 1.0, "CL": 1.0}, {("V1", "CL"): np.nan}, "between -1 and 1"),
        ({"V1": 1.0, "CL": 1.0}, {("V1", "V1"): 0.5}, "each pair of two names once"),
        ({"V1": 1.0, "CL": 1.0}, {("V1", "CL"): 0.5, ("CL", "V1"): 0.5}, "each pair of two names once"),
        ({"V1": 1.0}, {("V1", "ka"): 0.5}, "ka has no standard deviation"),
        ({"a": 1.0, "b": 1.0, "c": 1.0}, {("a", "b"): 0.9, ("b", "c"): 0.9, ("a", "c"): -0.9}, "cannot hold together"),
    ],
)
def test_impossible_correlations_are_refused(sds, correlations, says):
    with pytest.raises(ValueError, match=says):
        covariance_from(sds, correlations)


@given(st.floats(1e-3, 3), st.floats(1e-3, 3), st.floats(-0.99, 0.99))
def test_factor_times_itself_is_the_covariance(first, second, r):
    covariance = covariance_from({"V1": first, "CL": second}, {("V1", "CL"): r})
    factor = cholesky_factor(covariance)
    assert factor[0, 1] == 0
    np.testing.assert_allclose(factor @ factor.T, covariance, rtol=1e-12, atol=1e-15)


@pytest.mark.parametrize("wrong", [[1.0, 2.0], [[1.0, 0.5], [0.4, 1.0]], [[np.nan]], [[1.0, 2.0], [2.0, 1.0]], [[0.0]]])
def test_what_is_no_covariance_is_refused(wrong):
    with pytest.raises(ValueError):
        cholesky_factor(wrong)


# scipy.stats and scipy.special: median and spread of each form, of many random effects.
def test_forms_of_a_random_effect():
    effects = 0.4 * stats.norm.ppf((np.arange(100_000) + 0.5) / 100_000)
    shares = [0.05, 0.5, 0.9]
    assert np.quantile(with_effect(3.0, effects, "lognormal"), shares) == pytest.approx(
        stats.lognorm(0.4, scale=3.0).ppf(shares), rel=1e-4)
    expected = stats.norm(3.0, 0.4).ppf(shares)
    assert np.quantile(with_effect(3.0, effects, "normal"), shares) == pytest.approx(expected, rel=1e-4)
    relative = with_effect(3.0, effects, "normal, relative")
    assert relative.std() / relative.mean() == pytest.approx(0.4, rel=1e-3)
    logit = special.logit(with_effect(0.8, effects, "logit-normal"))
    assert (logit.mean(), logit.std()) == pytest.approx((special.logit(0.8), 0.4), rel=1e-3)


def test_an_effect_is_never_clipped_or_guessed():
    assert with_effect(1.0, -2.0, "normal") == -1.0
    assert np.isnan(with_effect(np.array([1.2, 0.0]), 0.1, "logit-normal")).all()
    assert with_effect(0.5, 0.0, "logit-normal") == 0.5
    with pytest.raises(ValueError, match="form must be one of"):
        with_effect(1.0, 0.0, "weibull")
