"""The cells of a list as text: of a CSV file, or of a Parquet file, which are then checked alike."""

from __future__ import annotations

import csv
import re
from collections.abc import Iterator
from pathlib import Path

from covariates.problems import Problem, ProblemsError, nearest

KNOWN = (
    "sex",
    "age",
    "weight",
    "height",
    "serum_creatinine",
    "bmi",
    "postmenstrual_age_weeks",
    "gestational_age_weeks",
)
ATTRIBUTE_NAME = re.compile(r"[A-Za-z][A-Za-z0-9_]*")


def read_cells(path: Path) -> tuple[list[str], list[str], list[list[str]]]:
    """Header, the place of each row in words ("line 2"), and the cells of each row as text.

    Raises ProblemsError when the file cannot be read or its header cannot be used.
    """
    try:
        header, places, cells = _parquet_cells(path) if path.suffix == ".parquet" else csv_cells(path)
    except OSError as error:
        found = error.strerror or "cannot be read"
        raise ProblemsError(Problem(str(path), found, "a CSV file, or a Parquet file, that can be read")) from None
    problems = list(_header_problems(path, header))
    if not cells and not problems:
        problems.append(Problem(path.name, "no people", "a header and at least one row"))
    if problems:
        raise ProblemsError(problems)
    return header, places, cells


def csv_cells(path: Path) -> tuple[list[str], list[str], list[list[str]]]:
    """Header, places and cells of a CSV file; rows without a single cell are passed over."""
    try:
        with open(path, encoding="utf-8-sig", newline="") as file:
            reader = csv.reader(file)
            header = [name.strip() for name in next(reader, [])]
            numbered = [(reader.line_num, row) for row in reader if any(cell.strip() for cell in row)]
    except (UnicodeDecodeError, csv.Error) as error:
        raise ProblemsError(Problem(path.name, f"not readable: {error}", "CSV text, saved as UTF-8")) from None
    return header, [f"line {line}" for line, _ in numbered], [row for _, row in numbered]


def _parquet_cells(path: Path) -> tuple[list[str], list[str], list[list[str]]]:
    """Floats are written with all their digits; what is missing becomes an empty cell."""
    try:
        from pyarrow import ArrowException
        from pyarrow.parquet import read_table
    except ImportError:
        raise ProblemsError(
            Problem(
                path.name,
                "pyarrow is not installed",
                "a CSV file",
                'Parquet needs the optional extra: pip install "popsim[parquet]"',
            )
        ) from None
    if not path.is_file():
        raise FileNotFoundError(2, "No such file or directory", str(path))
    try:
        table = read_table(path)
    except ArrowException as error:
        raise ProblemsError(Problem(path.name, f"not readable: {error}", "a Parquet file")) from None
    columns = [["" if value is None else str(value) for value in column.to_pylist()] for column in table.columns]
    cells = [list(row) for row in zip(*columns)]
    return list(table.column_names), [f"row {number}" for number in range(1, len(cells) + 1)], cells


def _header_problems(path: Path, header: list[str]) -> Iterator[Problem]:
    where = f"{path.name}: {'columns' if path.suffix == '.parquet' else 'line 1'}"
    if len(header) <= 1:
        joined = header[0] if header else ""
        separated = [mark for mark in (";", "\t") if mark in joined]
        found = f"columns separated by {separated[0]!r}" if separated else "fewer than two columns"
        yield Problem(where, found, "column names separated by commas", "sex,age,weight,height,serum_creatinine")
        return
    for name in sorted({name for name in header if header.count(name) > 1}):
        yield Problem(where, f'column "{name}" twice', "each name once")
    for name in header:
        if not ATTRIBUTE_NAME.fullmatch(name):
            allowed = "letters, digits and _, beginning with a letter"
            yield Problem(where, f'column "{name}"', allowed, "weight, not weight (kg)")
        missing = [known for known in (*KNOWN, "patient") if known not in header]
        if name not in KNOWN and nearest(name.lower(), missing):
            yield Problem(where, f'column "{name}"', ", ".join((*KNOWN, "patient")), nearest(name.lower(), missing))
