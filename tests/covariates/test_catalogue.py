"""The catalogue: complete, resolvable, and clear about what is missing."""

import inspect

import numpy as np
import pytest

from covariates import body_size, kidney, maturation
from covariates.catalogue import ATTRIBUTES, EQUATIONS, attributes_needed, compute
from covariates.problems import ProblemsError

PERSON = {
    "sex": np.array(["male", "female"]),
    "age": np.array([50.0, 30.0]),
    "weight": np.array([120.0, 60.0]),
    "height": np.array([175.0, 160.0]),
    "serum_creatinine": np.array([1.0, 0.6]),
}


@pytest.mark.parametrize("name", EQUATIONS)
def test_each_equation_computes_for_a_block_of_people(name):
    values = compute(name, PERSON)
    assert values.shape == (2,) and values.dtype == np.float64 and np.all(values > 0)
    each = [compute(name, {key: value[i] for key, value in PERSON.items()}) for i in range(2)]
    assert [value.dtype for value in each] == [np.float64] * 2
    assert [float(value) for value in each] == pytest.approx(values, rel=1e-14)


@pytest.mark.parametrize("name", EQUATIONS)
def test_needs_name_every_argument_of_the_function(name):
    equation = EQUATIONS[name]
    assert equation.name == name
    parameters = inspect.signature(equation.function).parameters.values()
    needed = [parameter.name for parameter in parameters if parameter.default is inspect.Parameter.empty]
    assert sorted(argument for argument, _ in equation.needs) == sorted(needed)
    assert all(source in ATTRIBUTES or source in EQUATIONS for _, source in equation.needs)


@pytest.mark.parametrize("name", EQUATIONS)
def test_source_and_people_are_those_of_the_docstring(name):
    equation = EQUATIONS[name]
    text = " ".join(equation.function.__doc__.split())
    assert equation.source and f"Source: {equation.source}" in text
    assert equation.people and f"People: {equation.people}" in text


def test_every_public_equation_is_listed():
    listed = {equation.function for equation in EQUATIONS.values()}
    helpers = {maturation.sigmoid_maturation, maturation.exponential_ageing, maturation.linear_ageing}
    for module in (body_size, kidney, maturation):
        for function_name, function in inspect.getmembers(module, inspect.isfunction):
            if function.__module__ == module.__name__ and not function_name.startswith("_"):
                assert function in listed | helpers, function_name


def test_units_are_the_closed_few():
    assert {equation.unit for equation in EQUATIONS.values()} == {
        "", "kg", "m2", "kg/m2", "mL/min", "mL/min/{1.73_m2}", "wk"
    }  # fmt: skip


def test_units_agree_with_the_arguments_that_equations_feed():
    suffixes = {"kg": "_kg", "m2": "_m2", "wk": "_weeks", "mL/min/{1.73_m2}": "_ml_per_min_per_1_73_m2"}
    suffixes |= {"cm": "_cm", "years": "_years", "mg/dL": "_mg_per_dl", "": "sex"}
    for equation in EQUATIONS.values():
        for argument, source in equation.needs:
            unit = EQUATIONS[source].unit if source in EQUATIONS else ATTRIBUTES[source]
            assert argument.endswith(suffixes[unit]), (equation.name, argument)


def test_there_is_no_bare_lean_body_mass_or_creatinine_clearance():
    for bare in ("lean_body_mass", "creatinine_clearance"):
        assert bare not in EQUATIONS
        with pytest.raises(ProblemsError) as raised:
            compute(bare, PERSON)
        advice = raised.value.problems[0].advice
        assert advice.startswith("say which: ") and all(word.startswith(bare) for word in advice[11:].split(", "))


def test_attributes_win_over_equations():
    own = PERSON | {"ideal_body_weight_devine": np.array([100.0, 50.0])}
    assert compute("ideal_body_weight_devine", own).tolist() == [100, 50]
    assert compute("adjusted_body_weight", own) == pytest.approx([108, 54])
    assert compute("creatinine_clearance_cockcroft_gault_ideal", own)[0] == pytest.approx(90 * 100 / 72)


def test_a_further_column_is_its_own_covariate():
    assert compute("albumin", {"albumin": np.array([40.0])}).tolist() == [40]
    assert compute("opioid", {"opioid": np.array([True])}).dtype == bool


def test_attributes_needed():
    assert attributes_needed("weight") == {"weight"}
    assert attributes_needed("bmi") == {"weight", "height"}
    assert attributes_needed("glomerular_filtration_rhodin_2009") == {"weight", "age"}
    assert attributes_needed("glomerular_filtration_rhodin_2009", {"postmenstrual_age_weeks"}) == {"weight"}
    assert attributes_needed("egfr_ckd_epi_2021_absolute") == set(PERSON)


def test_all_missing_attributes_at_once():
    with pytest.raises(ProblemsError) as raised:
        compute("creatinine_clearance_cockcroft_gault_adjusted", {"sex": "male", "weight": 70.0, "hight": 170.0})
    age, height, creatinine = raised.value.problems
    assert age.found == "no age" and age.advice == "give every patient age in years"
    assert height.found == "no height" and height.advice == 'rename "hight" to "height"'
    assert creatinine.found == "no serum_creatinine" and "mg/dL" in creatinine.advice


def test_weight_is_no_misspelling_of_height():
    with pytest.raises(ProblemsError) as raised:
        compute("bmi", {"weight": 70.0})
    assert raised.value.problems[0].advice == "give every patient height in cm"


@pytest.mark.parametrize(("word", "meant"), [("wieght", "weight"), ("lean_body_mass_jame", "lean_body_mass_james")])
def test_unknown_names_are_met_with_the_nearest(word, meant):
    with pytest.raises(ProblemsError) as raised:
        compute(word, PERSON)
    assert meant in raised.value.problems[0].advice
    with pytest.raises(ProblemsError, match=word):
        attributes_needed(word)


def test_an_empty_name_is_unknown():
    with pytest.raises(ProblemsError, match="unknown attribute"):
        compute("", PERSON)


def test_impossible_values_name_covariate_and_attribute():
    with pytest.raises(ProblemsError) as raised:
        compute("bmi", PERSON | {"height": np.array([175.0, 1.6])})
    assert raised.value.problems[0].where == "bmi: height"
    assert raised.value.problems[0].found == "1.6 at position 2 (1 of 2 values)"
