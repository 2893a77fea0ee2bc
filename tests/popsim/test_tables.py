"""The tables of a run: columns, shares, denominators, notes."""

from __future__ import annotations

import runpy
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest

from popsim.tables import TABLES, notes_of

cases = SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("judge_cases.py"))))
GROUPS = {"young": "age < 65", "old": "age >= 65", "nobody": "age > 500"}
PLASMA = (
    'name = "peak"\nquantity = "plasma"\nrange = "<= 8 ng/mL"\nduring = "0 min to 60 min"\nattained_when = "always"\n'
)
COLUMNS = {  # the contract: these come first, in this order
    "attainment": "model, protocol, group, target, patients, failed, attained, attained_low, attained_high, "
    "time_below, "
    "time_in_range, time_above, ever_far_below, ever_far_above, outside_model",
    "over_time": "model, protocol, group, target, time_min, below, in_range, above, p05, p25, p50, p75, p95",
    "comparison": "model, group, target, protocol_a, protocol_b, patients, failed, attained_a, attained_b, difference, "
    "difference_low, difference_high, only_a, only_b, both, neither, verdict",
    "groups": "model, protocol, target, group",
    "doses": "protocol, group",
    "people": "group, patients, female, age_p05",
    "attainment_map": "model, protocol, target, age_from, age_to, weight_from, weight_to, patients, failed, attained, "
    "attained_low, attained_high, outside_model",
    "body_size": "measure, sex, weight_from, weight_to, patients, p05, p25, p50, p75, p95, doses",
}
LIST = ["female,30,60,165", "male,40,80,180", "female,60,70,160", "male,70,90,175"]


@pytest.fixture(scope="module")
def run(tmp_path_factory):
    asked = cases.study(
        tmp_path_factory.mktemp("tables"),
        count=600,
        groups=GROUPS,
        every="7 min",
        until="61 min",
        targets=('name = "site"\n' + cases.EFFECT_SITE, PLASMA),
        in_protocol='strength = "50 ug/mL"\nvial = "20 mL"',
    )
    findings, tables = cases.judged(asked)
    return SimpleNamespace(study=asked, findings=findings, tables=tables)


def of_list(folder, model, protocols, target, **more):
    asked = cases.study(
        folder,
        model=model,
        population=cases.people(folder, LIST),
        protocols=protocols,
        targets=(target,),
        variability="between_subject = false",
        **more,
    )
    findings, tables = cases.judged(asked)
    return findings, tables, notes_of(findings, tables)


@pytest.mark.parametrize("name", TABLES)
def test_columns_stand_as_promised(run, name):
    wanted = COLUMNS[name].split(", ")
    assert list(run.tables[name].columns)[: len(wanted)] == wanted


def test_one_row_per(run):
    t = run.tables
    expected = {
        "attainment": 2 * 4 * 2,
        "over_time": 2 * 4 * 2 * 10,
        "comparison": 4 * 2,
        "groups": 2 * 2 * 2,
        "doses": 2 * 4,
        "people": 4,
    }
    assert {name: len(t[name]) for name in expected} == expected
    for name, keys in {
        "attainment": ["model", "protocol", "group", "target"],
        "over_time": ["model", "protocol", "group", "target", "time_min"],
        "attainment_map": ["model", "protocol", "target", "age_from", "weight_from"],
        "body_size": ["measure", "sex", "weight_from"],
    }.items():
        assert not t[name].duplicated(keys).any()


def test_shares_add_up_to_one(run):
    t = run.tables["attainment"]
    some = t[t["patients"] > 0]
    assert np.abs(some["time_below"] + some["time_in_range"] + some["time_above"] - 1).max() < 1e-15
    assert ((some["attained_low"] <= some["attained"]) & (some["attained"] <= some["attained_high"])).all()
    over = run.tables["over_time"]
    over = over[over["group"] != "nobody"]
    assert np.abs(over["below"] + over["in_range"] + over["above"] - 1).max() < 1e-15
    assert (np.diff(over[["p05", "p25", "p50", "p75", "p95"]].to_numpy(), axis=1) >= 0).all()


