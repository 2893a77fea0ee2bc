"""Who may be in a study: where the patients come from and which of them are eligible."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path

from covariates.formula import Formula
from covariates.problems import Problem, nearest

from popsim.patients.survey import OLDEST_YEARS, YOUNGEST_YEARS

SOURCES = ("survey", "list")
LIMITED = ("age", "weight", "height", "bmi")
SCALED = ("weight", "height", "serum_creatinine")
SURVEY_ATTRIBUTES = ("sex", "age", "weight", "height", "bmi", "serum_creatinine")


@dataclass(frozen=True)
class Population:
    """The patients that a study asks for.

    source      "survey" (drawn adults) or "list" (people from a file, used as they are)
    count       how many patients; may be None for a list: all who are eligible
    limits      age (years), weight (kg), height (cm), bmi (kg/m2) -> (low, high), closed, -inf or inf where open
    sex         "female", "male" or None for both
    where       a further condition, or None
    set         attribute that everyone has -> its value (true, false or a number)
    scale       weight, height or serum_creatinine -> factor, applied before anybody's eligibility is judged
    file        the list's CSV file
    on_bad_row  "stop", or "skip": leave out the list's rows that cannot be used, and count them
    """

    source: str
    count: int | None
    limits: Mapping[str, tuple[float, float]] = field(default_factory=dict)
    sex: str | None = None
    where: Formula | None = None
    set: Mapping[str, bool | float] = field(default_factory=dict)
    scale: Mapping[str, float] = field(default_factory=dict)
    file: Path | None = None
    on_bad_row: str = "stop"

    def problems(self) -> Iterator[Problem]:
        """Everything that keeps these patients from being drawn, so far as it shows before drawing."""
        if self.source not in SOURCES:
            yield Problem("population: source", f'"{self.source}"', ", ".join(SOURCES), nearest(self.source, SOURCES))
        if self.source == "survey" and self.count is None:
            yield Problem("population: count", "missing", "the number of virtual patients", "count = 10000")
        if self.count is not None and self.count < 1:
            yield Problem("population: count", str(self.count), "1 or more")
        if self.source == "list" and self.file is None:
            yield Problem("population: file", "missing", "the CSV file with the list", 'file = "people.csv"')
        if self.on_bad_row not in ("stop", "skip"):
            yield Problem("population: on_bad_row", f'"{self.on_bad_row}"', "stop, skip")
        if self.sex not in (None, "female", "male"):
            yield Problem("population: sex", f'"{self.sex}"', "female, male")
        yield from self._limit_problems()
        yield from self._attribute_problems()

    def _limit_problems(self) -> Iterator[Problem]:
        for name, (low, high) in self.limits.items():
            if name not in LIMITED:
                allowed = f"limits of {', '.join(LIMITED)}"
                yield Problem(f"population: {name}", "a limit", allowed, nearest(name, LIMITED))
            if not low <= high:
                yield Problem(f"population: {name}", f"from {low:g} to {high:g}", "a range from low to high")
        if self.source == "survey" and "age" in self.limits:
            low, high = self.limits["age"]
            if (math.isfinite(low) and low < YOUNGEST_YEARS) or (math.isfinite(high) and high > OLDEST_YEARS):
                yield Problem(
                    "population: age",
                    f"from {low:g} to {high:g} years",
                    f"the survey holds adults of {YOUNGEST_YEARS:g} to {OLDEST_YEARS:g} years",
                    'narrow the range, leave one side open (">= 65 years"), or bring a list',
                )
            elif low >= OLDEST_YEARS or high <= YOUNGEST_YEARS or low == high:
                found = f"from {low:g} to {high:g} years: nobody"
                yield Problem("population: age", found, "a range that holds adults of the survey")

    def _attribute_problems(self) -> Iterator[Problem]:
        for name in self.set:
            if self.source == "survey" and name in SURVEY_ATTRIBUTES:
                found = f'"{name}", which the survey draws'
                yield Problem("population: set", found, "an attribute that the survey does not draw")
        for name, factor in self.scale.items():
            if name not in SCALED:
                yield Problem("population: scale", f'"{name}"', ", ".join(SCALED), nearest(name, SCALED))
            if not (math.isfinite(factor) and factor > 0):
                yield Problem(f"population: scale: {name}", f"{factor:g}", "a number above 0, such as 1.2")
