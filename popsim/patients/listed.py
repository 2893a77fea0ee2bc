"""Reads a list of real people from a CSV file and refuses whatever cannot be true of a person.

One row a person. Columns: sex (female, male), age (years), weight (kg), height (cm), serum_creatinine (mg/dL), patient
(optional, a different label in each row), and any further columns of numbers or of true and false, which become
attributes under their own names. No cell may be empty and nothing is guessed.
"""

from __future__ import annotations

import csv
import math
import re
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from covariates.problems import Problem, ProblemsError, nearest

KNOWN = ("sex", "age", "weight", "height", "serum_creatinine", "bmi")
NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?")
ATTRIBUTE_NAME = re.compile(r"[A-Za-z][A-Za-z0-9_]*")

# What can be true of a person, and what a number outside most likely is. Source: common practice; the limits only have
# to be wide enough for anybody and tight enough to catch a wrong unit.
POSSIBLE = {
    "age": (0.0, 120.0, "0 to 120 years", "give completed or decimal years"),
    "weight": (0.3, 350.0, "0.3 to 350 kg", "are these pounds or grams? give kg"),
    "height": (25.0, 260.0, "25 to 260 cm", "are these metres, inches or millimetres? give cm"),
    "serum_creatinine": (0.05, 30.0, "0.05 to 30 mg/dL", "are these umol/L? divide by 88.42"),
    "bmi": (6.0, 110.0, "6 to 110 kg/m2", ""),
}
BMI_AGREES_WITHIN = 0.02  # a column bmi against weight and height: what rounding the three can explain


@dataclass(frozen=True)
class ListedPeople:
    """The people of a list.

    rows        (n,) int64, ascending: place of each in the file (0 = first row under the header), the key to their
                luck; skipping one row changes nobody else's
    attributes  name -> (n,) array: `sex` text, switches bool, numbers float64; `bmi` is added to weight and height
    labels      (n,) text from the column `patient`, or None
    skipped     how many rows were left out
    """

    rows: np.ndarray
    attributes: dict[str, np.ndarray]
    labels: np.ndarray | None
    skipped: int


def list_columns(path: Path) -> set[str]:
    """Names of the attributes that a list gives its people: its columns without `patient`.

    Raises ProblemsError when the file cannot be read or its header cannot be used.
    """
    return set(_read_cells(path)[0]) - {"patient"}


def read_list(path: Path, on_bad_row: str = "stop") -> ListedPeople:
    """The people of a CSV file, each cell checked.

    on_bad_row  "stop": any fault refuses the whole list; "skip": rows with a fault are left out and counted

    Raises ProblemsError with every fault at once: file, line (the header is line 1), column, what was found.
    """
    header, lines, cells = _read_cells(path)
    columns: dict[str, np.ndarray] = {}
    faults = list(_length_faults(header, cells))
    for place, name in enumerate(header):
        texts = [row[place].strip() if place < len(row) else "" for row in cells]
        columns[name], found = _read_column(name, texts)
        faults += found
    faults += _body_faults(columns)
    bad = np.zeros(len(cells), dtype=bool)
    bad[[fault.row for fault in faults]] = True
    if faults and (on_bad_row == "stop" or bad.all()):
        raise ProblemsError(fault.problem(path, lines) for fault in sorted(faults, key=lambda fault: fault.row))
    rows = np.flatnonzero(~bad)
    kept = {name: values[rows] for name, values in columns.items()}
    labels = kept.pop("patient", None)
    if "bmi" not in kept and {"weight", "height"} <= kept.keys():
        kept["bmi"] = kept["weight"] / (kept["height"] / 100.0) ** 2
    return ListedPeople(rows, kept, labels, int(bad.sum()))


@dataclass(frozen=True)
class _Fault:
    """What is wrong with one cell; `row` counts from 0 under the header."""

    row: int
    column: str
    found: str
    allowed: str
    advice: str = ""

    def problem(self, path: Path, lines: list[int]) -> Problem:
        where = f"{path.name}: line {lines[self.row]}" + (f", column {self.column}" if self.column else "")
        return Problem(where, self.found, self.allowed, self.advice)


