"""Reading model sheets: a good one in every part, and each mistake with its message."""

import hashlib

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from covariates.problems import ProblemsError
from covariates.sheet import example_people, parameters_of, read_sheet, shipped_sheets

GOOD = """
name = "drug_author_2000"
drug = "drug"
title = "A made-up drug for tests"
evidence = "recalled"
[source]
citation = "Nobody 2000"
[built_on]
people = "nobody"
count = 12
age = "20 to 60 years"
weight = "50 kg to 90 kg"
bmi = "<= 30 kg/m2"
longest_infusion = "2 h"
sampling = "arterial"
[measured_in]
fluid = "whole blood"
fraction_unbound = 0.3
[reference_person]
sex = "male"
age = "40 years"
weight = "70 kg"
height = "180 cm"
[needs]
opioid = "true when an opioid is given alongside"
[equations]
size = { is = "weight / weight_reference" }
CL = { is = "30 * size * (0.8 if opioid else 1) * bmi_reference / bmi_reference", unit = "L/h", evidence = "seen" }
V1 = { is = "10000 * size", unit = "mL", evidence = "recalled, high", note = "a note" }
V2 = { is = "2 * V1 / 1000", unit = "L" }
Q2 = { is = "0.5 * V2 / V2_typical", unit = "L/min" }
ke0 = { is = "6", unit = "1/h" }
E0 = { is = "100" }
Emax = { is = "0" }
C50 = { is = "500 + age", unit = "ng/mL" }
gamma = { is = "2" }
[effect]
name = "BIS"
low_means = "too deep"
high_means = "too light"
uses = { baseline = "E0", at_infinity = "Emax", half = "C50", steepness = "gamma" }
[spread]
printed_as = "cv"
V1 = { value = 0.5, evidence = "seen" }
CL = { value = 0.09, printed_as = "variance of ln" }
V2 = { value = 0.2, printed_as = "sd of ln" }
note = "made up"
[spread_together]
"V1, CL" = 0.4
[measurement_error]
proportional = 0.2
additive = "10 ng/mL"
[cautions]
list = ["made up"]
"""


def write(folder, text, name="drug_author_2000.toml"):
    (folder / name).write_text(text, encoding="utf-8")
    return read_sheet(name, folder)


def problems_of(folder, text, name="drug_author_2000.toml"):
    with pytest.raises(ProblemsError) as caught:
        write(folder, text, name)
    return caught.value.problems


def test_every_part_is_read(tmp_path):
    model = write(tmp_path, GOOD)
    assert (model.drug, model.evidence, model.compartments, model.has_effect_site) == ("drug", "recalled", 2, True)
    assert model.built_on.count == 12
    assert (model.built_on.ranges["age"].low, model.built_on.ranges["age"].high) == (20.0, 60.0)
    assert (model.built_on.ranges["bmi"].low, model.built_on.ranges["bmi"].high) == (-np.inf, 30.0)
    assert model.built_on.longest_infusion_min == 120.0
    assert model.measured_in == {"fluid": "whole blood", "fraction_unbound": 0.3}
    assert model.reference == {"weight_reference": 70.0, "bmi_reference": pytest.approx(70 / 1.8**2)}
    assert model.needs == {"weight", "age"}
    assert model.switches == {"opioid": "true when an opioid is given alongside"}
    assert model.spread["V1"] == pytest.approx(np.sqrt(np.log(1.25)))
    assert model.spread["CL"] == pytest.approx(0.3)
    assert model.spread["V2"] == 0.2
    assert model.correlations == {("V1", "CL"): 0.4}
    assert model.measurement_error == {"proportional": 0.2, "additive": 0.01}
    assert model.cautions == ("made up",)
    assert model.digest == hashlib.sha256(GOOD.encode()).hexdigest()
    order = [equation.name for equation in model.equations]
    assert order.index("size") < order.index("V1") < order.index("V2") < order.index("Q2")
    first = next(equation for equation in model.equations if equation.name == "V1")
    assert (first.unit, first.factor, first.evidence, first.note) == ("mL", 0.001, "recalled, high", "a note")