def test_groups_that_part_everyone_add_up(run):
    t = run.tables["attainment"].set_index(["protocol", "target", "group"])
    for protocol in cases.REMIFENTANIL:
        for target in ("site", "peak"):
            for column in ("attained", "failed", "outside_model", "ever_far_above"):
                total = sum(
                    t.loc[(protocol, target, group), column]
                    * (t.loc[(protocol, target, group), "patients"] if column != "failed" else 1)
                    for group in ("young", "old")
                )
                whole = t.loc[(protocol, target, "all"), column] * (600 if column != "failed" else 1)
                assert total == pytest.approx(whole, abs=1e-9)


def test_an_empty_group_is_empty_not_zero(run):
    t = run.tables["attainment"]
    row = t[t["group"] == "nobody"].iloc[0]
    assert row["patients"] == 0 and row["note"] == "no patients in this group"
    assert row[["attained", "attained_low", "time_in_range", "outside_model"]].isna().all()
    over = run.tables["over_time"]
    assert over[over["group"] == "nobody"][["below", "in_range", "above", "p50"]].isna().all(axis=None)


def test_small_groups_are_flagged(run):
    t = run.tables["attainment"]
    few = t[t["group"] == "old"]
    assert (few["patients"] < 400).all() and (few["note"] == "under 400 patients").all()
    assert (t[t["group"] == "all"]["note"] == "").all()
    assert any(
        note.startswith("Fewer than 400 patients in: ") and "old" in note and "nobody" not in note
        for note in notes_of(run.findings, run.tables)
    )


def test_the_grid_is_multiplied_and_ends_at_until(run):
    times = run.tables["over_time"]["time_min"].to_numpy()[:10]
    assert times.tolist() == [0, 7, 14, 21, 28, 35, 42, 49, 56, 61]


def test_everyone_attaining_is_exactly_one(tmp_path):
    """49 x (1/49) is not 1 in floats: shares are quotients."""
    rows = ["female,30,60,165"] * 49
    sheet = cases.sheet(tmp_path)
    asked = cases.study(
        tmp_path,
        model=sheet,
        population=cases.people(tmp_path, rows),
        groups={},
        protocols={"a": 'amount = "100 mg"', "b": 'amount = "100 mg"'},
        targets=('quantity = "plasma"\nrange = "1 to 20 mg/L"\nduring = "0 min to 5 min"\nattained_when = "always"',),
        variability="between_subject = false",
    )
    _, tables = cases.judged(asked)
    row = tables["attainment"].iloc[0]
    assert row[["attained", "attained_high", "time_in_range", "time_below", "time_above"]].tolist() == [1, 1, 1, 0, 0]
    pair = tables["comparison"].iloc[0]
    assert pair[["attained_a", "attained_b", "both", "neither", "difference"]].tolist() == [1, 1, 1, 0, 0]
    assert pair["difference_low"] < 0 < pair["difference_high"]


TROUGH = 'quantity = "plasma"\nrange = ">= 5 mg/L"\nduring = "0 min to 10 min"\nattained_when = "at any time"'


def test_patients_who_fail_stay_in_the_denominator(tmp_path):
    """Two of four have a clearance below zero: 2 of 4 attain, and the mean times are those of the two."""
    sheet = cases.sheet(tmp_path, clearance="0.5 if age < 50 else -1")
    _, tables, notes = of_list(tmp_path, sheet, {"a": 'amount = "100 mg"'}, TROUGH)
    row = tables["attainment"].set_index("group").loc["all"]
    assert row[["patients", "failed", "attained", "time_in_range"]].tolist() == [4, 2, 0.5, 1.0]
    assert row["note"] == "2 patients failed or went without a dose, over 1 %: no headline"
    assert any(
        "2 patients could not be simulated or judged (a volume or elimination clearance" in note for note in notes
    )


