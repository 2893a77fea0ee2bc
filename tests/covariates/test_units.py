"""Units: exact factors, the closed set, and what is refused."""

import doctest
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from covariates import units
from covariates.problems import ProblemsError
from covariates.units import KINDS, UNITS, normal_unit, parse_quantity, parse_range, parse_unit, show, to_unit


def refusal(call, *arguments):
    """The single problem that a call raises."""
    with pytest.raises(ProblemsError) as caught:
        call(*arguments)
    (problem,) = caught.value.problems
    return problem


# SI prefixes and the minute, hour and day of the SI brochure (BIPM, 9th edition, tables 7 and 8): exact.
@pytest.mark.parametrize(
    ("text", "kind", "value"),
    [
        ("90 s", "time", 1.5), ("5 min", "time", 5.0), ("2 hours", "time", 120.0), ("1 day", "time", 1440.0),
        ("1 wk", "time", 10080.0), ("500 mcg", "mass", 0.5), ("2 g", "mass", 2000.0), ("0.1 g", "mass", 100.0),
        ("7 ng", "mass", 7e-6), ("50 ml", "volume", 0.05), ("250 uL", "volume", 0.00025),
        ("3 ug/mL", "concentration", 3.0), ("4 ng/mL", "concentration", 0.004), ("1 g/L", "concentration", 1000.0),
        ("2.4 \u00b5g/mL", "concentration", 2.4), ("4 ug/L", "concentration", 0.004), ("1.5 mg/kg", "mass_per_kg", 1.5),
        ("50 mg/m2", "mass_per_m2", 50.0), ("50 mg/m\u00b2", "mass_per_m2", 50.0), ("600 ug/h", "rate", 0.01),
        ("6 mg/kg/h", "rate_per_kg", 0.1), ("6 mg/h/kg", "rate_per_kg", 0.1),
        ("0.25 mcg/kg/min", "rate_per_kg", 0.00025),
        ("6 mg/m2/h", "rate_per_m2", 0.1), ("5 L/h", "flow", 5 / 60), ("120 mL/min", "flow", 0.12),
        ("0.456 1/min", "per_time", 0.456), ("6 /h", "per_time", 0.1), ("400 mg.h/L", "area", 24000.0),
        ("400 mg*h/L", "area", 24000.0), ("24 ug*min/mL", "area", 24.0),
        ("65 years", "age", 65.0), ("18 months", "age", 1.5), ("1461 d", "age", 4.0),
        ("27 weeks", "postmenstrual_age", 27.0),
        ("70 kg", "body_weight", 70.0), ("680 g", "body_weight", 0.68), ("1.7 m", "height", 170.0),
        ("30 kg/m2", "body_mass_index", 30.0), ("30 kg/m^2", "body_mass_index", 30.0),
        ("1.2 mg/dL", "creatinine", 1.2), ("80 %", "percent", 80.0), ("80%", "percent", 80.0), ("40", "number", 40.0),
    ],
)  # fmt: skip
def test_worked_values(text, kind, value):
    assert parse_quantity(text, [kind]).value == value
    assert parse_quantity(text, [kind]).kind == kind


def test_creatinine_by_molar_mass():
    """Molar mass of creatinine, C4H7N3O, from standard atomic weights (IUPAC 2021, abridged): 113.12 g/mol."""
    molar_mass = 4 * 12.011 + 7 * 1.008 + 3 * 14.007 + 15.999
    found = parse_quantity("100 umol/L", ["creatinine"]).value
    assert found == pytest.approx(100 * molar_mass / 10000, rel=3e-4)
    assert found == 100 / 88.42


def test_the_kind_found_is_the_one_asked_for():
    assert parse_quantity("1.2 mg/dL", ["concentration"]).value == 12.0
    assert parse_quantity("6 mg/kg/h", ["rate", "rate_per_kg"]).kind == "rate_per_kg"
    assert parse_quantity("5 d", ["time"]).value == 7200.0
    assert parse_quantity(0.5, ["number"]).value == 0.5


@pytest.mark.parametrize("given", ["5", 5, 5.0, "5 "])
def test_a_bare_number_shows_the_right_form(given):
    problem = refusal(parse_quantity, given, ["time"], "study.toml: run.until")
    assert problem.where == "study.toml: run.until"
    assert "has no unit" in problem.found
    assert problem.advice.startswith('write "5') and 'min" or "5' in problem.advice.replace("5.0", "5")


def test_a_bare_creatinine_is_not_led_to_one_unit():
    """106 is umol/L; whoever is told to write mg/dL might."""
    problem = refusal(parse_quantity, "106", ["creatinine"], "--creatinine")
    assert problem.advice == 'write "106 mg/dL" or "106 umol/L", whichever you mean'
    assert refusal(parse_quantity, "80", ["percent"], "").advice == 'write "80 %" if % is what you mean'


@pytest.mark.parametrize(
    ("text", "kinds", "found"),
    [
        ("1.5 mg/kg", ["time"], "an amount per kg"),
        ("1.5 mg/kg", ["number"], "an amount per kg"),
        ("1.5 mg/kg", ["mass"], "an amount per kg"),
        ("200 mg", ["mass_per_kg"], "an amount"),
        ("6 mg/kg/h", ["rate"], "a rate per kg"),
        ("5 m", ["time"], "a height"),
        ("40 min", ["number"], "a time"),
    ],
)
def test_the_wrong_kind_is_named(text, kinds, found):
    problem = refusal(parse_quantity, text, kinds)
    assert problem.found == f'"{text}" is {found}'
    assert KINDS[kinds[0]].example in problem.allowed