def test_parameters_in_internal_units(tmp_path):
    model = write(tmp_path, GOOD)
    people = {"weight": np.array([70.0, 35.0]), "age": np.array([20.0, 60.0]), "opioid": np.array([False, True])}
    found = parameters_of(model, people.__getitem__, {})
    expected = {
        "V1": [10, 5], "V2": [20, 10], "CL": [0.5, 0.2], "Q2": [0.5, 0.5], "ke0": [0.1, 0.1],
        "E0": [100, 100], "Emax": [0, 0], "C50": [0.52, 0.56], "gamma": [2, 2],
    }  # fmt: skip
    assert list(found) == list(model.outputs) and set(found) == set(expected)
    for name, values in expected.items():
        assert found[name].shape == (2,) and found[name].dtype == float
        np.testing.assert_allclose(found[name], values, rtol=1e-14)


def test_effects_act_before_use_and_typical_is_free_of_them(tmp_path):
    model = write(tmp_path, GOOD)
    people = {"weight": np.array([70.0, 70.0]), "age": np.array([20.0, 20.0]), "opioid": np.array([False, False])}
    found = parameters_of(model, people.__getitem__, {"V1": np.log([1.0, 3.0]), "V2": np.log([1.0, 2.0])})
    np.testing.assert_allclose(found["V1"], [10.0, 30.0])
    np.testing.assert_allclose(found["V2"], [20.0, 120.0])  # the individual V1 and its own effect
    np.testing.assert_allclose(found["Q2"], [0.5, 3.0])  # V2_typical is what the person has without any effect: 20
    with pytest.raises(ValueError, match="V9"):
        parameters_of(model, people.__getitem__, {"V9": np.zeros(2)})


MORE = """
[needs_numbers]
albumin = { means = "g/L", example = 40 }
[example_person]
age = "7 years"
weight = "20 kg"
[equations]
ka = { is = "albumin / 40", unit = "1/h" }
F = { is = "0.8" }
lag = { is = "0.5", unit = "h" }
"""


def test_absorption_numbers_and_example_people(tmp_path):
    text = GOOD.replace("count = 12", 'count = 12\ndoses = "1 mg/kg"\nlargest_total = "2 g"')
    model = write(tmp_path, text.replace("\n[equations]\n", MORE))
    assert model.has_absorption and model.outputs[:8] == ("V1", "V2", "CL", "Q2", "ke0", "ka", "F", "lag")
    assert (model.numbers["albumin"].means, model.numbers["albumin"].example) == ("g/L", 40)
    assert model.built_on.doses == "1 mg/kg" and model.built_on.largest_total.value == 2000
    people = example_people(model)
    assert people["weight"].tolist() == [20, 20] and people["age"].tolist() == [7, 7] and len(people["sex"]) == 2
    found = parameters_of(model, lambda name: people[name], {})
    assert found["ka"][0] == pytest.approx(1 / 60) and found["F"][0] == 0.8 and found["lag"][0] == 30
    assert not write(tmp_path, GOOD).has_absorption


def test_spread_is_kept_as_it_was_printed(tmp_path):
    printed = write(tmp_path, GOOD).printed_spread
    assert (printed["V1"].value, printed["V1"].printed_as, printed["V1"].evidence) == (0.5, "cv", "seen")
    clearance = printed["CL"]
    assert (clearance.value, clearance.printed_as, clearance.omega) == (0.09, "variance of ln", pytest.approx(0.3))


def test_constants_spread_over_all_patients(tmp_path):
    text = 'name = "flat"\ndrug = "x"\ntitle = "x"\nevidence = "seen"\n'
    text += '[source]\ncitation = "x"\n[built_on]\npeople = "x"\n'
    text += '[measured_in]\nfluid = "total plasma"\n[spread]\npublished = false\n'
    text += '[equations]\nV1 = { is = "5", unit = "L" }\nCL = { is = "1", unit = "L/min" }\n'
    model = write(tmp_path, text, "flat.toml")
    assert model.compartments == 1 and not model.has_effect_site and model.spread == {}
    assert parameters_of(model, {}.__getitem__, {}, count=4)["V1"].tolist() == [5.0] * 4
    assert parameters_of(model, {}.__getitem__, {"CL": np.zeros(3)})["V1"].tolist() == [5.0] * 3