def test_patients_without_a_dose_stay_in_the_denominator_too(tmp_path):
    _, tables, notes = of_list(
        tmp_path,
        cases.sheet(tmp_path),
        {"a": 'amount = "100 mg"\nwhere = "age < 50"'},
        TROUGH,
        in_protocol='no_dose = "allowed"',
    )
    row = tables["attainment"].set_index("group").loc["all"]
    assert row[["patients", "failed", "attained", "time_in_range", "time_below"]].tolist() == [4, 2, 0.5, 1.0, 0.0]
    over = tables["over_time"].query("group == 'all'").iloc[0]
    assert over[["below", "in_range", "above"]].tolist() == [0.0, 1.0, 0.0]  # the same people as in the mean times
    assert '"a": 2 patients without any dose.' in notes


def test_a_window_that_cannot_be_is_counted_and_said(tmp_path):
    """A window that ends before it starts in one of four."""
    rows = [f"{row},{end}" for row, end in zip(LIST, (10, 10, 10, 2), strict=True)]
    population = cases.people(tmp_path, rows, "sex,age,weight,height,closure_min")
    asked = cases.study(
        tmp_path,
        model=cases.sheet(tmp_path),
        population=population,
        groups={},
        protocols={"a": 'amount = "100 mg"'},
        variability="between_subject = false",
        targets=(TROUGH.replace('"0 min to 10 min"', '"5 min to closure_min"'),),
    )
    findings, tables = cases.judged(asked)
    assert tables["attainment"].iloc[0][["patients", "failed", "attained"]].tolist() == [4, 1, 0.75]
    assert any("1 patient could not be simulated or judged (a window" in note for note in notes_of(findings, tables))


def test_doses_by_hand(tmp_path):
    """2 mg/kg of 60, 80, 70, 90 kg, at most 165 mg: 120, 160, 140, 165 mg. At 10 mg/mL: two vials of 10 mL each."""
    _, tables, _ = of_list(
        tmp_path,
        cases.sheet(tmp_path),
        {"a": 'amount = "2 mg/kg"\nat_most = "165 mg"'},
        TROUGH,
        in_protocol='strength = "10 mg/mL"\nvial = "10 mL"',
    )
    row = tables["doses"].set_index("group").loc["all"]
    assert row[["total_mg_p05", "total_mg_p50", "total_mg_p95"]].tolist() == [120, 140, 165]
    assert row[["mg_per_kg_total_p05", "mg_per_kg_total_p50"]].tolist() == [1.833, 2.0]
    assert row[["share_capped", "share_floored", "share_rounded"]].tolist() == [0.25, 0, 0]
    assert row[["volume_ml_p50", "vials_p50", "vials_p95"]].tolist() == [14, 2, 2]
    assert row["waste_ml_mean"] == pytest.approx((8 + 4 + 6 + 3.5) / 4, rel=1e-12)


def test_doses_of_a_rate_for_everyone(run):
    row = run.tables["doses"].iloc[0]
    assert row["total_mg_p05"] == row["total_mg_p95"] == 0.6
    assert (row["volume_ml_p50"], row["vials_p50"]) == (pytest.approx(12), 1)
    assert row["waste_ml_mean"] == pytest.approx(8)


def test_nobody_can_be_said_to_be_outside_of_people_who_are_not_known(tmp_path):
    _, tables, _ = of_list(tmp_path, "propofol_marsh_1991", {"a": 'amount = "1 mg/kg"'}, TROUGH)
    assert tables["attainment"]["outside_model"].isna().all()


def test_notes_tell_of_the_spread_that_is_used(tmp_path):
    """Of a borrowed spread the lender's doubts, not those of the sheet whose own spread is not used."""
    lender = "propofol_eleveld_2018"
    for variability, wanted in ((f'from = "{lender}"', [lender]), ("", ["propofol_schnider_1998"])):
        asked = cases.study(
            tmp_path, count=20, model="propofol_schnider_1998", variability=variability, targets=(PLASMA,)
        )
        findings, tables = cases.judged(asked)
        notes = notes_of(findings, tables)
        assert [note.split(":")[0] for note in notes if note.startswith("propofol_")] == wanted