def _read_cells(path: Path) -> tuple[list[str], list[int], list[list[str]]]:
    """Header, line number of each row, and the cells of each row as text."""
    try:
        with open(path, encoding="utf-8-sig", newline="") as file:
            reader = csv.reader(file)
            header = [name.strip() for name in next(reader, [])]
            numbered = [(reader.line_num, row) for row in reader if any(cell.strip() for cell in row)]
    except OSError as error:
        found = error.strerror or "cannot be read"
        raise ProblemsError(Problem(str(path), found, "a CSV file that can be read")) from None
    except (UnicodeDecodeError, csv.Error) as error:
        raise ProblemsError(Problem(path.name, f"not readable: {error}", "CSV text, saved as UTF-8")) from None
    problems = list(_header_problems(path, header))
    if not numbered and not problems:
        problems.append(Problem(path.name, "no people", "a header and at least one row"))
    if problems:
        raise ProblemsError(problems)
    return header, [line for line, _ in numbered], [row for _, row in numbered]


def _header_problems(path: Path, header: list[str]) -> Iterator[Problem]:
    where = f"{path.name}: line 1"
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


def _length_faults(header: list[str], cells: list[list[str]]) -> Iterator[_Fault]:
    for row, texts in enumerate(cells):
        if len(texts) != len(header):
            yield _Fault(row, "", f"{len(texts)} cells", f"{len(header)}, as many as the header has",
                         "decimal commas? write 72.5" if len(texts) > len(header) else "")


def _read_column(name: str, texts: list[str]) -> tuple[np.ndarray, list[_Fault]]:
    """Values of one column, and its faults; a faulty cell reads NaN, False or "" and must not be used."""
    if name == "patient":
        return np.array(texts), list(_label_faults(texts))
    words = [text.lower() for text in texts]
    if name == "sex":
        return np.array(words), [
            _missing(row, name, "female, male") if not word else _Fault(row, name, f'"{texts[row]}"', "female, male")
            for row, word in enumerate(words) if word not in ("female", "male")
        ]
    if name not in KNOWN and any(word in ("true", "false") for word in words):
        return np.array([word == "true" for word in words]), [
            _missing(row, name, "true, false") if not word else _Fault(row, name, f'"{texts[row]}"', "true, false")
            for row, word in enumerate(words) if word not in ("true", "false")
        ]
    values, faults = np.full(len(texts), np.nan), []
    for row, text in enumerate(texts):
        if NUMBER.fullmatch(text):
            values[row] = float(text)
            faults += _impossible(row, name, values[row], text)
        elif not text:
            faults.append(_missing(row, name, POSSIBLE[name][2] if name in POSSIBLE else "a number"))
        else:
            faults.append(_Fault(row, name, f'"{text}"', "a number", "write 72.5, not 72,5" if "," in text else ""))
    return values, faults


def _missing(row: int, name: str, allowed: str) -> _Fault:
    return _Fault(row, name, "nothing", allowed, 'give it, or leave such rows out with on_bad_row = "skip"')


def _impossible(row: int, name: str, value: float, text: str) -> Iterator[_Fault]:
    low, high, allowed, advice = POSSIBLE.get(name, (-math.inf, math.inf, "a number that is not infinite", ""))
    if not low <= value <= high or math.isinf(value):
        yield _Fault(row, name, text, allowed, advice)


def _label_faults(texts: list[str]) -> Iterator[_Fault]:
    first: dict[str, int] = {}
    for row, text in enumerate(texts):
        if not text:
            yield _missing(row, "patient", "a label of its own for each row")
        elif first.setdefault(text, row) != row:
            yield _Fault(row, "patient", f'"{text}", as in an earlier row', "a label of its own for each row")


def _body_faults(columns: dict[str, np.ndarray]) -> Iterator[_Fault]:
    """Weight and height, each possible, that do not fit together, or a column bmi that does not follow from them."""
    if not {"weight", "height"} <= columns.keys():
        return
    with np.errstate(divide="ignore", invalid="ignore"):
        bmi = columns["weight"] / (columns["height"] / 100.0) ** 2
    low, high, allowed, _ = POSSIBLE["bmi"]
    for row in np.flatnonzero((bmi < low) | (bmi > high)):
        in_range = all(POSSIBLE[name][0] <= columns[name][row] <= POSSIBLE[name][1] for name in ("weight", "height"))
        if in_range:  # otherwise the cell itself has been named
            yield _Fault(int(row), "weight and height", f"a body mass index of {bmi[row]:.1f} kg/m2", allowed,
                         "check both and their units: weight in kg, height in cm")
    if "bmi" in columns:
        for row in np.flatnonzero(np.abs(columns["bmi"] / bmi - 1.0) > BMI_AGREES_WITHIN):
            yield _Fault(int(row), "bmi", f"{columns['bmi'][row]:g}", f"{bmi[row]:.1f}, from weight and height",
                         "correct one of the three, or leave the column out")