MISTAKES = [
    # what to replace, by what, where the problem is, what the message says
    ('name = "drug_author_2000"', 'name = "other"', "name", "as the file is called"),
    ('drug = "drug"\n', "", "drug", "missing"),
    ('evidence = "recalled"\n[source]', 'evidence = "certain"\n[source]', "evidence", "seen, recalled"),
    ('evidence = "recalled"\n[source]', 'evidence = "seen"\n[source]', "evidence", "V1 recalled"),
    ('title = "A', 'titel = "x"\ntitle = "A', "titel", 'did you mean "title"?'),
    ('[source]\ncitation = "Nobody 2000"', "", "source", "missing"),
    ('citation = "Nobody 2000"', 'doi = "10"', "source.citation", "missing"),
    ('[measured_in]\nfluid = "whole blood"\nfraction_unbound = 0.3', "", "measured_in", "missing"),
    ('fluid = "whole blood"', 'fluid = "blood"', "measured_in.fluid", "whole blood"),
    ("fraction_unbound = 0.3", "fraction_unbound = 30", "measured_in.fraction_unbound", "at most 1"),
    ("count = 12", "count = 1.5", "built_on.count", "whole number"),
    ("count = 12", "count = true", "built_on.count", "above 0"),
    ('age = "20 to 60 years"', 'age = "20 to 60"', "built_on.age", "has no unit"),
    ('age = "20 to 60 years"', 'age = "60 to 20 years"', "built_on.age", "below the upper end"),
    ('weight = "50 kg to 90 kg"', 'wieght = "50 kg to 90 kg"', "built_on.wieght", 'did you mean "weight"?'),
    ('longest_infusion = "2 h"', 'longest_infusion = "2 mg"', "built_on.longest_infusion", "an amount"),
    ('sampling = "arterial"', 'sampling = "artery"', "built_on.sampling", 'did you mean "arterial"?'),
    ('weight = "70 kg"', 'weight = "70 cm"', "reference_person.weight", "a height"),
    ('opioid = "true when', 'opioid = true # "', "needs.opioid", "true when"),
    ('is = "10000 * size", unit = "mL"', 'is = "10000 * size"', "equations.V1.unit", "missing"),
    ('is = "10000 * size", unit = "mL"', 'is = "10000 * size", unit = "mg"', "equations.V1.unit", "an amount"),
    ('is = "10000 * size", unit = "mL"', 'is = "10000 * size", unit = "mLL"', "equations.V1.unit", 'mean "mL"?'),
    ('E0 = { is = "100" }', 'E0 = { is = "100", unit = "mg" }', "equations.E0.unit", "plain number"),
    ('is = "500 + age", unit = "ng/mL"', 'is = "500 + age"', "equations.C50.unit", "missing"),
    ('is = "10000 * size", unit = "mL"', 'is = "9000", units = "mL"', "equations.V1.units", 'mean "unit"?'),
    ('V1 = { is = "10000 * size"', 'V1 = { as = "10000 * size"', "equations.V1.is", "missing"),
    ('evidence = "recalled, high"', 'evidence = "sure"', "equations.V1.evidence", "recalled"),
    ('"10000 * size"', '"10000 * sise"', "equations.V1.is", 'did you mean "size"?'),
    ('"10000 * size"', '"10000 * lean_body_mass"', "equations.V1.is", 'unknown name "lean_body_mass"'),
    ('"10000 * size"', '"10000 * sex_reference"', "equations.V1.is", "unknown name"),
    ('"10000 * size"', '"10000 ** 2000 * size"', "equations.V1.is", "too large an exponent"),
    ('"10000 * size"', '"age > 3"', "equations.V1.is", "a condition where a number is needed"),
    ('"10000 * size"', '"10000 * opioid"', "equations.V1.is", "is true or false but is used as a number"),
    ('"10000 * size"', '"10000 * (size - 2)"', "equations.V1.is", "a finite number above zero"),
    ('"10000 * size"', '"log(-size)"', "equations.V1.is", "a finite number above zero"),
    ('"10000 * size"', '"10000 * V2"', "equations", "V1 -> V2 -> V1"),
    ('"10000 * size"', '"V1"', "equations", "V1 -> V1"),
    ('Q2 = { is = "0.5 * V2 / V2_typical", unit = "L/min" }', "", "equations.V2", "V2 without Q2"),
    ('V2 = { is = "2 * V1 / 1000", unit = "L" }', 'V3 = { is = "9", unit = "L" }', "equations.V3", "V3 without V2"),
    ("CL = { is", "Cl = { is", "equations.CL", "missing"),
    ("CL = { is", "Cl = { is", "equations.Cl", "an equation that nothing uses"),
    ("[equations]", '[equations]\nlag = { is = "5", unit = "min" }', "equations.lag", "lag without ka"),
    ("[equations]", '[equations]\nF = { is = "0.5" }', "equations.F", "F without ka"),
    ("[equations]", '[equations]\nF = { is = "0.5", unit = "%" }', "equations.F.unit", "plain number"),
    ("[equations]", '[equations]\nka = { is = "1", unit = "1/h" }\nF = { is = "1.2" }', "equations.F.is", "at most 1"),
    ("[equations]", '[needs_numbers]\nalbumin = "g/L"\n[equations]', "needs_numbers.albumin", "example ="),
    ("[equations]", '[needs_numbers]\nbmi = { means = "x", example = 1 }\n[equations]', "needs_numbers.bmi", "no name"),
    ("[equations]", '[needs_numbers]\nx = { means = "x" }\n[equations]', "needs_numbers.x.example", "missing"),
    ('fluid = "whole blood"', 'fluid = "unbound plasma"', "measured_in.fraction_unbound", "never applied twice"),
    ("count = 12", 'count = 12\nlargest_total = "3 mg/h"', "built_on.largest_total", "a rate"),
    ("[equations]", '[example_person]\nage = 7\n[equations]', "example_person.age", "has no unit"),
    ('ke0 = { is = "6", unit = "1/h" }', "", "effect", "without an effect site"),
    ("[equations]", '[equations]\nage = { is = "3" }', "equations.age", "means something else already"),
    ("[equations]", '[equations]\nexp = { is = "3" }', "equations.exp", "means something else already"),
    ("[equations]", '[equations]\nV1_typical = { is = "3" }', "equations.V1_typical", "ending with a meaning"),
    ("[equations]", "[equations]\nextra = 3", "equations.extra", 'is = "4.27"'),
    ('half = "C50"', 'half = "C51"', "effect.uses", 'did you mean "C50"?'),
    ('low_means = "too deep"\n', "", "effect.low_means", "missing"),
    ('printed_as = "cv"\n', "", "spread.V1.printed_as", "missing"),
    ('printed_as = "sd of ln"', 'printed_as = "omega"', "spread.V2.printed_as", "sd of ln"),
    ("value = 0.5", "value = 50", "spread.V1.value", "0.26 for 26 %"),
    ("value = 0.5", "value = -0.5", "spread.V1.value", "above 0"),
    ("value = 0.5", "value = nan", "spread.V1.value", "above 0"),
    ("value = 0.5", 'value = "0.5"', "spread.V1.value", "above 0"),
    ("\nCL = { value", "\nCK = { value", "spread.CK", "no equation"),
    ("\nCL = { value = 0.09, printed_as", "\nCL = 0.09\nC50 = { value = 0.1, printed_as", "spread.CL", "value ="),
    ("[spread]\n", "[spread]\npublished = false\n", "spread.published", "published = true"),
    ('"V1, CL" = 0.4', '"V1, CL" = 1.4', 'spread_together."V1, CL"', "between -1 and 1"),
    ('"V1, CL" = 0.4', '"V1, Q2" = 0.4', 'spread_together."V1, Q2"', "two names with spread"),
    ('"V1, CL" = 0.4', '"V1, CL" = 0.9\n"V1, V2" = 0.9\n"CL, V2" = -0.9', "spread_together", "hold together"),
    ("proportional = 0.2", "proportional = 20", "measurement_error.proportional", "0.2 for 20 %"),
    ('additive = "10 ng/mL"', "additive = 10", "measurement_error.additive", "has no unit"),
    ('list = ["made up"]', 'list = "made up"', "cautions.list", "a list of texts"),
]  # fmt: skip


