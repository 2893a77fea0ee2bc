"""The three files of a score, written as a user writes them, and the score of them."""

from __future__ import annotations

import runpy
from pathlib import Path

from popsim.scoring.run import score_models
from popsim.scoring.tables import all_tables

sheet = runpy.run_path(str(Path(__file__).with_name("judge_cases.py")))["sheet"]
SPREAD = 'printed_as = "sd of ln"\nCL = { value = 0.3, evidence = "from memory" }'
ERROR = '\n[measurement_error]\nproportional = 0.1\nevidence = "from memory"'


def files(folder: Path, people: list[str], given: list[str], measured: list[str],
          header: str = "patient,sex,age,weight,height", given_header: str = "patient,at,amount,rate,over,until"):
    """Write the three files; rows as text."""
    for name, head, rows in (("people", header, people), ("given", given_header, given),
                             ("measured", "patient,at,quantity,value", measured)):
        (folder / f"{name}.csv").write_text("\n".join([head, *rows]) + "\n", encoding="utf-8")
    return tuple(folder / f"{name}.csv" for name in ("people", "given", "measured"))


def scored(folder: Path, written, *models: str, groups: tuple[str, ...] = (), replicates: int = 400, seed: int = 5):
    """The score of sheets in `folder`, or shipped ones, and its tables."""
    names = tuple(str(folder / name) if name.endswith(".toml") else name for name in models)
    found = score_models(written, None, names, groups, replicates, seed)
    return found, all_tables(found)
