"""The three files of a score: what they mean, and what is said of every row that does not fit."""

import runpy
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest

from covariates.problems import ProblemsError
from popsim.scoring.files import read_measured

cases = SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("score_cases.py"))))
PEOPLE = ["a,male,40,80,180", "b,female,70,60,160"]
GIVEN = ["a,0 min,100 mg,,,", "a,10 min,,60 mg/h,,40 min", "b,0 min,2 mg/kg,,30 s,"]
MEASURED = ["a,5 min,plasma,3 ug/mL", "a,1 h,plasma,500 ng/mL", "b,5 min,unbound_plasma,40 ug/L"]


def test_rows_become_milligrams_litres_minutes(tmp_path):
    read = read_measured(*cases.files(tmp_path, PEOPLE, GIVEN, MEASURED))
    assert read.labels.tolist() == ["a", "b"] and read.patient.tolist() == [0, 0, 1]
    np.testing.assert_allclose(read.time_min, [5, 60, 5])
    np.testing.assert_allclose(read.value, [3.0, 0.5, 0.04])
    assert read.quantity.tolist() == ["plasma", "plasma", "unbound_plasma"] and read.unit == "ug/mL"
    first, second = read.timelines
    np.testing.assert_allclose(first.time_min, [[0, 10, 40]])
    np.testing.assert_allclose(first.bolus_mg, [[100, 0, 0]])
    np.testing.assert_allclose(first.rate_mg_per_min, [[0, 1, 0]])
    np.testing.assert_allclose(second.rate_mg_per_min, [[240, 0]])  # 2 mg/kg x 60 kg in half a minute


def test_people_without_measurements_are_left_out(tmp_path):
    read = read_measured(*cases.files(tmp_path, PEOPLE, GIVEN, MEASURED[2:]))
    assert read.labels.tolist() == ["b"] and read.attributes["age"].tolist() == [70.0]


def test_repeats_are_given_as_often_as_said(tmp_path):
    given = ["a,0 h,1 g,1 h,12 h,3"]
    written = cases.files(tmp_path, PEOPLE, given, MEASURED[:1], given_header="patient,at,amount,over,every,times")
    read = read_measured(*written)
    np.testing.assert_allclose(read.timelines[0].time_min, [[0, 60, 720, 780, 1440, 1500]])


BAD = {
    "unknown patient": ("given", "aa,0 min,1 mg,,,", 'line 5, column patient', '"aa"'),
    "no unit": ("given", "a,0 min,100,,,", "line 5, column amount", "no unit"),
    "amount and no time": ("given", "a,,100 mg,,,", "line 5, column at", "nothing"),
    "a rate without an end": ("given", "a,0 min,,5 mg/h,,", "line 5, column rate", "without an end"),
    "a volume for a dose": ("given", "a,0 min,5 mL,,,", "line 5, column amount", "volume"),
    "nothing given": ("given", "a,0 min,,,,", "line 5, column amount", "neither"),
    "an end before the start": ("given", "a,9 min,,5 mg/h,,5 min", "line 5, column until", "5 min"),
    "a negative amount": ("given", "a,0 min,-5 mg,,,", "line 5, column amount", "negative"),
    "too few cells": ("given", "a,0 min,5 mg", "line 5", "3 cells"),
    "patient of nobody": ("measured", "c,5 min,plasma,3 ug/mL", "line 5, column patient", '"c"'),
    "no unit of a level": ("measured", "a,7 min,plasma,3", "line 5, column value", "no unit"),
    "an amount for a level": ("measured", "a,7 min,plasma,3 mg", "line 5, column value", "amount"),
    "below the limit": ("measured", "a,7 min,plasma,<0.1 ng/mL", "line 5, column value", "leave values below"),
    "an effect": ("measured", "a,7 min,effect,40 ug/mL", "line 5, column quantity", "effect"),
    "nothing measured": ("measured", "a,7 min,plasma,", "line 5, column value", '""'),
    "the same twice": ("measured", "a,5 min,plasma,4 ug/mL", "line 5", "line 2"),
    "no time": ("measured", "a,,plasma,4 ug/mL", "line 5, column at", '""'),
}  # fmt: skip


@pytest.mark.parametrize("case", BAD)
def test_each_bad_row_is_named(tmp_path, case):
    which, row, where, word = BAD[case]
    rows = {"given": list(GIVEN), "measured": list(MEASURED)}
    rows[which].append(row)
    with pytest.raises(ProblemsError) as found:
        read_measured(*cases.files(tmp_path, PEOPLE, rows["given"], rows["measured"]))
    problem, = found.value.problems
    assert problem.where.startswith(f"{which}.csv: {where}")
    assert word in str(problem)


def test_all_problems_at_once(tmp_path):
    given, measured = [*GIVEN, "a,0 min,1,,,", "x,0 min,1 mg,,,"], [*MEASURED, "a,1 min,plasma,x"]
    written = cases.files(tmp_path, PEOPLE, given, measured)
    with pytest.raises(ProblemsError) as found:
        read_measured(*written)
    assert len(found.value.problems) == 3


def test_a_measured_patient_without_a_dose(tmp_path):
    with pytest.raises(ProblemsError, match='no dose of patient "b"'):
        read_measured(*cases.files(tmp_path, PEOPLE, GIVEN[:2], MEASURED))


def test_columns_are_the_words_of_a_dose_step(tmp_path):
    written = cases.files(tmp_path, PEOPLE, ["a,0 min,1 mg"], MEASURED[:1], given_header="patient,at,amont")
    with pytest.raises(ProblemsError, match='did you mean "amount"'):
        read_measured(*written)


def test_people_need_labels(tmp_path):
    written = cases.files(tmp_path, ["male,40,80,180"], GIVEN, MEASURED, header="sex,age,weight,height")
    with pytest.raises(ProblemsError, match='no column "patient"'):
        read_measured(*written)