OF_PHARMACISTS = [  # a drug of one's own, copied from a paper: what is written, and what helps
    ('"10000 * size"', '"10000 * CLcr"', "equations.V1.is", "creatinine_clearance_cockcroft_gault_total"),
    ('"10000 * size"', '"140 * WT"', "equations.V1.is", "to do:   write weight"),
    ('"10000 * size"', '"140 * LBM"', "equations.V1.is", "lean_body_mass_boer or "),
    ('"10000 * size"', '"10000 * size^0.75"', "equations.V1.is", "write ** for a power"),
    ('"10000 * size"', '"0,5 * weight"', "equations.V1.is", "a decimal point"),
    ('"10000 * size"', '"0.5 L/kg"', "equations.V1.is", "holds no units"),
    ('"10000 * size", unit = "mL"', '"10000 * size"', "equations.V1.unit", 'such as "L"'),
    ("[equations]", '[equations]\nVd = { is = "30" }', "equations.Vd", "write V1"),
    ("[equations]", '[equations]\nk10 = { is = "0.2" }', "equations.k10", "rate constant times V1"),
]


@pytest.mark.parametrize(("old", "new", "where", "said"), OF_PHARMACISTS, ids=[m[1] for m in OF_PHARMACISTS])
def test_mistakes_of_those_who_copy_a_paper(tmp_path, old, new, where, said):
    """One message each, and it says what to write."""
    assert old in GOOD
    problems = problems_of(tmp_path, GOOD.replace(old, new, 1))
    assert [problem.where for problem in problems] == [f"drug_author_2000.toml: {where}"], "\n".join(map(str, problems))
    assert said in str(problems[0])


