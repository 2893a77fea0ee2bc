"""Every number on the terminal, in the tables, as JSON and in the report is the same number."""

import json
import math
import re
import runpy
from html import unescape
from pathlib import Path

import pandas as pd
import pytest

from popsim.cli import run as popsim_run
from popsim.errors import DONE
from popsim.words import percent, points

CONFIG = Path(__file__).parents[2] / "configs" / "propofol_body_size.toml"
Page = runpy.run_path(str(Path(__file__).with_name("test_report.py")))["Page"]


@pytest.fixture(scope="module")
def outputs(tmp_path_factory):
    """Two runs of a shipped study, smaller: the words of the first, the JSON and the report of the second."""
    folder = tmp_path_factory.mktemp("agree")
    (folder / "study.toml").write_text(CONFIG.read_text().replace("count = 10000", "count = 1500"))
    said = {}
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("click.echo", lambda message="", err=False, **_: said.setdefault(err, []).append(str(message)))
        for options in (["--tables-only"], ["--json", "--quiet", "--overwrite"]):
            assert popsim_run(["judge", str(folder / "study.toml"), "--out", str(folder / "run"), *options]) == DONE
    words, as_json = said[False]
    tables = {name: pd.read_csv(folder / "run" / f"{name}.csv", keep_default_na=False, na_values=[""])
              for name in ("attainment", "comparison", "groups", "doses", "people", "quartiles", "robustness",
                            "values")}
    page = Page((folder / "run" / "report.html").read_text())
    return words, json.loads(as_json), tables, page


def test_json_is_the_tables_to_the_last_digit(outputs):
    _, told, tables, _ = outputs
    for name in ("attainment", "comparison", "groups", "doses"):
        assert len(told[name]) == len(tables[name]) > 0
        for row, record in zip(told[name], tables[name].to_dict(orient="records"), strict=True):
            for column, value in record.items():
                empty = isinstance(value, float) and math.isnan(value)
                assert row[column] in (None, "") if empty else row[column] == value, (name, column)


def numbers_of_tables(tables) -> dict[str, set[str]]:
    """Every share and difference as both the terminal and the report write it."""
    rows = tables["attainment"]
    shares = {percent(value) for name in ("attained", "attained_low", "attained_high", "time_below", "time_in_range",
                                          "time_above", "outside_model") for value in rows[name]}
    shares |= {percent(value) for name in ("only_a", "only_b", "attained_a", "attained_b")
               for value in tables["comparison"][name]}
    differences = {points(value) for name in ("difference", "difference_low", "difference_high")
                   for value in tables["comparison"][name]}
    return {"share": shares, "difference": differences}


def further_numbers(tables) -> set[str]:
    """What else the terminal tells: from quartiles.csv, robustness.csv and values.csv."""
    quarters, again, own = (tables[name] for name in ("quartiles", "robustness", "values"))
    told = {points(value) for value in (*quarters["difference"], *again["difference"])}
    told |= {f"{value:.3g}" for value in (*quarters["above"], *quarters["up_to"], *own["p50"], *own["p95"])}
    return told | {percent(value) for value in own["never"]} | {"0.7", "1.3"}  # what the variability is multiplied by


def test_the_terminal_holds_them_all_and_no_other(outputs):
    words, _, tables, _ = outputs
    expected = numbers_of_tables(tables)
    results = words[words.index("Answer"):words.index("Note")]
    for number in expected["share"] | expected["difference"]:
        assert number in results
    written = set(re.findall(r"(?<![\w.])[<>+-]?\d+\.\d(?![\d.])", results.replace(")-", ") ")))
    bare = {number.lstrip("+-") for number in expected["share"] | expected["difference"] | further_numbers(tables)}
    assert {number.lstrip("+-") for number in written} <= bare and len(written) > 40


def test_the_report_holds_them_all(outputs):
    _, _, tables, page = outputs
    cells = [cell.strip() for cell in page.cells]
    for row in tables["attainment"].itertuples():
        assert f"{percent(row.attained)} ({percent(row.attained_low)} to {percent(row.attained_high)})" in cells
        assert {percent(row.time_below), percent(row.time_in_range), percent(row.time_above)} <= set(cells)
        assert f"{row.patients:,}" in cells
    for name in ("comparison", "groups"):
        for row in tables[name].itertuples():
            assert f"{points(row.difference)} ({points(row.difference_low)} to {points(row.difference_high)})" in cells
    for row in tables["people"].itertuples():
        assert percent(row.female) in cells
        assert f"{row.age_p50:.1f}{row.age_p05:.1f} to {row.age_p95:.1f}" in cells
        assert f"{row.weight_p50:.1f}{row.weight_p05:.1f} to {row.weight_p95:.1f}" in cells


def test_the_sentences_are_the_same_on_the_terminal_and_in_the_report(outputs):
    words, _, _, page = outputs
    answer = " ".join(words[words.index("Answer"):words.index("Attained, with")].split())
    for sentence in answer.removeprefix("Answer - ").split(" - "):
        assert sentence in unescape(page.text)
