"""The search over body sizes, and the commands from study file to files."""

from __future__ import annotations

import json
import runpy
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from covariates.problems import ProblemsError
from popsim.cli import run
from popsim.finding.counting import count
from popsim.finding.size import by_measure, look_at, read_measures, reference_size, search_sizes, with_classes

find_cases = runpy.run_path(str(Path(__file__).with_name("find_cases.py")))
ADULT = find_cases["ADULT"]
DOSES = {"a": 'amount = "1.5 mg/kg"\nat_most = "200 mg"\n---\nrate = "6 mg/kg/h"\nby = "adjusted_body_weight"\n'
              'until = "60 min"\n---\namount = "20 mg"\nat = "10 min"'}
CARD = """[find]
wish = ["at least 50 % attained in every group"]
[[find.vary]]
what = "dose 1: rate"
over = "400 to 900 ug/h"
steps = 4
[find.reference]
sex = "male"
age = "40 years"
weight = "70 kg"
height = "176 cm"
[find.table]
what = "dose 1: rate"
by = "age"
bands = 2
edges_to = 10
doses = "300 to 900 ug/h"
round_to = "100 ug/h"
"""


def asked(tmp_path, find=ADULT, **more):
    return find_cases["asked_of"](find_cases["find_file"](tmp_path, find, **more))


def test_the_reference_adult_gets_the_same_by_every_measure(tmp_path):
    """A list with that one person, every measure, every dose of the card."""
    question, protocol = asked(
        tmp_path, protocols=DOSES, groups={},
        population=find_cases["cases"]["people"](tmp_path, ["male,40,70,176"]))
    study = question.study([protocol, *(by_measure(question, protocol, name) for name in read_measures(question))])
    doses = count(study).dose_mg[:, 0]
    assert len(doses) > 10 and doses == pytest.approx(doses[0], rel=1e-12)


def test_reference_sizes_are_printed_ones(tmp_path):
    """The numbers of a man of 70 kg and 176 cm, worked out by hand from the printed equations."""
    question, _ = asked(tmp_path)
    assert reference_size(question, "ideal_body_weight_devine") == pytest.approx(50 + 2.3 * (176 / 2.54 - 60), rel=1e-6)
    assert reference_size(question, "lean_body_mass_james") == pytest.approx(1.10 * 70 - 128 * (70 / 176) ** 2)
    assert reference_size(question, "weight") == 70


def test_the_james_equation_turns_over_where_print_says(tmp_path):
    """Above a body mass index of 42.97 (men) and 36.15 kg/m2 (women): the derivative of the printed equation."""
    edge = {"male": 42.97, "female": 36.15}
    rows = [f"{sex},50,{(bmi + shift) * 1.7**2:.4f},170" for sex, bmi in edge.items() for shift in (-0.1, 0.1)]
    question, protocol = asked(
        tmp_path, protocols=DOSES, population=find_cases["cases"]["people"](tmp_path, rows),
        groups={"beyond": 'bmi > 42.97 and sex == "male" or bmi > 36.15 and sex == "female"'})
    measures = ["lean_body_mass_james", "weight", "lean_body_mass_janmahasatian"]
    falls, unfit = look_at(question.study([protocol]), measures)
    assert falls[0].tolist() == [0.5, 1.0] and not falls[1:].any() and unfit == [0, 0, 0]


def test_a_size_that_cannot_dose_everybody_is_left_out_and_said(tmp_path):
    people = ["male,40,70,176"] * 50 + ["female,40,230,150"]  # lean body mass by James: -102 kg
    question, protocol = asked(tmp_path, protocols=DOSES, groups={},
                               population=find_cases["cases"]["people"](tmp_path, people))
    result = search_sizes(with_classes(question), protocol)
    assert result.left_out["lean_body_mass_james"][0] == 1 and "lean_body_mass_james" not in result.measures


def test_ranks_follow_flatness_and_the_worst_class(tmp_path):
    """Clearance is proportional to ideal weight: dosed by it attainment is the same in everybody, and ranks first."""
    clearance = "0.5 * ideal_body_weight_devine / 71.7"
    path = find_cases["find_file"](
        tmp_path, ADULT, count=3000, model=find_cases["one_compartment"](tmp_path, clearance=clearance, omega=0.2),
        protocols={"a": 'rate = "0.6 mg/kg/h"\nuntil = "600 min"'},
        targets=(find_cases["STEADY"].format(range="1 to 2 mg/L"),), until="600 min", every="60 min")
    question, protocol = find_cases["asked_of"](path)
    result = search_sizes(with_classes(question), protocol)
    assert result.measures[0] == "ideal_body_weight_devine" and result.measures[-1] == "weight"
    assert result.flatness[0] < 0.1 < 0.5 < result.flatness[-1]
    shares = result.counts.attained()[0]
    assert result.worst == pytest.approx(shares[np.arange(len(result.measures)), result.worst_group])


def test_an_unknown_size_and_a_missing_adult_are_told_together(tmp_path):
    question, _ = asked(tmp_path, '[find]\nsizes = ["wieght"]')
    with pytest.raises(ProblemsError) as error:
        read_measures(question)
    assert len(error.value.problems) == 2 and 'did you mean "weight"?' in str(error.value)


FILES = {"dose": {"along.csv", "confirm.csv", "along.svg"}, "size": {"sizes.csv", "confirm.csv", "sizes.svg"},
         "table": {"simplicity.csv", "ward_card.csv", "ward_card.txt", "simplicity.svg"},
         "map": {"map.csv", "regions.csv", "map.svg"}}


@pytest.mark.parametrize("name", FILES)
def test_every_search_leaves_its_files_and_says_its_seed(tmp_path, capsys, name):
    doses = {"600 ug/h": 'rate = "600 ug/h"\nuntil = "60 min"'}
    path = find_cases["find_file"](tmp_path, CARD, count=1200, protocols=doses)
    out = tmp_path / "out"
    assert run(["find", name, str(path), "--out", str(out)]) == 0
    said = capsys.readouterr().out
    assert {file.name for file in out.iterdir()} == FILES[name] | {"record.json", "report.html"}
    record = json.loads((out / "record.json").read_text())
    assert str(record["find"]["fresh_seed"]) in said and record["find"]["fresh_seed"] != record["seed"]
    assert max(map(len, said.splitlines())) <= 80 and "not for dosing a person" in said
    report = (out / "report.html").read_text()
    assert "data:image/svg+xml;base64," in report and "<script" not in report and "not for dosing a person" in report
    # the same again gives the same tables to the byte, on other threads too
    assert run(["find", name, str(path), "--out", str(tmp_path / "again"), "--threads", "2", "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["found"]["fresh_seed"] == record["find"]["fresh_seed"]
    for file in FILES[name]:
        assert (out / file).read_bytes() == (tmp_path / "again" / file).read_bytes(), file


def test_the_command_line_says_what_the_study_does_not(tmp_path, capsys):
    path = find_cases["find_file"](tmp_path, "", count=500)
    line = ["find", "dose", str(path), "--out", str(tmp_path / "out"), "--tables-only", "--protocol", "900 ug/h",
            "--vary", "dose 1: rate", "--over", "300 to 900 ug/h", "--steps", "3", "--wish", "at least 10 % attained"]
    assert run(line) == 0
    table = pd.read_csv(tmp_path / "out" / "along.csv")
    assert {300.0, 600.0, 900.0} <= set(table["value_1"]) and "wish_1" in table
    assert run([*line[:6], "--vary", "dose 1: rate"]) == 2
    assert run(["find", "dose", str(path)]) == 2
    assert "several protocols" in capsys.readouterr().err
