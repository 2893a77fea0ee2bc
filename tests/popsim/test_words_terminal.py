"""Numbers and findings in words; the summary on the terminal."""

from __future__ import annotations

import io
import json
import re
import runpy
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from popsim.cli import run as popsim_run
from popsim.holds import further, numbers
from popsim.progress import bar
from popsim.tables import notes_of
from popsim.terminal import WIDTH, as_json_text, summary
from popsim.words import clock, finding, percent, points, size_words

cases = SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("judge_cases.py"))))
LONG = "a very long name of a group or protocol that a department may well have written so"[:80]
UNBROKEN = "x" * 80


@pytest.mark.parametrize(
    ("share", "said"),
    [
        (0.8413, "84.1"),
        (0.0, "0.0"),
        (1.0, "100.0"),
        (0.0004, "<0.1"),
        (0.0005, "0.1"),
        (1e-12, "<0.1"),
        (0.9994, "99.9"),
        (0.9995, ">99.9"),
        (0.99951, ">99.9"),
        (1 - 1e-12, ">99.9"),
        (float("nan"), "-"),
    ],
)
def test_percent(share, said):
    assert percent(share) == said


@given(st.integers(1, 10**8).flatmap(lambda n: st.tuples(st.integers(0, n), st.just(n))))
def test_none_and_all_are_said_of_none_and_all_alone(case):
    some, n = case
    assert (percent(some / n) == "0.0") == (some == 0)
    assert (percent(some / n) == "100.0") == (some == n)


@pytest.mark.parametrize(
    ("difference", "said"),
    [
        (-0.271, "-27.1"),
        (0.0449, "+4.5"),
        (0.0, "0.0"),
        (-0.0004, "0.0"),
        (-0.0, "0.0"),
        (1.0, "+100.0"),
        (float("nan"), "-"),
    ],
)
def test_points(difference, said):
    assert points(difference) == said


@pytest.mark.parametrize(
    ("minutes", "said"), [(0.0, "0 min"), (0.5, "30 s"), (90, "90 min"), (1440, "24 h"), (250, "250 min")]
)
def test_clock(minutes, said):
    assert clock(minutes) == said


@pytest.mark.parametrize(
    ("name", "said"),
    [
        ("weight", "total body weight"),
        ("adjusted_body_weight", "adjusted body weight"),
        ("lean_body_mass_james", "lean body mass (James)"),
        ("fat_free_mass_al_sallami", "fat free mass (Al-Sallami)"),
        ("body_surface_area_du_bois", "body surface area (Du Bois)"),
    ],
)
def test_body_sizes_in_words(name, said):
    assert size_words(name) == said


def pair(low, high, said="", a="A", b="B", share_a=0.5, failed=0, patients=1000):
    middle = (low + high) / 2
    return {
        "model": "m",
        "group": "all",
        "target": "t",
        "protocol_a": a,
        "protocol_b": b,
        "patients": patients,
        "failed": failed,
        "attained_a": share_a,
        "attained_b": share_a + middle,
        "difference": middle,
        "difference_low": low,
        "difference_high": high,
        "verdict": said,
    }


def found(pairs, attained, failed=0, patients=1000):
    names = list(attained)
    rows = pd.DataFrame(
        {
            "model": "m",
            "group": "all",
            "target": "t",
            "protocol": names,
            "patients": patients,
            "failed": failed,
            "attained": list(attained.values()),
            "attained_low": 0.1,
            "attained_high": 0.9,
        }
    )
    columns = list(pair(0, 0))
    return finding(pd.DataFrame(pairs, columns=columns), rows, "all", "t", "m")


@pytest.mark.parametrize(
    ("low", "high", "verdict", "said"),
    [
        (0.05, 0.15, "", "+10.0 points (+5.0 to +15.0)"),
        (-0.15, -0.05, "better", "-10.0 points (-15.0 to -5.0)"),
        (-0.05, 0.15, "", "no clear difference (-5.0 to +15.0 points)"),
        (-0.05, 0.15, "not clear", "no clear difference (-5.0 to +15.0 points)"),
        (-0.01, 0.03, "too small to matter", "+1.0 points (-1.0 to +3.0), too small to matter"),
        (0.01, 0.09, "not clear", "+5.0 points (+1.0 to +9.0), not clear whether it matters"),
    ],
)
def test_findings_of_two(low, high, verdict, said):
    row = pair(low, high, verdict)
    sentence = found([row], {"A": 0.5, "B": row["attained_b"]})
    assert sentence.startswith('Among all patients, 50.0 % attain the target with "A", ')
    assert sentence.endswith(f": {said}.")


