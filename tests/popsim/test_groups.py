"""Groups: everyone first, then each condition."""

import doctest

import numpy as np
import pytest

from covariates.formula import compile_formula
from covariates.problems import ProblemsError
from popsim import groups
from popsim.groups import members

PEOPLE = {
    "age": np.array([30.0, 70.0, np.nan]),
    "bmi": np.array([35.0, 22.0, 40.0]),
    "sex": np.array(["male", "female", "male"]),
}


def condition(text, wanted="condition"):
    return compile_formula(text, "study.toml: group: where", wanted)


def test_example_in_the_docstring():
    assert doctest.testmod(groups).failed == 0


def test_everyone_then_each_group():
    wanted = [("obese", condition("bmi >= 30")), ("old women", condition('age >= 65 and sex == "female"'))]
    found = members(wanted, PEOPLE.__getitem__, 3)
    assert found.dtype == bool
    assert found.tolist() == [[True, True, False], [True, False, True], [True, True, False]]


def test_without_groups_everyone():
    assert members([], PEOPLE.__getitem__, 3).tolist() == [[True]] * 3


def test_a_condition_that_names_nobody_in_particular():
    assert members([("none", condition("1 > 2"))], PEOPLE.__getitem__, 3)[:, 1].tolist() == [False] * 3


def test_a_number_that_is_not_known_meets_no_comparison():
    assert members([("old", condition("age >= 65"))], PEOPLE.__getitem__, 3)[:, 1].tolist() == [False, True, False]


def test_what_is_no_group_is_refused_all_at_once():
    wrong = [("all", condition("age > 1")), ("a", condition("bmi > 1")), ("a", condition("bmi + 1", "number"))]
    with pytest.raises(ProblemsError) as caught:
        members(wrong, PEOPLE.__getitem__, 3)
    assert [problem.found for problem in caught.value.problems] == ['"all"', '"a" twice', '"bmi + 1", a number']
