"""[population] and [variability] of a study file, from text to patients."""

import re
import runpy
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest

from covariates.problems import ProblemsError
from popsim.check_text import check_text
from popsim.patients.draw import blocks
from popsim.patients.survey import candidates
from popsim.report import _who
from popsim.run import simulate
from popsim.tables import all_tables, notes_of

cases = SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("judge_cases.py"))))

DESCRIBED = """source = "described"
count = 3000
female_share = "45 %"
[population.described]
age = { mean = "64 years", sd = "11 years", range = "18 to 95 years" }
weight = { median = "88 kg", quartiles = "75 to 103 kg" }
height = { mean = "170 cm", sd = "10 cm" }
serum_creatinine = { median = "88.42 umol/L", p95 = "150 umol/L" }
closure_min = { median = 30, p95 = 50, range = "10 to 59" }
opioid = { share = "30 %" }
[population.together]
"age, weight" = -0.1"""
NEWBORN = """source = "described"
count = 500
female_share = "50 %"
[population.described]
age = { median = "10 d", quartiles = "4 to 20 d", range = "0 d to 60 d" }
gestational_age_weeks = { mean = "31 wk", sd = "3 wk", range = "24 to 42 wk" }
weight = { mean = "1.6 kg", sd = "0.4 kg" }
[population.together]
"age, weight" = 0.3"""
LATTICE = """source = "lattice"
each = 2
[population.lattice]
sex = ["female", "male"]
age = { range = "20 to 80 years", step = "20 years" }
height = "170 cm"
bmi = ["22 kg/m2", "45 kg/m2"]
opioid = [true, false]"""
MIX = """source = "survey"
count = 3000
female_share = "70 %"
[population.age_mix]
"20 to 65 years" = "20 %"
">= 65 years" = "80 %" """


def people(study):
    parts = [part.attributes for part in blocks(study.population, study.seed)]
    return {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}


def test_described_people(tmp_path):
    study = cases.study(tmp_path, population=DESCRIBED)
    found = people(study)
    assert np.median(found["weight"]) == pytest.approx(88, rel=0.02)
    assert np.median(found["serum_creatinine"]) == pytest.approx(1.0, rel=0.02)
    assert found["closure_min"].min() >= 10 and found["closure_min"].max() <= 59
    assert "height with weight 0.46" in study.warnings[0] and "sex with height 0.85" in study.warnings[0]
    assert "age" not in study.warnings[0]


@pytest.mark.parametrize("population", [DESCRIBED, LATTICE, MIX])
def test_every_source_is_judged_checked_and_reported(tmp_path, population):
    target = cases.EFFECT_SITE.replace("60 min", "closure_min") if "closure_min" in population else cases.EFFECT_SITE
    study = cases.study(tmp_path, population=population, targets=(target,))
    findings = simulate(study, 1)
    tables = all_tables(study, findings.tally)
    assert tables["attainment"]["attained"].between(0.0, 1.0).all()
    assert set(study.population.notes()) <= set(notes_of(findings, tables))
    assert max(map(len, check_text(study, 500).splitlines())) <= 80
    record = {"counts": {"patients": 3000, "candidates_seen": 1, "candidates_eligible": 1}}
    assert _who(study, record)[0].startswith("3,000 virtual patients: ")


def test_newborns(tmp_path):
    found = people(
        cases.study(
            tmp_path,
            population=NEWBORN,
            model="propofol_marsh_1991",
            groups={"early": "age < 0.02"},
            variability="between_subject = false",
            targets=(cases.EFFECT_SITE.replace("effect_site", "plasma"),),
        )
    )
    assert found["age"].max() <= 60 / 365 and found["weight"].max() < 6
    assert found["postmenstrual_age_weeks"].min() >= 24


def test_a_lattice(tmp_path):
    study = cases.study(tmp_path, population=LATTICE)
    found = people(study)
    assert len(found["age"]) == 2 * 4 * 2 * 2 * 2 and sorted(set(found["age"])) == [20, 40, 60, 80]
    assert study.warnings[0].startswith("Patients are points of a lattice")


def test_a_mix_of_ages_and_sexes(tmp_path):
    found = people(cases.study(tmp_path, population=MIX))
    assert (found["age"] >= 65).mean() == pytest.approx(0.8, abs=0.03)
    assert (found["sex"] == "female").mean() == pytest.approx(0.7, abs=0.03)
    uniform = people(cases.study(tmp_path, population='source = "survey"\ncount = 9000\nage_mix = "uniform"'))
    assert np.median(uniform["age"]) == pytest.approx(60, abs=1.5)


