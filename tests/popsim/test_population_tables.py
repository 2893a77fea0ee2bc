"""Who was simulated: counts against the patients themselves, with numpy and pandas as the outside reference."""

import runpy
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pandas as pd
import pytest

from covariates.catalogue import compute
from popsim.cli import run as popsim_run
from popsim.counted import TENTHS, tenths_quantile
from popsim.pictures.album import draw_all

cases = SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("judge_cases.py"))))
ADJUSTED = {"adjusted": 'rate = "6 mg/kg/h"\nuntil = "60 min"', "fixed": 'rate = "600 ug/h"\nuntil = "60 min"'}


@pytest.fixture(scope="module")
def run(tmp_path_factory):
    folder = tmp_path_factory.mktemp("people")
    cases.study(folder, count=9000, protocols=ADJUSTED, in_protocol='by = "adjusted_body_weight"')
    arguments = ["judge", str(folder / "study.toml"), "--out", str(folder / "run"), "--tables-only", "--quiet"]
    assert popsim_run(arguments) == 0
    tables = {name: pd.read_csv(folder / "run" / f"{name}.csv")
              for name in ("people", "attainment_map", "body_size", "patients", "attainment")}
    return SimpleNamespace(**tables)


def test_people_by_group(run):
    age = run.patients["age"]
    members = {"all": age > 0, "under 65": age < 65, "65 and over": age >= 65}
    lean = compute("lean_body_mass_janmahasatian", {name: run.patients[name].to_numpy()
                                                     for name in ("sex", "weight", "height")})
    everyone = run.patients.assign(lean_body_mass_janmahasatian=lean)
    everyone["bmi"] = everyone["weight"] / (everyone["height"] / 100) ** 2
    for row in run.people.itertuples():
        people = everyone[members[row.group]]
        assert row.patients == len(people)
        assert row.female == pytest.approx((people["sex"] == "female").mean(), abs=1e-12)
        for name in ("age", "weight", "height", "bmi", "lean_body_mass_janmahasatian"):
            for quantile, share in (("p05", 0.05), ("p50", 0.5), ("p95", 0.95)):
                exact = np.quantile(people[name], share, method="inverted_cdf")
                assert getattr(row, f"{name}_{quantile}") == pytest.approx(exact, abs=0.0501)


def test_cells_of_the_map_hold_everybody(run):
    for protocol, rows in run.attainment_map.groupby("protocol"):
        assert rows["patients"].sum() == 9000
        attained = (rows["attained"] * rows["patients"]).sum()
        whole = run.attainment[(run.attainment["protocol"] == protocol) & (run.attainment["group"] == "all")].iloc[0]
        assert attained == pytest.approx(whole.attained * 9000)
        assert rows["failed"].sum() == whole.failed
        assert (rows["outside_model"] * rows["patients"]).sum() == pytest.approx(whole.outside_model * 9000)
    for cell in run.attainment_map.itertuples():
        within = run.patients["age"].between(cell.age_from, cell.age_to, inclusive="left") & \
            run.patients["weight"].between(cell.weight_from, cell.weight_to, inclusive="left")
        assert within.sum() == cell.patients
        assert cell.attained_low <= cell.attained <= cell.attained_high


def test_body_size_by_total_weight(run):
    assert set(run.body_size["measure"]) == {"weight", "lean_body_mass_janmahasatian", "ideal_body_weight_devine",
                                             "adjusted_body_weight"}
    assert set(run.body_size.loc[run.body_size["doses"], "measure"]) == {"adjusted_body_weight"}
    attributes = {name: run.patients[name].to_numpy() for name in ("sex", "weight", "height")}
    adjusted = compute("adjusted_body_weight", attributes)
    for row in run.body_size[run.body_size["measure"] == "adjusted_body_weight"].itertuples():
        within = run.patients["weight"].between(row.weight_from, row.weight_to, inclusive="left")
        of = (run.patients["sex"] == row.sex) & within
        assert of.sum() == row.patients
        assert row.p50 == pytest.approx(np.quantile(adjusted[of], 0.5, method="inverted_cdf"), abs=0.0501)


def test_a_list_that_says_little_leaves_little(tmp_path):
    people = cases.people(tmp_path, ["female,30,60", "male,8,25"], header="sex,age,weight")
    study = cases.study(tmp_path, population=people, model=cases.sheet(tmp_path), groups={},
                        variability="between_subject = false",
                        targets=('quantity = "plasma"\nrange = "1 to 2 mg/L"\nduring = "10 min"',),
                        protocols={"card": 'amount = "10 mg"'})
    _, tables = cases.judged(study)
    row = tables["people"].iloc[0]
    assert (row.patients, row.female, row.age_p50, row.weight_p95) == (2, 0.5, 8.0, 60.0)
    assert np.isnan(row.height_p50) and np.isnan(row.bmi_p50) and np.isnan(row.lean_body_mass_janmahasatian_p50)
    assert set(tables["body_size"]["measure"]) == {"weight"}
    assert tables["attainment_map"]["patients"].tolist() == [1, 1]
    assert tables["attainment_map"]["outside_model"].isna().all()  # the sheet gives no ranges


def test_lean_mass_counts_adults_only(tmp_path):
    people = cases.people(tmp_path, ["female,30,60,165", "male,8,25,125"])
    study = cases.study(tmp_path, population=people, model=cases.sheet(tmp_path),
                        groups={"children": "age < 18"}, variability="between_subject = false",
                        targets=('quantity = "plasma"\nrange = "1 to 2 mg/L"\nduring = "10 min"',),
                        protocols={"card": 'amount = "10 mg"'})
    _, tables = cases.judged(study)
    every, children = tables["people"].itertuples()
    assert every.lean_body_mass_janmahasatian_p05 == every.lean_body_mass_janmahasatian_p95 > 30
    assert np.isnan(children.lean_body_mass_janmahasatian_p50) and children.weight_p50 == 25


def test_what_lies_beyond_the_counts_is_no_number():
    counts = np.zeros(TENTHS + 3, dtype=np.int64)
    assert np.isnan(tenths_quantile(counts, 0.5))
    counts[[0, 1 + 705, TENTHS + 2]] = 1
    assert [tenths_quantile(counts, share) for share in (0.3, 0.5, 0.9)] == [-np.inf, 70.5, np.inf]


def test_people_drawn_again_and_again_give_no_intervals_by_cell_or_moment(tmp_path):
    population = cases.people(tmp_path, ["female,30,60,165", "male,70,85,175"]) + "\ncount = 600"
    study = cases.study(tmp_path, population=population, protocols=ADJUSTED, groups={})
    findings, tables = cases.judged(study)
    cells = tables["attainment_map"]
    assert cells["patients"].sum() == 2 * 600 and cells[["attained_low", "attained_high"]].isna().all(axis=None)
    run = cases.finished(study, findings, tables)
    assert run.resampled
    pictures = draw_all(run, tmp_path)
    over_time = next(one for one in pictures if one.file_name == "attainment_over_time.svg")
    assert "No interval bands: people of a list drawn again and again" in over_time.caption
