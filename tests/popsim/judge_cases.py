"""Studies that several tests of judging share, written as a user writes them and read by popsim.study."""

from __future__ import annotations

from pathlib import Path

import pandas as pd

from covariates.problems import ProblemsError  # noqa: F401 (for the tests)
from popsim.finished import FinishedRun, finished_run
from popsim.provenance import record_of
from popsim.run import simulate
from popsim.study import read_study
from popsim.study_records import Study
from popsim.tables import all_tables, notes_of
from popsim.tally import Findings

SURVEY = 'source = "survey"\ncount = {count}\nage = "20 to 90 years"'
REMIFENTANIL = {"600 ug/h": 'rate = "600 ug/h"\nuntil = "60 min"', "900 ug/h": 'rate = "900 ug/h"\nuntil = "60 min"'}
EFFECT_SITE = """quantity = "effect_site"
range = "3 to 6 ng/mL"
during = "15 min to 60 min"
attained_when = "80 % of the time"
"""
GROUPS = {"under 65": "age < 65", "65 and over": "age >= 65"}

# one compartment, volume and clearance lognormal or the same for everyone
SHEET = """name = "{name}"
drug = "testdrug"
title = "A drug for tests"
evidence = "seen"
[source]
citation = "none: made for a test"
[built_on]
people = "nobody"
evidence = "from memory"
[measured_in]
fluid = "total plasma"
evidence = "from memory"
[equations]
V1 = {{ is = "{volume}", unit = "L", evidence = "seen" }}
CL = {{ is = "{clearance}", unit = "L/min", evidence = "seen" }}
{more}
[spread]
{spread}
"""


def sheet(
    folder: Path,
    name: str = "one",
    volume: str = "10",
    clearance: str = "0.5",
    more: str = "",
    spread: str = 'published = false\nnote = "none"',
) -> str:
    """Write a sheet and return the path that a study names."""
    (folder / f"{name}.toml").write_text(
        SHEET.format(name=name, volume=volume, clearance=clearance, more=more, spread=spread), encoding="utf-8"
    )
    return f"{name}.toml"


def study(
    folder: Path,
    count: int = 300,
    model: str = "remifentanil_minto_1997",
    repeat_with: tuple[str, ...] = (),
    population: str | None = None,
    groups: dict[str, str] | None = None,
    protocols: dict[str, str] | None = None,
    targets: tuple[str, ...] = (EFFECT_SITE,),
    variability: str = "",
    compare: str = "",
    until: str = "60 min",
    every: str = "5 min",
    in_protocol: str = "",
    seed: int = 11,
) -> Study:
    """The study that this text asks for."""
    lines = [
        'title = "A test"',
        'question = "Is it right?"',
        f"seed = {seed}",
        "[population]",
        population or SURVEY.format(count=count),
    ]
    if variability:
        lines += ["[variability]", variability]
    for name, where in (GROUPS if groups is None else groups).items():
        lines += ["[[group]]", f'name = "{name}"', f"where = '{where}'"]
    lines += ["[drug]", f'model = "{model}"', f"repeat_with = {list(repeat_with)}"]
    for name, doses in (protocols or REMIFENTANIL).items():
        lines += ["[[protocol]]", f'name = "{name}"', in_protocol]
        for dose in doses.split("---"):
            lines += ["[[protocol.dose]]", dose]
    for target in targets:
        lines += ["[[target]]", target]
    if compare:
        lines += ["[compare]", compare]
    lines += ["[run]", f'until = "{until}"', f'every = "{every}"']
    path = folder / "study.toml"
    path.write_text("\n".join(lines), encoding="utf-8")
    return read_study(path)


def people(folder: Path, rows: list[str], header: str = "sex,age,weight,height") -> str:
    """Write a list and return the [population] that names it."""
    (folder / "people.csv").write_text("\n".join([header, *rows]) + "\n", encoding="utf-8")
    return 'source = "list"\nfile = "people.csv"'


def finished(asked: Study, findings: Findings, tables: dict[str, pd.DataFrame]) -> FinishedRun:
    """The run as its record and tables tell it."""
    return finished_run(record_of(findings, "popsim judge study.toml", notes_of(findings, tables)), tables)


def judged(asked: Study, threads: int = 1) -> tuple[Findings, dict[str, pd.DataFrame]]:
    findings = simulate(asked, threads)
    return findings, all_tables(asked, findings.tally)