@pytest.mark.parametrize(
    ("text", "kind", "meant"),
    [
        ("3 ugg/mL", "concentration", "ug/mL"),
        ("5 MG", "mass", "mg"),
        ("6 mg/kg.h", "rate_per_kg", "mg/kg/h"),
        ("5 minn", "time", "min"),
    ],
)
def test_an_unknown_unit_names_the_nearest(text, kind, meant):
    problem = refusal(parse_quantity, text, [kind])
    assert "unknown unit" in problem.found
    assert problem.advice == f'did you mean "{meant}"?'


@pytest.mark.parametrize("text", ["-5 min", "-0.1 min"])
def test_negative(text):
    assert "negative" in refusal(parse_quantity, text, ["time"]).found


@pytest.mark.parametrize("text", ["nan min", "inf min", "-inf min", "1e999 min", "9e307 wk", math.nan, math.inf])
def test_not_finite(text):
    assert "not finite" in refusal(parse_quantity, text, ["time", "number"]).found


@pytest.mark.parametrize("text", ["1,5 mg", "1,000 mg"])
def test_commas_are_not_guessed_at(text):
    assert "decimal point" in refusal(parse_quantity, text, ["mass"]).advice


@pytest.mark.parametrize(
    "text", ["", "mg", "1/2 mg", "five mg", "1e9999999999 mg", "5 mg 3", "5 mg/mg", "5 mg/kg/kg", "5 kg/mg", "5 mg.mg",
             "1.2.3 mg", "0x10 mg", "\u0665 mg", None, True, ["5 mg"], "9" * 200 + " mg"]
)  # fmt: skip
def test_everything_else_is_refused(text):
    refusal(parse_quantity, text, ["mass"])


@pytest.mark.parametrize("text", ["5 mg\n", "  5   mg ", "5mg", "5.0 mg", "+5 mg", "0.5e1 mg"])
def test_forms_that_leave_no_doubt(text):
    assert parse_quantity(text, ["mass"]).value == 5.0


def test_ranges():
    assert (parse_range("5 min to 60 min", "time").low, parse_range("5 min to 60 min", "time").high) == (5.0, 60.0)
    assert parse_range("5 to 60 min", "time").low == 5.0
    assert parse_range("5 min to 1 h", "time").high == 60.0
    assert parse_range("20 to 90 years", "age").unit == "years"
    assert parse_range("40 to 60", "number").high == 60.0
    upper = parse_range(">= 65 years", "age")
    assert (upper.low, upper.high) == (65.0, math.inf)
    assert parse_range("> 65 years", "age").low == 65.0
    lower = parse_range("<= 8 ug/mL", "concentration")
    assert (lower.low, lower.high) == (-math.inf, 8.0)
    assert parse_range("< 8 mcg/mL", "concentration").unit == "ug/mL"


@pytest.mark.parametrize(
    ("text", "kind", "said"),
    [
        ("60 to 5 min", "time", "below the upper end"), ("5 to 5 min", "time", "below the upper end"),
        ("5-60 min", "time", "5 to 10 min"), ("5 min", "time", "5 to 10 min"), ("2 to 4", "concentration", "3 ug/mL"),
        (">= 65", "age", "65 years"), ("5 to 60 mg", "time", "a time"), (60, "time", "5 to 10 min"),
        ("1 to 2 to 3 min", "time", "5 to 10 min"), (">= ", "age", "65 years"), ("-5 to 5 min", "time", "zero or more"),
    ],
)  # fmt: skip
def test_bad_ranges(text, kind, said):
    assert said in refusal(parse_range, text, kind).allowed


@pytest.mark.parametrize(
    ("value", "unit", "kind", "text"),
    [
        (0.1, "mg/kg/h", "rate_per_kg", "6 mg/kg/h"), (6.25 / 60, "mg/kg/h", "rate_per_kg", "6.25 mg/kg/h"),
        (12345.6, "mg", "mass", "12346 mg"), (2 / 3, "", "number", "0.6667"), (0.0, "%", "percent", "0 %"),
        (100.0, "mcg", "mass", "100000 ug"), (math.inf, "min", "time", "inf min"), (0.99999, "mg", "mass", "1 mg"),
    ],
)  # fmt: skip
def test_show(value, unit, kind, text):
    assert show(value, unit, kind) == text


def test_the_tables_are_whole():
    assert set(UNITS) == set(KINDS)
    for kind, entry in KINDS.items():
        assert parse_quantity(entry.example, [kind]).value > 0
        assert entry.internal in UNITS[kind] or kind in ("rate_per_kg", "rate_per_m2", "area", "mass_per_kg")
        assert UNITS[kind][entry.internal] == 1, "the internal unit has the factor 1"
        for name in UNITS[kind]:
            assert normal_unit(name) == name, "every listed unit is its own normal spelling"
            assert parse_unit(name, [kind]).factor > 0


def test_worked_examples_in_docstrings():
    result = doctest.testmod(units)
    assert result.attempted >= 3 and result.failed == 0


@given(st.sampled_from([(kind, unit) for kind in UNITS for unit in UNITS[kind]]), st.floats(1e-6, 1e6))
def test_there_and_back(kind_and_unit, number):
    kind, unit = kind_and_unit
    value = parse_quantity(f"{number!r} {unit}", [kind]).value
    assert to_unit(value, unit, kind) == pytest.approx(number, rel=4 * np.finfo(float).eps)


@given(st.text(max_size=40) | st.from_regex(r"[0-9.]{0,6} ?[mugk%/.h*Ldins2]{0,8}", fullmatch=True))
def test_no_text_breaks_the_parser(text):
    for kind in KINDS:
        try:
            found = parse_quantity(text, [kind])
        except ProblemsError:
            continue
        assert 0 <= found.value < math.inf
        assert found.unit in UNITS[kind]
