"""Maturation against reference numbers and by property."""

import csv
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from covariates import maturation
from covariates.catalogue import compute
from covariates.problems import ProblemsError

PUBLISHED = Path(__file__).parents[1] / "published"


def read(name):
    with open(PUBLISHED / name, encoding="utf-8") as file:
        return list(csv.DictReader(line for line in file if not line.startswith("#")))


# Reference numbers computed independently from the printed equation: tests/published/maturation.csv
@pytest.mark.parametrize("row", read("maturation.csv"), ids=lambda row: row["postmenstrual_age_weeks"])
def test_rhodin_at_70_kg(row):
    rate = maturation.glomerular_filtration_rhodin_2009(70, float(row["postmenstrual_age_weeks"]))
    assert abs(rate / 121.2 - float(row["share"])) <= 0.00005


# Rhodin and others 2009: size enters as (W/70)^0.75, so a sixteenth of the weight has an eighth of the rate.
def test_rhodin_scales_with_weight():
    small, large = (maturation.glomerular_filtration_rhodin_2009(weight, 60) for weight in (5, 80))
    assert large / small == pytest.approx(8, rel=1e-14)


# 365 days / 7 = 52.143 weeks a year to the printed digits, and term is 40 weeks.
def test_postmenstrual_age():
    assert maturation.postmenstrual_age_weeks(0) == 40
    assert maturation.postmenstrual_age_weeks(35) == pytest.approx(40 + 35 * 365 / 7, rel=1e-5)


def test_a_given_postmenstrual_age_wins():
    preterm = {"age": 0.0, "weight": 1.2, "postmenstrual_age_weeks": 28.0}
    assert compute("postmenstrual_age_weeks", preterm) == 28
    expected = maturation.glomerular_filtration_rhodin_2009(1.2, 28)
    assert compute("glomerular_filtration_rhodin_2009", preterm) == expected
    assert compute("glomerular_filtration_rhodin_2009", {"age": 0.0, "weight": 1.2}) > expected


@given(st.floats(0.5, 1e4), st.floats(1, 100), st.floats(0.5, 15))
def test_sigmoid_is_symmetric_about_its_half(value, half, slope):
    assert maturation.sigmoid_maturation(half, half, slope) == 0.5
    share = maturation.sigmoid_maturation(value, half, slope)
    mirrored = maturation.sigmoid_maturation(half * (half / value), half, slope)
    assert 0 <= share <= 1
    assert share + mirrored == pytest.approx(1, abs=1e-12)
    assert maturation.sigmoid_maturation(value * 2, half, slope) >= share


@pytest.mark.filterwarnings("error")
def test_sigmoid_is_0_at_0_without_a_warning():
    assert maturation.sigmoid_maturation(0, 13.4, 12.7) == 0
    assert maturation.sigmoid_maturation(1e-300, 13.4, 12.7) == 0
    assert maturation.sigmoid_maturation(np.array([0.0, 13.4]), 13.4, 12.7).tolist() == [0, 0.5]


WRONG = [(-1, 1, 1), (np.nan, 1, 1), (np.inf, 1, 1), (1, 0, 1), (1, 1, 0), (1, np.nan, 1)]


@pytest.mark.parametrize("arguments", WRONG)
def test_sigmoid_refuses_what_makes_no_sense(arguments):
    with pytest.raises(ValueError):
        maturation.sigmoid_maturation(*arguments)


# By hand: exp(-0.0156 x 40) (Eleveld 2018, V2 at 75 years) and 1 - 0.00678 x 32 (Kleijn 2011, CL at 75 years).
def test_ageing_by_hand():
    assert maturation.exponential_ageing(75, -0.0156, 35) == pytest.approx(np.exp(-0.624), rel=1e-15)
    assert maturation.linear_ageing(75, -0.00678, 43) == pytest.approx(0.78304, rel=1e-14)
    assert maturation.linear_ageing(np.array([43.0, 200.0 - 80]), -0.02, 43).tolist() == pytest.approx([1, -0.54])
    with pytest.raises(ProblemsError, match="age_years"):
        maturation.exponential_ageing(-1, -0.01, 35)


def test_allometric_size_by_hand():
    assert maturation.allometric_size(70) == 1
    assert maturation.allometric_size(140, 1) == pytest.approx(2, rel=1e-15)
    assert maturation.allometric_size(140) == pytest.approx(2**0.75, rel=1e-15)