def test_people_over_80_are_said_to_be_extrapolated(tmp_path):
    assert "over 80 are extrapolated" in cases.study(tmp_path, population='source = "survey"\ncount = 10').warnings[0]
    under = cases.study(tmp_path, population='source = "survey"\ncount = 10\nage = "20 to 80 years"')
    assert not any("extrapolated" in warning for warning in under.warnings)


def test_rare_people_are_said_to_be_rare(tmp_path):
    study = cases.study(tmp_path, population='source = "survey"\ncount = 500\nbmi = ">= 55 kg/m2"', groups={})
    findings = simulate(study, 1)
    notes = notes_of(findings, all_tables(study, findings.tally))
    share = np.mean([candidates(1, block)["bmi"] >= 55 for block in range(40)])
    assert findings.share_eligible == pytest.approx(share, rel=0.08)
    assert any(note.startswith("These patients are rare: 0.9") for note in notes)


def test_variability_of_the_study_itself(tmp_path):
    study = cases.study(
        tmp_path, variability='scale = 1.0\nparameters = { CL = { value = 0.5, printed_as = "cv" }, V3 = "none" }'
    )
    assert study.variability.own["CL"] == (pytest.approx(np.sqrt(np.log(1.25))), "lognormal")
    assert study.variability.own["V3"][0] == 0 and any(
        "CL 0.4724 (lognormal), V3 none" in said for said in study.warnings
    )
    without = 'parameters = { CL = { value = 0.3, printed_as = "sd of ln" } }'
    target = cases.EFFECT_SITE.replace("effect_site", "plasma")
    assert cases.study(tmp_path, model="propofol_marsh_1991", variability=without, targets=(target,)).variability.own


def swap(text, *pairs):
    for old, new in pairs:
        assert old in text
        text = text.replace(old, new)
    return text