@pytest.mark.parametrize(("old", "new", "where", "said"), MISTAKES, ids=[f"{m[2]}-{m[3]}" for m in MISTAKES])
def test_each_mistake_is_named(tmp_path, old, new, where, said):
    assert old in GOOD
    problems = problems_of(tmp_path, GOOD.replace(old, new, 1))
    here = [str(problem) for problem in problems if problem.where == f"drug_author_2000.toml: {where}"]
    assert any(said in text for text in here), "\n".join(map(str, problems))


def test_all_problems_at_once(tmp_path):
    text = GOOD.replace("count = 12", "count = 0").replace('"10000 * size"', '"x +"')
    text = text.replace("value = 0.5", "value = 50")
    wheres = {problem.where.partition(": ")[2] for problem in problems_of(tmp_path, text)}
    assert {"built_on.count", "equations.V1.is", "spread.V1.value"} <= wheres


def test_a_reference_needs_a_person(tmp_path):
    start, end = GOOD.index("[reference_person]"), GOOD.index("[needs]")
    assert "without a person to refer to" in str(problems_of(tmp_path, GOOD[:start] + GOOD[end:]))
    no_height = problems_of(tmp_path, GOOD.replace('height = "180 cm"\n', ""))
    assert "reference_person" in no_height[0].where and "height" in no_height[0].found


def test_spread_must_be_said(tmp_path):
    start, end = GOOD.index("[spread]"), GOOD.index("[measurement_error]")
    assert [problem.found for problem in problems_of(tmp_path, GOOD[:start] + GOOD[end:])] == ["missing"]
    empty = GOOD[:start] + '[spread]\nnote = "x"\n' + GOOD[end:]
    assert "published = false" in str(problems_of(tmp_path, empty))


