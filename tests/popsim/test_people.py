"""popsim patients: the patients that a study would judge, written and summarised."""

import runpy
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pandas as pd
import pytest

from covariates.catalogue import compute
from popsim.cli import run
from popsim.groups import members
from popsim.lookup import Lookup
from popsim.output import PatientRows
from popsim.patients.draw import blocks
from popsim.people import MEASURES, SHARES, People
from popsim.run import simulate

cases = SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("judge_cases.py"))))


@pytest.fixture
def study(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    return cases.study(tmp_path, 9000)


def test_they_are_the_patients_that_judge_writes(study, tmp_path, capsys):
    assert run(["patients", "study.toml", "--out", "people.csv"]) == 0
    (tmp_path / "judged").mkdir()
    sink = PatientRows(study, tmp_path / "judged", "csv", True, False)
    simulate(study, 1, False, sink)
    sink.close()
    assert (tmp_path / "people.csv").read_bytes() == (tmp_path / "judged" / "patients.csv").read_bytes()
    svg = (tmp_path / "people.svg").read_text(encoding="utf-8")
    assert "popsim" in svg and "<title" in svg
    out = capsys.readouterr().out
    assert max(map(len, out.splitlines())) <= 80
    assert "all: 9,000 patients" in out and "65 and over" in out and "100 % of the adults" in out.replace("99.9", "100")


def test_quantiles_are_those_of_the_people(study):
    """numpy's quantiles of the values themselves: within the four digits that are counted."""
    people, parts = People(study), []
    for patients in blocks(study.population, study.seed):
        inside = members(study.groups, Lookup(patients.attributes), len(patients))
        people.add(patients, inside)
        parts.append((patients.attributes, inside))
    everyone = {name: np.concatenate([part[name] for part, _ in parts]) for name in parts[0][0]}
    inside = np.concatenate([inside for _, inside in parts])
    assert people.shown() == list(MEASURES)
    for measure in MEASURES:
        values = compute(measure.covariate, everyone)
        for group in range(3):
            wanted = np.quantile(values[inside[:, group]], SHARES, method="inverted_cdf")
            assert people.quantiles(measure, group) == pytest.approx(wanted, rel=6e-4)


def test_adult_equations_are_not_used_in_children(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    rows = ["female,0.1,4,54,0.4", "male,3,15,96,0.4", "male,30,80,180,1.0"]
    cases.study(
        tmp_path,
        population=cases.people(tmp_path, rows, "sex,age,weight,height,serum_creatinine"),
        groups={},
        model="propofol_marsh_1991",
        variability="between_subject = false",
        targets=('quantity = "plasma"\nrange = "2 to 4 ug/mL"\nduring = "5 min to 50 min"\nattained_when = "always"',),
    )
    assert run(["patients", "study.toml", "--out", "them.csv", "--no-picture"]) == 0
    lines = [line for line in capsys.readouterr().out.splitlines() if "lean mass (kg)" in line]
    adult = {"sex": np.array(["male"]), "weight": 80.0, "height": 180.0}
    only = f"{compute('lean_body_mass_janmahasatian', adult)[0]:.3g}"
    assert lines[0].split()[-5:] == [only] * 5
    assert not (tmp_path / "them.svg").exists()
    assert run(["patients", "study.toml", "--out", "people.csv", "--overwrite"]) == 2  # never over the list itself
    assert "the study's own list" in capsys.readouterr().err


def test_parquet(study, tmp_path):
    pytest.importorskip("pyarrow")
    assert run(["patients", "study.toml", "--out", "people.parquet", "--no-picture", "--quiet"]) == 0
    assert len(pd.read_parquet(tmp_path / "people.parquet")) == 9000


@pytest.mark.parametrize(
    "arguments, said",
    [
        (["--out", "people.txt"], "ends in .csv or .parquet"),
        (["--out", "none/people.csv"], "no such folder"),
        (["--out", "study.csv"], "there already"),
    ],
)
def test_what_the_user_can_mend(study, tmp_path, capsys, arguments, said):
    (tmp_path / "study.csv").write_text("mine")
    assert run(["patients", "study.toml", *arguments]) == 2
    assert said in capsys.readouterr().err
    assert (tmp_path / "study.csv").read_text() == "mine"
    assert not list(tmp_path.glob(".*unfinished*"))