BAD = [
    (swap(DESCRIBED, ('"88 kg"', '"88"')), "described.weight.median", "has no unit"),
    (swap(DESCRIBED, ('"88 kg"', '"88 cm"')), "described.weight.median", "is a height"),
    (swap(DESCRIBED, ('sd = "11 years"', 'p95 = "80 years"')), "described.age", "mean, p95"),
    (swap(DESCRIBED, ('sd = "11 years"', 'sd = "0 years"')), "described.age.sd", "0"),
    (swap(DESCRIBED, ('sd = "11 years"', 'sd = "60 years"')), "described.age", "no normal distribution"),
    (swap(DESCRIBED, ('quartiles = "75 to 103 kg"', 'quartiles = "89 to 103 kg"')), "described.weight", "no Box-Cox"),
    (
        swap(DESCRIBED, ('quartiles = "75 to 103 kg"', 'quartiles = "40 to 103 kg", distribution = "lognormal"')),
        "described.weight",
        "no lognormal",
    ),
    (swap(DESCRIBED, ('range = "18 to 95 years"', 'range = "18 to 130 years"')), "described.age.range", "130"),
    (swap(DESCRIBED, ('range = "18 to 95 years"', 'range = "10 to 95 years"')), "together", "there may be children"),
    (
        swap(DESCRIBED, ('mean = "170 cm", sd = "10 cm"', 'mean = "1.7 m", sdd = "10 cm"')),
        "described.height.sdd",
        "unknown key",
    ),
    (swap(DESCRIBED, ('mean = "170 cm"', 'mean = "40 cm"'), ("range = ", "range =")), "population", ""),
    (
        swap(DESCRIBED, ("closure_min", "bmi"), ('30, p95 = 50, range = "10 to 59"', '"30 kg/m2", p95 = "45 kg/m2"')),
        "described.bmi",
        "from which it follows",
    ),
    (swap(DESCRIBED, ("opioid", "sex")), "described.sex", "no name"),
    (swap(DESCRIBED, ("opioid", "lean_body_mass_james")), "described.lean_body_mass_james", "no name"),
    (swap(DESCRIBED, ('"30 %"', '"130 %"')), "described.opioid.share", "130"),
    (swap(DESCRIBED, ('female_share = "45 %"', "")), "female_share", "missing"),
    (swap(DESCRIBED, ("count = 3000", "")), "count", "missing"),
    (swap(DESCRIBED, ('"age, weight"', '"age, wieght"')), "together", "age, wieght"),
    (swap(DESCRIBED, ("-0.1", "-1.5")), "together", "-1.5"),
    (
        swap(DESCRIBED, ('"age, weight" = -0.1', '"age, weight" = -0.9\n"age, height" = 0.9\n"weight, height" = 0.9')),
        "together",
        "cannot hold together",
    ),
    (
        swap(
            DESCRIBED,
            (
                'height = { mean = "170 cm", sd = "10 cm" }',
                'height = { female = { mean = "160 cm", sd = "7 cm" }, male = { mean = "175 cm", sd = "7 cm" } }',
            ),
        ),
        "described.weight",
        "one for each sex",
    ),
    (swap(NEWBORN, ('"age, weight" = 0.3', "")), "together", "no correlation of age and weight"),
    (swap(LATTICE, ("each = 2", "each = 0")), "each", "0"),
    (swap(LATTICE, ("each = 2", "count = 2")), "count", "lattice"),
    (swap(LATTICE, ('"male"', '"man"')), "lattice.sex", "man"),
    (swap(LATTICE, ('step = "20 years"', 'stop = "20 years"')), "lattice.age.stop", "unknown key"),
    (swap(LATTICE, ('"20 to 80 years"', '">= 20 years"')), "lattice.age", "step"),
    (swap(LATTICE, ('"20 to 80 years"', '"20 to 160 years"')), "lattice.age", "140"),
    (swap(LATTICE, ('"170 cm"', '"170 kg"')), "lattice.height", "is a body weight"),
    (swap(LATTICE, ("opioid = [true, false]", 'weight = "70 kg"')), "lattice", "weight, height and bmi"),
    (swap(LATTICE, ("opioid = [true, false]", "opioid = [1, 1]")), "lattice.opioid", "2 values"),
    (swap(MIX, ('"80 %"', '"70 %"')), "age_mix", "90 %"),
    (swap(MIX, (">= 65", ">= 60")), "age_mix", "overlap"),
    (swap(MIX, ("20 to 65", "10 to 65")), "age_mix", "10 to 65"),
    ('source = "survey"\ncount = 5\nage_mix = "unifrom"', "age_mix", "unifrom"),
    ('source = "survey"\ncount = 5\neach = 3', "each", 'source = "survey"'),
    ('source = "survey"\ncount = 5\nunits = { weight = "g" }', "units", 'source = "survey"'),
    ('source = "survey"\ncount = 5\nsex = "female"\nfemale_share = "50 %"', "female_share", "one sex"),
    ('source = "described"\ncount = 5\nfemale_share = "50 %"', "described", "missing"),
    ('source = "list"\nfile = "people.csv"\nunits = { weight = "stone" }', "units: weight", "stone"),
    ('source = "list"\nfile = "people.csv"\nunits = { wieght = "g" }', "units", "wieght"),
]


@pytest.mark.parametrize("population, where, found", BAD)
def test_what_cannot_be_is_told_where_and_what(tmp_path, population, where, found):
    cases.people(tmp_path, ["female,40,70,165"])
    with pytest.raises(ProblemsError) as caught:
        cases.study(tmp_path, population=population)
    assert any(
        where in problem.where and found in problem.found + problem.allowed for problem in caught.value.problems
    ), caught.value


@pytest.mark.parametrize(
    "variability, where, found",
    [
        ('parameters = { CLX = { value = 0.5, printed_as = "cv" } }', "parameters", "CLX"),
        ("parameters = { CL = 0.5 }", "parameters: CL", "0.5"),
        ("parameters = { CL = { value = 0.5 } }", "parameters: CL", "missing"),
        ('parameters = { CL = { value = 50, printed_as = "cv" } }', "parameters: CL", "50"),
        ('between_subject = false\nparameters = { CL = "none" }', "parameters", "between_subject = false"),
    ],
)
def test_variability_that_cannot_be(tmp_path, variability, where, found):
    with pytest.raises(ProblemsError) as caught:
        cases.study(tmp_path, variability=variability)
    assert any(where in problem.where and found in problem.found for problem in caught.value.problems), caught.value


def test_populations_of_the_readme_can_be_drawn(tmp_path):
    readme = (Path(__file__).resolve().parents[2] / "README.md").read_text(encoding="utf-8")
    shown = [
        text.partition("[population]\n")[2]
        for text in re.findall(r"```toml\n(.*?)```", readme, re.DOTALL)
        if text.startswith("[population]")
    ]
    assert len(shown) == 2
    for population in shown:
        assert len(people(cases.study(tmp_path, population=population))["age"]) in (10_000, 44)
