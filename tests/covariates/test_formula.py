"""The formula language: what it computes, what it refuses, and that no text can break it."""

import doctest
import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from covariates import formula
from covariates.formula import FUNCTIONS, compile_formula
from covariates.problems import ProblemsError

PEOPLE = {
    "age": np.array([20.0, 50.0, 85.0]),
    "weight": np.array([50.0, 70.0, 140.0]),
    "sex": np.array(["female", "male", "female"]),
    "opioid": np.array([True, False, True]),
    "visits": np.array([1, 2, 3]),
}


def value(text, wanted=None):
    return compile_formula(text, "here", wanted).evaluate(PEOPLE)


def refusal(text, wanted=None):
    with pytest.raises(ProblemsError) as caught:
        compile_formula(text, "here", wanted).evaluate(PEOPLE)
    return str(caught.value)


def test_arithmetic_against_hand_calculation():
    np.testing.assert_allclose(value("1.79 * (weight / 70) ** 0.75"), [1.79 * (5 / 7) ** 0.75, 1.79, 1.79 * 2**0.75])
    np.testing.assert_array_equal(value("-age ** 2"), [-400.0, -2500.0, -7225.0])
    np.testing.assert_array_equal(value("visits / 2"), [0.5, 1.0, 1.5])
    np.testing.assert_array_equal(value("max(age, 30, weight) - min(age, 30)"), [30.0, 40.0, 110.0])
    assert value("4.27") == 4.27


def test_every_function_against_the_standard_library():
    def sigmoid(x, half, slope):
        return x**slope / (x**slope + half**slope)

    known = {name: getattr(math, name) for name in ("exp", "expm1", "log", "log10", "log1p", "sqrt", "floor", "ceil")}
    known |= {"abs": abs, "power": pow, "sigmoid": sigmoid, "min": min, "max": max}
    assert set(known) == set(FUNCTIONS)
    arguments = (2.5, 1.25, 3.5)
    for name, (_, fewest, _) in FUNCTIONS.items():
        given_ = arguments[:fewest]
        text = f"{name}({', '.join(map(str, given_))})"
        assert float(value(text)) == pytest.approx(known[name](*given_), rel=1e-15), text


def test_sigmoid_at_its_ends():
    compiled = compile_formula("sigmoid(x, 5, 9)", "x")
    np.testing.assert_array_equal(compiled.evaluate({"x": np.array([0.0, 5.0, 1e60])}), [0, 0.5, 1])


def test_conditions():
    np.testing.assert_array_equal(value('sex == "female" and not opioid'), [False, False, False])
    np.testing.assert_array_equal(value("18 < age <= 50 or weight > 100"), [True, True, True])
    np.testing.assert_array_equal(value("18 <= age < 50"), [True, False, False])
    np.testing.assert_array_equal(value("opioid == true"), PEOPLE["opioid"])
    np.testing.assert_array_equal(value("opioid != false", "condition"), PEOPLE["opioid"])
    np.testing.assert_array_equal(value("opioid", "condition"), PEOPLE["opioid"])
    np.testing.assert_array_equal(value("'male' != sex"), [True, False, True])
    np.testing.assert_array_equal(value("(2 if opioid else 1) * (1 if age > 30 else 3)"), [6.0, 1.0, 2.0])
    assert value("age > 30").dtype == bool


def test_kind_and_names():
    assert compile_formula("age >= 65 and bmi < 30", "x").kind == "condition"
    assert compile_formula("age + exp(2)", "x").kind == "number"
    assert compile_formula("opioid", "x", "condition").kind == "condition"
    assert compile_formula('3 if sex == "male" else bmi', "x").names == {"sex", "bmi"}


def test_worked_example_in_docstring():
    result = doctest.testmod(formula)
    assert result.attempted >= 1 and result.failed == 0


