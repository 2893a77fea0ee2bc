"""Reads a list of real people from a CSV or Parquet file and refuses whatever cannot be true of a person.

One row a person. Columns: sex (female, male), age (years), weight (kg), height (cm), serum_creatinine (mg/dL), patient
(optional, a different label in each row), and any further columns of numbers or of true and false, which become
attributes under their own names. Other units of the known columns must be said. No cell may be empty and nothing is
guessed.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from covariates.problems import Problem, ProblemsError
from covariates.units import UNITS, normal_unit
from popsim.patients.list_cells import KNOWN, read_cells
from popsim.patients.possible import ADULT_YEARS, POSSIBLE, completed, contradictions

NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?")
# Columns whose unit a study may say, with the kind of unit.
UNIT_KINDS = {"age": "age", "weight": "body_weight", "height": "height", "serum_creatinine": "creatinine"}
BMI_AGREES_WITHIN = 0.02  # a column bmi against weight and height: what rounding the three can explain
# So many adults of a list above this body mass index are more likely weighed in pounds.
POUNDS_ABOVE_BMI, POUNDS_SHARE = 60.0, 0.1


@dataclass(frozen=True)
class ListedPeople:
    """The people of a list.

    rows        (n,) int64, ascending: place of each in the file (0 = first row under the header), the key to their
                luck; skipping one row changes nobody else's
    attributes  name -> (n,) array: `sex` text, switches bool, numbers float64, and what
                follows from them (`completed`)
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
    return set(read_cells(path)[0]) - {"patient"}


def read_list(path: Path, on_bad_row: str = "stop", units: Mapping[str, str] | None = None) -> ListedPeople:
    """The people of a file, each cell checked.

    on_bad_row  "stop": any fault refuses the whole list; "skip": rows with a fault are left out and counted
    units       known column -> the unit its numbers are in, where that is not the usual one: "umol/L", "months", "m"

    Raises ProblemsError with every fault at once: file, line (the header is line 1), column, what was found.
    """
    header, places, cells = read_cells(path)
    strangers = [name for name in units or {} if name not in header]
    if strangers:
        raise ProblemsError(
            Problem(f"{path.name}: units", f'"{name}", which is no column', ", ".join(header)) for name in strangers
        )
    columns: dict[str, np.ndarray] = {}
    faults = list(_length_faults(header, cells))
    for place, name in enumerate(header):
        texts = [row[place].strip() if place < len(row) else "" for row in cells]
        columns[name], found = _read_column(name, texts, (units or {}).get(name))
        faults += found
    faults += _joint_faults(columns, {(fault.row, fault.column) for fault in faults})
    if "weight" not in (units or {}):
        faults += _pounds_faults(columns)
    bad = np.zeros(len(cells), dtype=bool)
    bad[[fault.row for fault in faults]] = True
    if faults and (on_bad_row == "stop" or bad.all()):
        raise ProblemsError(fault.problem(path, places) for fault in sorted(faults, key=lambda fault: fault.row))
    rows = np.flatnonzero(~bad)
    kept = {name: values[rows] for name, values in columns.items()}
    labels = kept.pop("patient", None)
    return ListedPeople(rows, completed(kept), labels, int(bad.sum()))


@dataclass(frozen=True)
class _Fault:
    """What is wrong with one cell; `row` counts from 0 under the header."""

    row: int
    column: str
    found: str
    allowed: str
    advice: str = ""

    def problem(self, path: Path, places: list[str]) -> Problem:
        where = f"{path.name}: {places[self.row]}" + (f", column {self.column}" if self.column else "")
        return Problem(where, self.found, self.allowed, self.advice)


def _length_faults(header: list[str], cells: list[list[str]]) -> Iterator[_Fault]:
    for row, texts in enumerate(cells):
        if len(texts) != len(header):
            yield _Fault(
                row,
                "",
                f"{len(texts)} cells",
                f"{len(header)}, as many as the header has",
                "decimal commas? write 72.5" if len(texts) > len(header) else "",
            )


def _read_column(name: str, texts: list[str], unit: str | None) -> tuple[np.ndarray, list[_Fault]]:
    """Values of one column, and its faults; a faulty cell reads NaN, False or "" and must not be used."""
    if name == "patient":
        return np.array(texts), list(_label_faults(texts))
    words = [text.lower() for text in texts]
    if name == "sex":
        return np.array(words), [
            _missing(row, name, "female, male") if not word else _Fault(row, name, f'"{texts[row]}"', "female, male")
            for row, word in enumerate(words)
            if word not in ("female", "male")
        ]
    if name not in KNOWN and any(word in ("true", "false") for word in words):
        return np.array([word == "true" for word in words]), [
            _missing(row, name, "true, false") if not word else _Fault(row, name, f'"{texts[row]}"', "true, false")
            for row, word in enumerate(words)
            if word not in ("true", "false")
        ]
    factor = float(UNITS[UNIT_KINDS[name]][normal_unit(unit)]) if unit else 1.0
    values, faults = np.full(len(texts), np.nan), []
    for row, text in enumerate(texts):
        if NUMBER.fullmatch(text):
            values[row] = float(text) * factor
            faults += _impossible(row, name, values[row], f"{text} {unit or ''}".strip())
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


def _joint_faults(columns: dict[str, np.ndarray], named: set[tuple[int, str]]) -> Iterator[_Fault]:
    """What is possible cell by cell but not together, or a column bmi that does not follow from weight and height."""
    numbers = {name: values for name, values in columns.items() if name in KNOWN and name != "sex"}
    for wrong, names, allowed in contradictions(numbers):
        for row in np.flatnonzero(wrong):
            if not any((row, name) in named for name in names):  # otherwise the cell itself has been named
                found = ", ".join(f"{name} {columns[name][row]:g}" for name in names)
                yield _Fault(int(row), " and ".join(names), found, allowed, "check both and their units")
    if {"bmi", "weight", "height"} <= columns.keys():
        with np.errstate(divide="ignore", invalid="ignore"):
            bmi = columns["weight"] / (columns["height"] / 100.0) ** 2
        for row in np.flatnonzero(np.abs(columns["bmi"] / bmi - 1.0) > BMI_AGREES_WITHIN):
            yield _Fault(
                int(row),
                "bmi",
                f"{columns['bmi'][row]:g}",
                f"{bmi[row]:.1f}, from weight and height",
                "correct one of the three, or leave the column out",
            )


def _pounds_faults(columns: dict[str, np.ndarray]) -> Iterator[_Fault]:
    """Weights that are possible one by one, but of which a list holds too many."""
    if not {"weight", "height", "age"} <= columns.keys():
        return
    with np.errstate(divide="ignore", invalid="ignore"):
        bmi = columns["weight"] / (columns["height"] / 100.0) ** 2
    adult = columns["age"] >= ADULT_YEARS
    heavy = np.flatnonzero(adult & (bmi > POUNDS_ABOVE_BMI) & (bmi <= POSSIBLE["bmi"][1]))
    if len(heavy) > POUNDS_SHARE * adult.sum():
        for row in heavy:
            yield _Fault(
                int(row),
                "weight",
                f"a body mass index of {bmi[row]:.0f}, as of {len(heavy)} people of the list",
                f"at most one adult in {1 / POUNDS_SHARE:.0f} above {POUNDS_ABOVE_BMI:g} kg/m2",
                'are these pounds? give kg; if they are kg, say units = { weight = "kg" }',
            )
