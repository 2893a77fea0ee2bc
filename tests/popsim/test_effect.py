"""The sigmoid effect and its inverse."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from covariates.sheet import read_sheet
from popsim.effect import concentration_at, effect_at, falls

BIS = read_sheet("propofol_eleveld_2018")


def people(baseline=93.0, at_infinity=0.0, half=3.0, below=1.89, above=1.47, n=1):
    values = zip(
        ("E0", "Emax", "C50", "gamma", "gamma_above"), (baseline, at_infinity, half, below, above), strict=True
    )
    return {name: np.full(n, value) for name, value in values}


def test_by_hand():
    """Hill equation, 93 / (1 + (C/3)^gamma): at 6 mg/L with gamma 1.47, 93 / (1 + 2^1.47); at 1.5 with gamma 1.89."""
    found = effect_at(BIS, people(n=4), np.array([0.0, 3.0, 6.0, 1.5]))
    np.testing.assert_allclose(found, [93.0, 46.5, 93 / (1 + 2**1.47), 93 - 93 / (1 + 2**1.89)], rtol=1e-14)


def test_the_steepness_changes_at_half_and_the_curve_does_not_jump():
    around = effect_at(BIS, people(n=2), np.array([3 * (1 - 1e-9), 3 * (1 + 1e-9)]))
    np.testing.assert_allclose(around, 46.5, atol=1e-6)
    steps = np.array([[2.9, 3.0, 3.1]])
    down = -np.diff(effect_at(BIS, people(), steps))[0]
    np.testing.assert_allclose(down[0] / down[1], 1.89 / 1.47, rtol=0.05)


def test_without_a_second_steepness_the_first_holds_everywhere():
    one = replace(BIS, effect=replace(BIS.effect, steepness_above=None))
    np.testing.assert_allclose(effect_at(one, people(), np.array([6.0])), 93 / (1 + 2**1.89), rtol=1e-14)


@given(st.floats(1e-6, 1e6), st.floats(0.1, 50), st.floats(0.3, 8), st.floats(0.3, 8), st.booleans())
def test_back_and_forth(concentration, half, below, above, rises):
    values = people(0.0 if rises else 93.0, 93.0 if rises else 0.0, half, below, above)
    effect = effect_at(BIS, values, np.array([concentration]))
    share = effect[0] / 93
    if 1e-6 < share < 1 - 1e-6:  # nearer the ends a float of the effect no longer tells concentrations apart
        np.testing.assert_allclose(concentration_at(BIS, values, float(effect[0])), concentration, rtol=1e-7)


@given(st.lists(st.floats(0, 1e9), min_size=2, max_size=20), st.booleans())
def test_monotone(concentrations, rises):
    values = people(10.0 if rises else 93.0, 80.0 if rises else 0.0)
    effects = effect_at(BIS, values, np.sort(np.array([concentrations])))[0]
    change = np.diff(effects)
    assert (change >= -1e-12).all() if rises else (change <= 1e-12).all()
    assert falls(BIS, values).tolist() == [not rises]


@pytest.mark.parametrize(
    ("effect", "wanted"),
    [(95.0, -1.0), (float("inf"), -1.0), (93.0, 0.0), (0.0, np.inf), (-5.0, np.inf), (float("-inf"), np.inf)],
)
def test_limits_out_of_reach(effect, wanted):
    assert concentration_at(BIS, people(), effect).tolist() == [wanted]


@pytest.mark.parametrize(
    ("effect", "wanted"), [(5.0, -1.0), (float("-inf"), -1.0), (10.0, 0.0), (80.0, np.inf), (float("inf"), np.inf)]
)
def test_limits_out_of_reach_of_an_effect_that_rises(effect, wanted):
    assert concentration_at(BIS, people(10.0, 80.0), effect).tolist() == [wanted]


def test_no_drug_and_no_end_of_drug():
    assert effect_at(BIS, people(), np.array([0.0])).tolist() == [93.0]
    assert effect_at(BIS, people(n=2), np.array([1e300, np.inf])).tolist() == [0.0, 0.0]
    assert np.isnan(effect_at(BIS, people(), np.array([np.nan]))).all()


def test_a_drug_without_effect_on_a_patient_has_no_concentration_for_it():
    assert np.isnan(concentration_at(BIS, people(50.0, 50.0), 50.0)).all()
