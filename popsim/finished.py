"""A finished run, read back from its folder: all that pictures need, without the study file and without simulating."""

from __future__ import annotations

import json
from dataclasses import dataclass, fields, replace
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import pandas as pd

from covariates.problems import Problem, ProblemsError
from covariates.sheet_reading import EffectModel
from popsim.study_records import Target

NEEDED = ("attainment", "over_time", "comparison")
OPTIONAL = ("people", "attainment_map", "body_size")
TEXT_COLUMNS = ("model", "protocol", "group", "target", "protocol_a", "protocol_b", "reference", "verdict", "better",
                "note", "measure", "sex")
AGAIN = "judge the study again"
COURSES_SHOWN = 5  # patients whose own courses a picture may show


@dataclass(frozen=True)
class FinishedModel:
    """A drug model as its run's record tells it; `effect` None where it describes none."""

    name: str
    effect: EffectModel | None


@dataclass(frozen=True)
class FinishedRun:
    """What a run was about, and its tables by name; a table that the run did not leave is missing.

    resampled  whether its patients are people of a list drawn again and again, who are no independent draws
    courses    the first few patients' courses where the run kept them, else None
    """

    title: str
    group_names: tuple[str, ...]
    protocols: tuple[str, ...]
    reference: str | None
    until_min: float
    models: tuple[FinishedModel, ...]
    targets: tuple[Target, ...]
    resampled: bool
    tables: dict[str, pd.DataFrame]
    courses: pd.DataFrame | None = None


def finished_run(record: dict[str, Any], tables: dict[str, pd.DataFrame]) -> FinishedRun:
    """The run that a record and its tables tell of. Raises ProblemsError where the record lacks what this needs."""
    try:
        study = record["study"]
        return FinishedRun(
            title=study["title"],
            group_names=("all", *(name for name, _ in study["groups"])),
            protocols=tuple(protocol["name"] for protocol in study["protocols"]),
            reference=study["reference"],
            until_min=study["until_min"],
            models=tuple(FinishedModel(model["name"], model["effect"] and EffectModel(**model["effect"]))
                         for model in record["models"]),
            targets=tuple(_target(target) for target in study["targets"]),
            resampled=study["population"]["source"] == "list" and study["population"]["count"] is not None,
            tables=tables,
        )
    except (KeyError, TypeError, ValueError) as error:
        raise ProblemsError(Problem("record.json", f"no usable {error}", "the record of a run by this version",
                                    AGAIN)) from None


def own_site(target: Target) -> bool:
    """Whether a target looks at an effect site, which is another one in each model: never compared between models."""
    follows = getattr(getattr(target, "response", None), "follows", "")
    return "effect_site" in (target.quantity, follows)


def _target(written: dict[str, Any]) -> Target:
    known = {field.name: written[field.name] for field in fields(Target) if field.name in written}
    for name, open_side in (("low", float("-inf")), ("high", float("inf"))):
        known[name] = open_side if known[name] == "unlimited" else known[name]
    return Target(**{name: SimpleNamespace(**value) if isinstance(value, dict) else value
                     for name, value in known.items()})


def read_run(folder: Path) -> FinishedRun:
    """Read a folder that `popsim judge` left. Raises ProblemsError where it is none, or where a table is missing."""
    if not (folder / "record.json").is_file():
        raise ProblemsError(Problem(str(folder), "no record.json", "a folder that popsim judge left"))
    kind = "parquet" if (folder / "attainment.parquet").is_file() else "csv"
    missing = [f"{name}.{kind}" for name in NEEDED if not (folder / f"{name}.{kind}").is_file()]
    if missing:
        raise ProblemsError(Problem(str(folder), f"no {', '.join(missing)}", "a folder as popsim judge left it", AGAIN))
    try:
        record = json.loads((folder / "record.json").read_text(encoding="utf-8"))
        tables = {name: _table(folder / f"{name}.{kind}") for name in (*NEEDED, *OPTIONAL)
                  if (folder / f"{name}.{kind}").is_file()}
    except (json.JSONDecodeError, UnicodeDecodeError, pd.errors.ParserError, pd.errors.EmptyDataError) as error:
        raise ProblemsError(Problem(str(folder), f"a file that cannot be read: {error}", "files as popsim left them",
                                    AGAIN)) from None
    run = finished_run(record, tables)
    return replace(run, courses=_first_courses(folder / "courses.csv", run))


def _table(path: Path, rows: int | None = None) -> pd.DataFrame:
    """A table to the last bit; empty text stays empty, and a group called NA or 1 stays a name."""
    if path.suffix == ".parquet":
        return pd.read_parquet(path)
    table = pd.read_csv(path, nrows=rows, dtype=dict.fromkeys(TEXT_COLUMNS, str), keep_default_na=False, na_values=[""])
    texts = [name for name in TEXT_COLUMNS if name in table]
    return table.fillna(dict.fromkeys(texts, ""))


def _first_courses(path: Path, run: FinishedRun) -> pd.DataFrame | None:
    """Patient comes after patient in courses.csv: the first ones are its first rows."""
    if not path.is_file():
        return None
    times = run.tables["over_time"]["time_min"].nunique()
    return _table(path, COURSES_SHOWN * len(run.models) * len(run.protocols) * times)