def test_arithmetic_never_raises():
    found = compile_formula("log(x) + sqrt(x) + 1 / x ** 2", "x").evaluate({"x": np.array([-1.0, 0.0, np.nan])})
    assert np.isnan(found).all()
    assert value("1 / 0") == np.inf
    assert value("10 ** 100 * 10 ** 100 * 10 ** 100 * 10 ** 100") == np.inf


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("x.y", "not part of the formula language"), ("x[0]", "not part of the formula language"),
        ("lambda: 1", "not part of the formula language"), ("(x := 3)", "not part of the formula language"),
        ("f'{x}'", "not part of the formula language"), ("[1, 2]", "not part of the formula language"),
        ("{}", "not part of the formula language"), ("[x for x in y]", "not part of the formula language"),
        ("exp(*x)", "not part of the formula language"), ("exp(x=2)", "wrong arguments"),
        ("exp(1, 2)", "wrong arguments"),
        ("min(1)", "wrong arguments"), ("__import__('os')", "unknown function"), ("logg(3)", 'did you mean "log"?'),
        ("exp", "function without its arguments"), ("exp(exp)", "function without its arguments"),
        ("_x + 1", "is no name"),
        ("'a' + 2", "text out of place"), ("age < 'x'", "compares text"), ("sex == 1", 'allowed: "female" or "male"'),
        ("sex == age", "compares text"), ("sex < 'male'", "compares text"), ("weight == 'female'", "compares text"),
        ("sex == 'female' == 1", "compares text"), ("sex", "can only be compared"),
        ("sex == 'Female'", 'did you mean "female"?'),
        ("sex == 'f'", '"female" or "male"'), ("x in y", "comparison that is not part"),
        ("x is y", "comparison that is not part"),
        ("1j", "is no number"), ("1e400", "too large"), ("9" * 20, "too large"),
        ("weight ** 101", "too large an exponent"),
        ("weight ** -101", "too large an exponent"), ("power(weight, 200)", "too large an exponent"),
        ("(age > 60) * 2", "a condition where a number is needed"),
        ("age > 60 and 3", "a number where a condition is needed"),
        ("1 if age else 2", '"age" is a number but is used as true or false'),
        ("not weight", 'compare it, for example "weight > 0"'),
        ("opioid * 2", '"opioid" is true or false but is used as a number'),
        ("opioid > 1", '"opioid" is true or false'),
        ("opioid < true", "a condition where a number is needed"), ("True", 'write "true"'), ("+1", "sign"),
        ("~age", "sign"),
        ("a // b", "operator"), ("a % b", "operator"), ("a @ b", "operator"), ("a & b", "operator"),
        ("a << b", "operator"),
        ("1_000", "unusual form"), ("0x10", "unusual form"), ("age # + 1", "'#'"), ("a \\ b", "character"),
        ("\uff41ge", "character"),
        ("", "an empty formula"), ("  ", "an empty formula"), ("age = 3", "cannot be read"),
        ("import os", "cannot be read"),
        ("age; weight", "cannot be read"), ("x if y", "cannot be read"),
        ("(" * 300 + "1" + ")" * 300, "cannot be read"),
        ("1 + " * 300 + "1", "parts"), ("-" * 61 + "1", "lies too deep"), ("1 + " * 70 + "1", "lies too deep"),
        ("1" * 2001, "characters"), ("wieght + 1", 'did you mean "weight"?'), (5, "as text in quotes"),
        ("'" + "a" * 50 + "'", "text out of place"), ("...", "is no number"), ("b'a'", "is no number"),
        ("None", "is no number"),
    ],
)  # fmt: skip
def test_refusals(text, said):
    assert said in refusal(text)


def test_what_is_wanted_is_said():
    assert "a number where a condition is needed" in refusal("age + 1", "condition")
    assert "a condition where a number is needed" in refusal("age > 1", "number")
    assert "a condition where a number is needed" in refusal("true", "number")


def test_all_refusals_at_once():
    message = refusal("x.y + 'a' + foo(1)")
    assert message.count("found:") == 3


def test_a_name_used_in_two_ways_is_refused():
    assert "opioid" in refusal("1 if opioid else opioid")


# --- against Python itself, on formulas drawn at random -------------------------------------------------------------

NUMBERS = st.floats(0.01, 100).map(lambda x: f"{x:.4g}") | st.sampled_from(["age", "weight"])


def _numeric(inner):
    pairs = st.tuples(inner, st.sampled_from(["+", "-", "*", "/"]), inner).map(lambda p: f"({p[0]} {p[1]} {p[2]})")
    names = st.sampled_from(["exp", "sqrt", "log", "abs", "floor"])
    calls = st.tuples(names, inner).map(lambda p: f"{p[0]}(min(abs({p[1]}), 50))")
    comparison = st.tuples(inner, st.sampled_from(["<", "<=", ">", ">=", "==", "!="]), inner)
    choices = st.tuples(inner, comparison, inner).map(lambda p: f"({p[0]} if {' '.join(p[1])} else {p[2]})")
    joined = st.tuples(comparison, st.sampled_from(["and", "or"]), comparison)
    both = st.tuples(inner, joined).map(
        lambda p: f"({p[0]} if not ({' '.join(p[1][0])} {p[1][1]} {' '.join(p[1][2])}) else 1.5)"
    )
    powers = inner.map(lambda x: f"power(abs({x}), 0.75)")
    return pairs | calls | choices | both | powers | inner.map(lambda x: f"(-{x})")


def _by_python(text, person):
    """Python's own evaluation, with numpy's elementary functions so that the last digit agrees too."""
    known = {name: getattr(np, name) for name in ("exp", "sqrt", "log", "floor", "power")} | {"abs": abs, "min": min}
    with np.errstate(all="ignore"):
        return eval(text, {"__builtins__": {}}, known | person)


@settings(max_examples=400, deadline=None)
@given(st.recursive(NUMBERS, _numeric, max_leaves=8), st.floats(1, 100), st.floats(1, 200))
def test_same_as_python(text, age, weight):
    person = {"age": np.array([age]), "weight": np.array([weight])}
    try:
        expected = _by_python(text, person)
    except ZeroDivisionError:  # of two plain numbers
        expected = None
    found = compile_formula(text, "x").evaluate(person)
    assert expected is None or np.array_equal(np.ravel(found), np.ravel(expected), equal_nan=True)


PIECES = """age weight sex 'female' 1 2.5 ( ) + - * ** / < > == and or not if else exp min , [ ] . lambda : true in is { } =
1e9 _ f'' None await yield @ \\ \x00 \u00e9""".split() + ["\n"]


@settings(max_examples=3000, deadline=None)
@given(st.text(max_size=80) | st.lists(st.sampled_from(PIECES), max_size=25).map(" ".join))
def test_hostile_text_is_computed_or_refused(text):
    """Every text either gives plain numbers or conditions, or is refused as a user's mistake: nothing else."""
    try:
        found = compile_formula(text, "here").evaluate(PEOPLE)
    except ProblemsError:
        return
    assert found.dtype in (np.dtype(float), np.dtype(bool))
    assert found.shape in ((), (3,))
