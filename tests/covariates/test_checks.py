"""What is refused, and how it is said."""

import numpy as np
import pytest

from covariates.checks import is_female, possible
from covariates.problems import ProblemsError


@pytest.mark.parametrize("wrong", [0, -1, np.nan, np.inf, -np.inf])
@pytest.mark.parametrize("name", ["weight_kg", "height_cm", "serum_creatinine_mg_per_dl", "postmenstrual_weeks"])
def test_impossible_numbers_are_refused(name, wrong):
    with pytest.raises(ProblemsError) as raised:
        possible(**{name: wrong})
    (problem,) = raised.value.problems
    assert problem.where == name
    assert problem.found == f"{wrong:g}"
    assert problem.allowed and problem.advice


@pytest.mark.parametrize(
    ("name", "wrong", "advice"),
    [
        ("height_cm", 1.7, "height looks like metres; give cm"),
        ("height_cm", 24.9, "height looks like metres; give cm"),
        ("age_years", 131, "age looks like months or days; give years"),
        ("serum_creatinine_mg_per_dl", 88.4, "creatinine looks like umol/L; divide by 88.42 to give mg/dL"),
    ],
)
def test_the_likely_wrong_unit_is_named(name, wrong, advice):
    with pytest.raises(ProblemsError) as raised:
        possible(**{name: wrong})
    assert raised.value.problems[0].advice == advice


@pytest.mark.parametrize("wrong", [-1, np.nan, np.inf])
def test_age_may_be_zero_but_not_less(wrong):
    assert possible(age_years=0)[0] == 0
    with pytest.raises(ProblemsError):
        possible(age_years=wrong)


def test_the_limits_themselves_are_possible():
    height, age, creatinine = possible(height_cm=25, age_years=130, serum_creatinine_mg_per_dl=40)
    assert (height, age, creatinine) == (25, 130, 40)


def test_all_problems_at_once_with_the_first_place_and_the_count():
    with pytest.raises(ProblemsError) as raised:
        possible(weight_kg=[70, -3, 80, np.nan], height_cm=1.7)
    weight, height = raised.value.problems
    assert weight.found == "-3 at position 2 (2 of 4 values)"
    assert height.where == "height_cm" and height.found == "1.7"


@pytest.mark.parametrize("wrong", ["M", "Female", "", "f", 1, True, np.nan, None])
def test_sex_is_one_of_two_words(wrong):
    with pytest.raises(ValueError) as raised:
        is_female(wrong)
    (problem,) = raised.value.problems
    assert problem.where == "sex" and str(wrong) in problem.found


def test_one_wrong_sex_in_an_array_is_found():
    with pytest.raises(ProblemsError, match=r'"other" at position 3 \(1 of 3 values\)'):
        is_female(np.array(["female", "male", "other"]))


def test_sex_as_object_array():
    assert is_female(np.array(["female", "male"], dtype=object)).tolist() == [True, False]