def test_files_that_are_no_sheet(tmp_path):
    with pytest.raises(ProblemsError, match="cannot be opened"):
        read_sheet("absent.toml", tmp_path)
    with pytest.raises(ProblemsError, match="cannot be opened"):
        (tmp_path / "folder.toml").mkdir()
        read_sheet("folder.toml", tmp_path)
    (tmp_path / "latin.toml").write_bytes(b'name = "\xe9"')
    with pytest.raises(ProblemsError, match="UTF-8"):
        read_sheet("latin.toml", tmp_path)
    (tmp_path / "broken.toml").write_text("name = ")
    with pytest.raises(ProblemsError, match="not TOML"):
        read_sheet("broken.toml", tmp_path)
    (tmp_path / "deep.toml").write_text("a = " + "[" * 5000)
    with pytest.raises(ProblemsError, match="not TOML"):
        read_sheet("deep.toml", tmp_path)


def test_unknown_names_show_the_nearest():
    with pytest.raises(ProblemsError) as caught:
        read_sheet("propofol_schneider_1998")
    assert caught.value.problems[0].advice == 'did you mean "propofol_schnider_1998"?'
    with pytest.raises(ProblemsError) as caught:
        read_sheet("aspirin")
    assert ".toml" in caught.value.problems[0].advice
    assert shipped_sheets() == sorted(shipped_sheets()) and "propofol_eleveld_2018" in shipped_sheets()


LINES = GOOD.splitlines()
JUNK = ["", "x = 1", "[equations]", "V1 = 3", "[effect]", "uses = 3", "list = 1", "[[spread]]", 'name = ["a"]']
JUNK += ["spread = 1", "equations = []"]


@settings(max_examples=300, deadline=None)
@given(st.lists(st.tuples(st.integers(0, len(LINES) - 1), st.sampled_from(JUNK + LINES)), min_size=1, max_size=4))
def test_a_mangled_sheet_is_read_or_refused(tmp_path_factory, changes):
    """Whatever lines are lost, doubled or replaced: a model, or problems that a user can mend."""
    lines = list(LINES)
    for place, line in changes:
        lines[place] = line
    try:
        model = write(tmp_path_factory.mktemp("sheet"), "\n".join(lines))
    except ProblemsError as error:
        assert error.problems and all(problem.found for problem in error.problems)
    else:
        assert model.outputs[:1] == ("V1",)


@pytest.mark.parametrize(
    ("entry", "sd", "form"),
    [
        ('{ value = 0.5, distribution = "normal", printed_as = "sd" }', 0.5, "normal"),
        ('{ value = 4, distribution = "normal", printed_as = "variance" }', 2.0, "normal"),
        ('{ value = 0.3, distribution = "normal", printed_as = "cv" }', 0.3, "normal, relative"),
        ('{ value = 0.09, distribution = "logit-normal", printed_as = "variance of logit" }', 0.3, "logit-normal"),
        ('{ value = 40, distribution = "normal", printed_as = "sd" }', 40.0, "normal"),
        ('{ value = 0.3, distribution = "lognormal", printed_as = "sd of ln" }', 0.3, None),
    ],
)
def test_spread_that_is_not_lognormal(tmp_path, entry, sd, form):
    model = write(tmp_path, GOOD.replace('{ value = 0.2, printed_as = "sd of ln" }', entry))
    assert model.spread["V2"] == pytest.approx(sd) and model.spread_forms.get("V2") == form
    assert model.spread["V1"] == pytest.approx(np.sqrt(np.log(1.25))) and "V1" not in model.spread_forms


@pytest.mark.parametrize(
    ("entry", "key"),
    [
        ('{ value = 0.2, distribution = "normal" }', "printed_as"),  # the section is meant for lognormal spread
        ('{ value = 0.2, distribution = "logit-normal" }', "printed_as"),
        ('{ value = 0.2, distribution = "gaussian", printed_as = "sd" }', "distribution"),
        ('{ value = 0.2, distribution = "normal", printed_as = "sd of ln" }', "printed_as"),
    ],
)
def test_spread_must_be_printed_in_a_way_that_its_distribution_has(tmp_path, entry, key):
    text = GOOD.replace('{ value = 0.2, printed_as = "sd of ln" }', entry)
    assert f"spread.V2.{key}" in {problem.where.split(": ", 1)[1] for problem in problems_of(tmp_path, text)}
