"""The record of a run."""

from __future__ import annotations

import hashlib
import json
import runpy
from pathlib import Path
from types import SimpleNamespace

import pytest

from popsim.provenance import plain, record_of
from popsim.tables import notes_of

cases = SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("judge_cases.py"))))


@pytest.fixture(scope="module")
def run(tmp_path_factory):
    folder = tmp_path_factory.mktemp("record")
    asked = cases.study(folder, count=200, in_protocol='strength = "50 ug/mL"')
    findings, tables = cases.judged(asked, threads=2)
    notes = notes_of(findings, tables)
    return SimpleNamespace(
        folder=folder,
        study=asked,
        findings=findings,
        notes=notes,
        record=record_of(findings, "popsim judge study.toml", notes),
    )


def test_it_is_json_and_holds_no_place_of_this_machine(run):
    text = json.dumps(run.record, allow_nan=False)
    assert str(run.folder) not in text and str(Path.home()) not in text


def test_digests_are_those_of_the_files(run):
    assert run.record["study_digest_sha256"] == hashlib.sha256((run.folder / "study.toml").read_bytes()).hexdigest()
    import covariates

    sheet = Path(covariates.__file__).parent / "sheets" / "remifentanil_minto_1997.toml"
    assert run.record["models"][0]["digest_sha256"] == hashlib.sha256(sheet.read_bytes()).hexdigest()


def test_it_says_what_was_asked_and_who_was_seen(run):
    record = run.record
    assert record["seed"] == 11 and record["study"]["protocols"][0]["steps"][0]["variants"][0]["rate"] == "600 ug/h"
    assert record["study"]["groups"] == [["under 65", "age < 65"], ["65 and over", "age >= 65"]]
    counts = record["counts"]
    assert counts["patients"] == 200 <= counts["candidates_eligible"] <= counts["candidates_seen"]
    assert counts["groups"]["under 65"] + counts["groups"]["65 and over"] == counts["groups"]["all"] == 200
    assert record["notes"] == run.notes and len(record["cautions"]) == 4
    assert {"python", "popsim", "numpy", "numba"} <= record["versions"].keys()


def test_repeated_it_differs_in_timings_alone(run):
    again, tables = cases.judged(run.study)
    other = record_of(again, "popsim judge study.toml", notes_of(again, tables))
    assert {name for name in other if other[name] != run.record[name]} <= {"timings"}


def test_what_has_no_limit_is_said_in_words():
    assert plain({"low": float("-inf"), "high": (float("inf"), 2.0)}) == {
        "low": "unlimited",
        "high": ["unlimited", 2.0],
    }