def test_findings_of_three_compare_the_best_with_the_next():
    """B 60 %, C 55 %, A 50 %: the row of C and B is written C first, so B minus C turns its sign."""
    pairs = [
        pair(0.05, 0.15, a="A", b="B"),
        pair(0.02, 0.08, a="A", b="C"),
        pair(-0.07, -0.03, a="B", b="C", share_a=0.6),
    ]
    assert found(pairs, {"A": 0.5, "B": 0.6, "C": 0.55}) == (
        'Among all patients, "B" has the most patients on target, 60.0 %, before "C", 55.0 %: '
        "+5.0 points (+3.0 to +7.0)."
    )
    pairs[2] = pair(-0.12, 0.02, a="B", b="C", share_a=0.6)
    assert found(pairs, {"A": 0.5, "B": 0.6, "C": 0.55}).endswith("no clear difference (-2.0 to +12.0 points).")


def test_findings_of_nobody_and_of_those_who_failed():
    assert found([], {"A": np.nan}, patients=0) == "Among all patients: no patients."
    assert found([pair(np.nan, np.nan, patients=0)] * 3, {"A": np.nan, "B": np.nan, "C": np.nan}, patients=0).endswith(
        "no patients."
    )
    for protocols in ({"A": 0.5}, {"A": 0.5, "B": 0.6}):
        said = found([pair(0.05, 0.15, failed=11)], protocols, failed=11)
        assert "no headline" in said
        assert said.endswith(" and ".join(f'"{name}"' for name in protocols) + ".")
        assert "no headline" not in found([pair(0.05, 0.15, failed=10)], protocols, failed=10)


@pytest.fixture(scope="module")
def run(tmp_path_factory):
    asked = cases.study(
        tmp_path_factory.mktemp("words"),
        count=500,
        compare='matters = "5 %"',
        groups={"old": "age >= 65", "nobody": "age > 500"},
    )
    findings, tables = cases.judged(asked)
    return SimpleNamespace(study=asked, tables=tables, notes=notes_of(findings, tables))


def test_the_summary_holds_the_tables_numbers(run):
    text = summary(run.study, run.tables, run.notes)
    assert text.isascii() and max(map(len, text.splitlines())) <= WIDTH
    for row in run.tables["attainment"].query("patients > 0").itertuples():
        line = f"{percent(row.attained):>5} ({percent(row.attained_low)} to {percent(row.attained_high)})"
        assert (
            line in text
            and f"{percent(row.time_below):>5} {percent(row.time_in_range):>5} {percent(row.time_above):>5}" in text
        )
    for row in run.tables["comparison"].query("patients > 0").itertuples():
        assert f"{points(row.difference):>5} ({points(row.difference_low)} to {points(row.difference_high)})" in text
    assert "first is better" in text  # 600 ug/h, whatever the sign of the difference
    assert "simulation interval" in text and "not for dosing a person" in text and "nan" not in text


def test_groups_outside_the_model_stand_in_lines_of_their_own(tmp_path):
    """Names that hold commas cannot be told apart in a row."""
    asked = cases.study(tmp_path, count=200, groups={"old, obese": "age >= 65 and bmi >= 30", "x" * 80: "age < 40"})
    findings, tables = cases.judged(asked)
    said = summary(asked, tables, notes_of(findings, tables)).split("was built on\n")[1].split("\n\n")[0].splitlines()
    rows = tables["attainment"].drop_duplicates("group")
    assert said[0] == "  remifentanil_minto_1997"
    for line, row in zip(said[1:4], rows.itertuples(), strict=True):
        assert re.fullmatch(rf"    {row.group[:60]}\S* +{percent(row.outside_model)} %", line)
    assert len({len(line) for line in said[1:4]}) == 1


