"""Stores the full run anew, when its numbers changed on purpose: python tests/pinned/full_run/refresh.py

These tables are our own earlier output, no evidence that they are right. With every refresh goes a line marked
**(numbers)** in the change log of DEVELOPERS.md that says what changed and why.
"""

from __future__ import annotations

from pathlib import Path

import pandas as pd

from popsim.run import simulate
from popsim.study import read_study
from popsim.tables import all_tables

HERE = Path(__file__).parent


def tables() -> dict[str, pd.DataFrame]:
    """The tables as they come out now."""
    study = read_study(HERE / "study.toml")
    return all_tables(study, simulate(study).tally)


if __name__ == "__main__":
    for name, table in tables().items():
        table.to_csv(HERE / f"{name}.csv", index=False, lineterminator="\n")
        print(f"{name}.csv: {len(table)} rows")
