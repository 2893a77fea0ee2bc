"""Reads the three files of `popsim score`: people, what they were given, what was measured. Every row is checked."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from covariates.problems import Problem, ProblemsError, nearest
from covariates.units import parse_quantity
from popsim.lookup import Lookup
from popsim.patients.list_cells import csv_cells
from popsim.patients.listed import read_list
from popsim.records import Patients, Timeline
from popsim.study_file import read_dose
from popsim.study_protocols import resolve_protocols
from popsim.study_records import DoseStep, Protocol
from popsim.study_sections import ProtocolSection
from popsim.study_values import LARGEST, SMALLEST, shown
from popsim.timeline import build_timeline

GIVEN_COLUMNS = ("patient", "at", "amount", "rate", "over", "until", "every", "times", "by", "route")
MEASURED_COLUMNS = ("patient", "at", "quantity", "value")
QUANTITIES = ("plasma", "unbound_plasma")
KINDS = {"U": "text", "b": "condition"}


@dataclass(frozen=True)
class Measured:
    """What real people were given and what was measured in them: n people, m measurements, in mg, L, min.

    labels      (n,) text, as in the column `patient`
    attributes  name -> (n,) array
    timelines   n of them, each of one patient
    patient     (m,) int64, place of the patient among the people
    time_min    (m,) float64
    value       (m,) float64, mg/L
    quantity    (m,) text: plasma or unbound_plasma
    unit        the first measurement's unit, for pictures
    """

    labels: np.ndarray
    attributes: dict[str, np.ndarray]
    timelines: tuple[Timeline, ...]
    patient: np.ndarray
    time_min: np.ndarray
    value: np.ndarray
    quantity: np.ndarray
    unit: str

    def people(self, i: int | None = None, copies: int = 1) -> Patients:
        """Everyone, or so many copies of one person, each copy with luck of its own."""
        if i is None:
            return Patients(1, 0, np.arange(len(self.labels)), self.attributes, self.labels)
        copied = {name: np.repeat(values[i:i + 1], copies) for name, values in self.attributes.items()}
        return Patients(1, i, np.arange(copies), copied)


@dataclass(frozen=True)
class _Row:
    place: str
    cells: dict[str, str]


def read_measured(people: Path, given: Path, measured: Path) -> Measured:
    """The three files, checked together. Raises ProblemsError with every problem of all rows at once."""
    listed = read_list(people)
    if listed.labels is None:
        raise ProblemsError(Problem(people.name, 'no column "patient"', "a label of its own for each person",
                                    "the other two files name people by it"))
    places = {str(label): i for i, label in enumerate(listed.labels)}
    problems: list[Problem] = []
    steps = _given(given, places, listed.attributes, problems)
    values = _values(measured, places, problems)
    untreated = sorted({label for label, *_ in values} - steps.keys())
    problems += [Problem(given.name, f'no dose of patient "{label}", who was measured', "a row for each dose")
                 for label in untreated if label in places]
    if problems:
        raise ProblemsError(problems)
    labels, times, found, quantities, units = zip(*values, strict=True)
    kept = sorted({places[label] for label in labels})
    attributes = {name: array[kept] for name, array in listed.attributes.items()}
    names = [str(listed.labels[i]) for i in kept]
    numbers = {name: i for i, name in enumerate(names)}
    return Measured(np.array(names), attributes,
                    tuple(timeline_of(steps[name], {key: values[i:i + 1] for key, values in attributes.items()})
                          for i, name in enumerate(names)),
                    np.array([numbers[label] for label in labels]), np.array(times), np.array(found),
                    np.array(quantities), units[0])


def _rows(path: Path, known: tuple[str, ...], needed: tuple[str, ...]) -> list[_Row]:
    """Rows of a CSV file by column name, empty cells left out."""
    try:
        header, places, cells_of = csv_cells(path)
    except OSError as error:
        found = error.strerror or "cannot be read"
        raise ProblemsError(Problem(str(path), found, "a CSV file that can be read")) from None
    lines = list(zip(places, cells_of, strict=True))
    where = f"{path.name}: line 1"
    problems = [Problem(where, f'column "{name}"', ", ".join(known), nearest(name, known))
                for name in header if name not in known]
    problems += [Problem(where, f'no column "{name}"', ", ".join(known)) for name in needed if name not in header]
    problems += [Problem(where, f'column "{name}" twice', "each name once")
                 for name in sorted({name for name in header if header.count(name) > 1})]
    problems += [Problem(f"{path.name}: {place}", f"{len(cells)} cells", f"{len(header)}, as the header has",
                         "write 72.5, not 72,5" if len(cells) > len(header) else "")
                 for place, cells in lines if len(cells) != len(header)]
    if not lines and not problems:
        problems.append(Problem(path.name, "no rows", "a header and at least one row"))
    if problems:
        raise ProblemsError(problems)
    return [_Row(place, {name: cell.strip() for name, cell in zip(header, cells, strict=True) if cell.strip()})
            for place, cells in lines]


def _known_patient(row: _Row, where: str, places: dict[str, int], problems: list[Problem]) -> str | None:
    label = row.cells.get("patient")
    if label in places:
        return label
    found = "nothing" if label is None else shown(label)
    problems.append(Problem(f"{where}, column patient", found, "a patient of the people's file",
                            nearest(label, places) if label else ""))
    return None


def _given(path: Path, places: dict[str, int], attributes: dict[str, np.ndarray],
               problems: list[Problem]) -> dict[str, list[DoseStep]]:
    """What each patient was given."""
    kinds = kinds_of(attributes)
    steps: dict[str, list[DoseStep]] = {}
    for row in _rows(path, GIVEN_COLUMNS, ("patient", "at")):
        where = f"{path.name}: {row.place}"
        label = _known_patient(row, where, places, problems)
        try:
            step = dose_step({name: cell for name, cell in row.cells.items() if name != "patient"}, where, kinds)
        except ProblemsError as error:
            problems += error.problems
        else:
            steps.setdefault(label or "", []).append(step)
    return steps


def dose_step(words: dict[str, object], where: str, kinds: dict[str, str]) -> DoseStep:
    """One dose from its words, which are those of a study's dose step; `kinds` are those of the patient's attributes.

    Raises ProblemsError with all its faults, each at "where, column KEY".
    """
    if str(words.get("times", "")).isdigit():
        words = words | {"times": int(str(words["times"]))}
    if "at" not in words:
        raise ProblemsError(Problem(f"{where}, column at", "nothing", 'when it was given, such as "0 min"'))
    if "every" in words and not {"times", "until"} & words.keys():
        raise ProblemsError(Problem(f"{where}, column every", shown(words["every"]), "times or until beside it",
                                    "say how often it was given"))
    problems: list[Problem] = []
    section = ProtocolSection(name="given", no_dose="allowed", dose=[read_dose(words, where)])
    protocol, = resolve_protocols([section], LARGEST, kinds, where, problems)
    if problems:
        raise ProblemsError(Problem(one.where.replace(": protocol 1, dose 1: ", ", column "), one.found, one.allowed,
                                    one.advice) for one in problems)
    return protocol.steps[0]


def timeline_of(steps: Iterable[DoseStep], attributes: dict[str, np.ndarray]) -> Timeline:
    """The events of one patient, whose attributes are arrays of one."""
    protocol = Protocol(name="given", by="weight", strength_mg_per_ml=None, vial_ml=None, no_dose_allowed=True,
                        steps=tuple(steps))
    return build_timeline(protocol, Lookup(attributes), 1, LARGEST)[0]


def kinds_of(attributes: dict[str, np.ndarray]) -> dict[str, str]:
    """Attribute -> "number", "condition" or "text"."""
    return {name: KINDS.get(values.dtype.kind, "number") for name, values in attributes.items()}


def _values(path: Path, places: dict[str, int],
            problems: list[Problem]) -> list[tuple[str, float, float, str, str]]:
    """(label, minutes, mg/L, quantity, unit) of each row."""
    found, seen = [], {}
    for row in _rows(path, MEASURED_COLUMNS, MEASURED_COLUMNS):
        where = f"{path.name}: {row.place}"
        label = _known_patient(row, where, places, problems)
        quantity = row.cells.get("quantity", "")
        if quantity not in QUANTITIES:
            allowed = f"{', '.join(QUANTITIES)}: only concentrations are scored"
            problems.append(Problem(f"{where}, column quantity", shown(quantity) if quantity else "nothing", allowed,
                                    nearest(quantity, QUANTITIES)))
        at = _quantity(row, "at", "time", where, problems)
        value = _quantity(row, "value", "concentration", where, problems)
        if label is None or at is None or value is None:
            continue
        earlier = seen.setdefault((label, at.value, quantity), row.place)
        if earlier != row.place:
            problems.append(Problem(where, f"the same patient, time and quantity as {earlier}", "one of them",
                                    "give the mean of repeated assays"))
        found.append((label, at.value, value.value, quantity, value.unit))
    return found


def _quantity(row: _Row, column: str, kind: str, where: str, problems: list[Problem]):
    text = row.cells.get(column, "")
    below = column == "value" and text.startswith("<")
    try:
        found = parse_quantity(text, [kind], f"{where}, column {column}")
        if found.value != 0 and not SMALLEST <= found.value <= LARGEST:
            raise ProblemsError(Problem(f"{where}, column {column}", shown(text), "a plausible size"))
        return found
    except ProblemsError as error:
        advice = "leave values below the assay's limit out; the share of them is yours to judge" if below else ""
        problems += [Problem(one.where, one.found, one.allowed, advice or one.advice) for one in error.problems]
        return None