def test_a_group_too_long_for_its_column_gets_a_line_and_protocols_stay_whole(tmp_path):
    protocols = dict(zip(("600 ug/h as on the ward", "900 ug/h as it may"), cases.REMIFENTANIL.values(), strict=True))
    groups = {"under 65, BMI < 30": "age < 65 and bmi < 30"}
    asked = cases.study(tmp_path, count=60, groups=groups, protocols=protocols)
    findings, tables = cases.judged(asked)
    text = summary(asked, tables, notes_of(findings, tables))
    assert "\nunder 65, BMI < 30\n" in text and ".." not in text
    assert all(len(re.findall(rf"{name} +\d", text)) == 2 for name in protocols)


def test_bold_changes_nothing_but_headings(run):
    plain, bold = (summary(run.study, run.tables, run.notes, bold=bold) for bold in (False, True))
    assert bold.replace("\033[1m", "").replace("\033[0m", "") == plain != bold


@pytest.mark.parametrize(
    ("group", "protocols"),
    [
        (LONG, (LONG, LONG[::-1])),
        (UNBROKEN, (UNBROKEN, "y" * 80)),
        ("g", ("a", "b")),
        ("g", ("a", UNBROKEN)),
        (LONG, ("a", "b")),
    ],
)
def test_80_columns_whatever_the_names(tmp_path, group, protocols):
    doses = dict(zip(protocols, cases.REMIFENTANIL.values(), strict=True))
    asked = cases.study(
        tmp_path,
        count=40,
        groups={group: "age >= 65"},
        protocols=doses,
        compare='matters = "5 %"',
        targets=(f'name = "{UNBROKEN}"\n{cases.EFFECT_SITE}', 'quantity = "plasma"\nlow = "1 ug/L"\nduring = "5 min"'),
    )
    findings, tables = cases.judged(asked)
    for bold in (False, True):
        lines = (
            summary(asked, tables, notes_of(findings, tables), bold)
            .replace("\033[1m", "")
            .replace("\033[0m", "")
            .splitlines()
        )
        assert [line for line in lines if len(line) > WIDTH] == []


def test_80_columns_with_a_hundred_million_patients_and_shares_near_the_ends(run):
    tables = {name: table.copy() for name, table in run.tables.items()}
    for name in ("attainment", "comparison"):
        tables[name]["patients"] = 100_000_000
        tables[name]["failed"] = 0
    for column in ("attained", "attained_low", "attained_high"):
        tables["attainment"][column] = 0.99999
    for column in ("difference", "difference_low", "difference_high"):
        tables["comparison"][column] = -1.0
    tables["comparison"]["verdict"] = "too small to matter"
    assert max(map(len, summary(run.study, tables, run.notes).splitlines())) <= WIDTH


@pytest.mark.parametrize(
    ("p50", "p95", "never", "said"),
    [
        (10.8, np.inf, 0.066,
         "reaches the range by 10.8 min in half of the patients, not by the end of the window in 6.6 %"),
        (4.731, 9.66, 0.0, "reaches the range by 4.73 min in half of the patients, by 9.66 min in 95 %"),
        (0.243, 0.315, 0.0, "reaches the range by 14.6 s in half of the patients, by 18.9 s in 95 %"),
        (0.0, 0.0, 0.0, "reaches the range by 0 min in 95 % of the patients"),
        (np.inf, np.inf, 0.7, "reaches the range not by the end of the window in 70.0 %"),
    ],
)
def test_when_the_range_is_reached(run, p50, p95, never, said):
    """Nobody is told "never" of a percentile: who does not reach the range is counted."""
    values = run.tables["values"].head(1).assign(measure="first_reached_min", p50=p50, p95=p95, never=never)
    (line,) = numbers({"values": values}, run.study.models[0].name, run.study.targets[0])
    assert line == f'"{values["protocol"].iloc[0]}": {said}'


def test_a_changed_answer_says_which_protocol_is_better(run):
    a, b = (protocol.name for protocol in run.study.protocols)
    row = {"model": "m", "target": run.study.targets[0].name, "group": "old", "protocol_a": a, "protocol_b": b,
           "asked": "variability x 1.3", "same_answer": "no", "difference": -0.08, "verdict": "better"}
    (line,) = dict(further(run.study, {"robustness": pd.DataFrame([row])}))["Does the answer hold?"]
    assert line == f'variability x 1.3: another answer in 1 of 1 comparisons: "old": -8.0 points ("{a}" is better)'


