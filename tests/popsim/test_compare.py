"""Protocol against protocol, group against group."""

from __future__ import annotations

import runpy
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest

from popsim.compare import against_reference, protocol_pairs
from popsim.estimate import paired_difference, unpaired_difference, verdict

cases = SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("judge_cases.py"))))
GROUPS = {"young": "age < 45", "old": "age >= 65", "women": 'sex == "female"', "nobody": "age > 500"}
THREE = {**cases.REMIFENTANIL, "750 ug/h": 'rate = "750 ug/h"\nuntil = "60 min"'}


@pytest.fixture(scope="module")
def run(tmp_path_factory):
    asked = cases.study(
        tmp_path_factory.mktemp("compare"), count=600, groups=GROUPS, protocols=THREE, compare='matters = "5 %"'
    )
    findings, tables = cases.judged(asked)
    return SimpleNamespace(study=asked, tally=findings.tally, tables=tables)


def test_pairs_agree_with_attainment(run):
    attained = run.tables["attainment"].set_index(["protocol", "group"])["attained"]
    pairs = run.tables["comparison"]
    assert len(pairs) == 3 * 5
    for row in pairs[pairs["group"] != "nobody"].itertuples():
        n = row.patients
        assert row.attained_a == attained[row.protocol_a, row.group]
        assert row.attained_b == attained[row.protocol_b, row.group]
        four = [round(share * n) for share in (row.both, row.only_a, row.only_b, row.neither)]
        assert sum(four) == n
        assert (row.difference, row.difference_low, row.difference_high) == paired_difference(*four)
        assert row.attained_a == pytest.approx(row.only_a + row.both, abs=1e-12)
        assert row.difference == pytest.approx(row.attained_b - row.attained_a, abs=1e-12)
        assert row.verdict == verdict(row.difference_low, row.difference_high, 0.05)
        if row.verdict == "better":
            assert row.better == (row.protocol_b if row.difference > 0 else row.protocol_a)
        else:
            assert row.better == ""
    assert "better" in set(pairs["verdict"])


def test_an_empty_group_has_no_numbers_and_no_verdict(run):
    rows = [row for row in protocol_pairs(run.study, run.tally) if row["group"] == "nobody"]
    assert all(
        row["patients"] == 0 and np.isnan(row["difference"]) and np.isnan(row["both"]) and row["verdict"] == ""
        for row in rows
    )


def test_groups_that_share_patients_are_refused(run):
    rows = {(row["protocol"], row["group"]): row for row in against_reference(run.study, run.tally)}
    assert {group for _, group in rows} == {"old", "women", "nobody"}  # neither "all" nor the reference itself
    women = rows["600 ug/h", "women"]
    assert np.isnan([women["difference"], women["difference_low"], women["difference_high"]]).all()
    shared = int(run.tally.overlap[run.study.group_names.index("young"), run.study.group_names.index("women")])
    assert shared > 0 and women["note"] == f"{shared} patients are in both groups: no difference is given"
    old = rows["600 ug/h", "old"]
    counts = [
        round(old["reference_attained"] * old["reference_patients"]),
        old["reference_patients"],
        round(old["attained"] * old["patients"]),
        old["patients"],
    ]
    assert (old["difference"], old["difference_low"], old["difference_high"]) == unpaired_difference(*counts)
    assert old["note"] == "" and old["reference"] == "young"
    assert np.isnan(rows["600 ug/h", "nobody"]["difference"])


def test_a_group_that_failed_gets_no_verdict(tmp_path):
    """Half of this list has a clearance below zero."""
    sheet = cases.sheet(tmp_path, clearance="0.5 if age < 50 else -1")
    rows = [f"female,{age},60,165" for age in (30, 40, 60, 70)]
    asked = cases.study(
        tmp_path,
        model=sheet,
        population=cases.people(tmp_path, rows),
        groups={"young": "age < 50"},
        variability="between_subject = false",
        compare='matters = "5 %"',
        protocols={"a": 'amount = "100 mg"', "b": 'amount = "1 mg"'},
        targets=('quantity = "plasma"\nrange = ">= 5 mg/L"\nduring = "0 min"',),
    )
    _, tables = cases.judged(asked)
    pairs = tables["comparison"].set_index("group")
    assert pairs.loc["all", ["patients", "failed", "attained_a", "neither", "verdict", "better"]].tolist() == [
        4,
        2,
        0.5,
        0.5,
        "",
        "",
    ]
    assert pairs.loc["young", "failed"] == 0