def test_too_many_failures_leave_no_headline(run):
    tables = {name: table.copy() for name, table in run.tables.items()}
    for name in ("attainment", "comparison"):
        tables[name]["failed"] = tables[name]["patients"]
    tables["comparison"]["verdict"] = ""
    text = summary(run.study, tables, run.notes)
    table = text.split("Attained, with")[1].split("Outside the people")[0]
    assert table.count("no headline") >= 4 * 2 - 2
    for row in tables["comparison"].query("patients > 0").itertuples():
        assert f"({points(row.difference_low)} to" not in text


def test_what_below_and_above_mean_for_an_effect(tmp_path):
    population = cases.SURVEY.format(count=40) + "\n[population.set]\nopioid = true\nvenous_sampling = false"
    asked = cases.study(
        tmp_path,
        model="propofol_eleveld_2018",
        population=population,
        protocols={"a": 'amount = "2 mg/kg"'},
        targets=('quantity = "effect"\nrange = "40 to 60"\nduring = "1 min to 5 min"\nattained_when = "always"',),
    )
    findings, tables = cases.judged(asked)
    assert "below is too deep, above is too light" in summary(asked, tables, notes_of(findings, tables))


def test_json_is_the_tables(run):
    found = json.loads(as_json_text(run.study, run.tables, run.notes))
    assert found["notes"] == run.notes and found["seed"] == 11
    for name in ("attainment", "comparison", "groups", "doses"):
        table = run.tables[name]
        assert len(found[name]) == len(table)
        for row, given_row in zip(found[name], table.to_dict("records"), strict=True):
            for key, value in given_row.items():
                assert row[key] == value or (row[key] is None and pd.isna(value))


def test_empty_groups_and_unknown_people_are_said_in_words(tmp_path):
    asked = cases.study(
        tmp_path,
        count=30,
        model="propofol_marsh_1991",
        variability="between_subject = false",
        groups={"nobody": "age > 500"},
        protocols={"a": 'amount = "1 mg/kg"', "b": 'amount = "2 mg/kg"'},
    )
    findings, tables = cases.judged(asked)
    text = summary(asked, tables, notes_of(findings, tables))
    assert 'In the group "nobody": no patients.' in text
    assert text.count("no patients") >= 4  # the sentence, the rows of both protocols, the difference
    assert "propofol_marsh_1991: not known" in text


class Screen(io.StringIO):
    """A stream that says it is a terminal."""

    def isatty(self) -> bool:
        return True


@pytest.mark.parametrize(("terminal", "no_color", "bold"),
                         [(True, None, True), (True, "1", False), (False, None, False)])
def test_escape_codes_only_on_a_terminal_without_no_color(tmp_path, monkeypatch, terminal, no_color, bold):
    cases.study(tmp_path, count=60)
    monkeypatch.delenv("NO_COLOR", raising=False)
    if no_color:
        monkeypatch.setenv("NO_COLOR", no_color)
    screen = Screen() if terminal else io.StringIO()
    monkeypatch.setattr("sys.stdout", screen)
    arguments = ["judge", str(tmp_path / "study.toml"), "--out", str(tmp_path / "run"), "--tables-only"]
    assert popsim_run(arguments) == 0
    assert ("\033[1m" in screen.getvalue()) == bold
    assert re.sub(r"\033\[[01]m", "", screen.getvalue()).isascii()


def test_a_long_run_shows_the_time_left_on_a_terminal_only(monkeypatch):
    clock = [1000.0]
    monkeypatch.setattr("time.time", lambda: clock[0])
    screen = Screen()
    monkeypatch.setattr("sys.stderr", screen)
    with bar(1000, "simulating") as advance:
        for done in (100, 200, 300):
            clock[0] += 10
            advance(done)
    assert "simulating" in screen.getvalue() and "30%" in screen.getvalue()
    assert "00:01:10" in screen.getvalue()  # 300 in 30 s leave 700 in 70 s
    monkeypatch.setattr("sys.stderr", io.StringIO())
    with bar(1000, "simulating") as advance:
        assert advance is None
