"""Who may be in a study: where the patients come from and which of them are eligible."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path

from covariates.formula import Formula
from covariates.problems import Problem, nearest
from covariates.units import UNITS, normal_unit
from popsim.patients.ages import OLDEST_YEARS, YOUNGEST_YEARS, AgeCurve, mixed, national
from popsim.patients.described import Described
from popsim.patients.listed import UNIT_KINDS

SOURCES = ("survey", "list", "described", "lattice")
LIMITED = ("age", "weight", "height", "bmi")
SCALED = ("weight", "height", "serum_creatinine")
SURVEY_ATTRIBUTES = ("sex", "age", "weight", "height", "bmi", "serum_creatinine")
LAST_DECADE_YEARS = 80.0  # where the national tables end with one band


@dataclass(frozen=True)
class Population:
    """The patients that a study asks for.

    source        "survey" (drawn adults), "list" (people from a file), "described" (drawn as a table 1 describes them)
                  or "lattice" (every combination of given values)
    count         how many patients; of a list: how many to draw from it again and again, None: the list as it is
    limits        age (years), weight (kg), height (cm), bmi (kg/m2) -> (low, high), closed, -inf or inf where open
    sex           "female", "male" or None for both
    where         a further condition, or None
    set           attribute that everyone has -> its value (true, false or a number)
    scale         weight, height or serum_creatinine -> factor, applied before anybody's eligibility is judged
    file          the list's CSV or Parquet file
    on_bad_row    "stop", or "skip": leave out the list's rows that cannot be used, and count them
    units         column of the list -> the unit its numbers are in, where not the usual one
    age_mix       of the survey: (from, to, share) in years and fractions; empty: the nation's ages
    female_share  of the survey, among those within the limits of age; None: the nation's
    described     the description
    lattice       attribute -> its values
    each          how many people at each point of the lattice
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
    units: Mapping[str, str] = field(default_factory=dict)
    age_mix: tuple[tuple[float, float, float], ...] = ()
    female_share: float | None = None
    described: Described | None = None
    lattice: Mapping[str, tuple] = field(default_factory=dict)
    each: int = 1

    @property
    def resampled(self) -> bool:
        """Whether people of a list are drawn again and again."""
        return self.source == "list" and self.count is not None

    def age_curve(self) -> AgeCurve:
        """How the survey's ages and sexes are mixed; ValueError where nobody is within the limits of age."""
        if not self.age_mix and self.female_share is None:
            return national()
        return mixed(self.age_mix, self.female_share, self.limits_of_age())

    def limits_of_age(self) -> tuple[float, float] | None:
        """Within what the survey holds; None where the study gives none."""
        if "age" not in self.limits:
            return None
        low, high = self.limits["age"]
        return max(low, YOUNGEST_YEARS), min(high, OLDEST_YEARS)

    def notes(self) -> Iterator[str]:
        """What every output says of where these patients come from."""
        if self.source == "survey" and self.limits.get("age", (0.0, math.inf))[1] > LAST_DECADE_YEARS:
            yield (
                "Patients over 80 are extrapolated: the national tables end with one band for 80 and over; in it ages "
                f"thin out up to {OLDEST_YEARS:g} years and sizes stay those of the band."
            )
        if self.age_mix:
            yield "Ages are mixed as the study says, not as in the nation."
        if self.female_share is not None and self.source == "survey":
            yield f"The share of women is set to {100 * self.female_share:g} %."
        if self.source == "described":
            taken = ", ".join(
                f"{'sex' if one == 'male' else one} with {other} {value:g}"
                for (one, other), value in self.described.from_survey().items()
            )
            yield (
                "Patients are described by summary figures; correlations that the study does not give are "
                + (f"taken from US adults ({taken}), all others 0." if taken else "taken to be 0.")
            )
        if self.source == "lattice":
            yield "Patients are points of a lattice, not a population: shares and intervals speak of the grid."
        if self.resampled:
            yield (
                "Patients are drawn from a list again and again: intervals count its people, not the draws "
                "(cluster formula)."
            )

    def problems(self) -> Iterator[Problem]:
        """Everything that keeps these patients from being drawn, so far as it shows before drawing."""
        if self.source not in SOURCES:
            yield Problem("population: source", f'"{self.source}"', ", ".join(SOURCES), nearest(self.source, SOURCES))
        if self.source in ("survey", "described") and self.count is None:
            yield Problem("population: count", "missing", "the number of virtual patients", "count = 10000")
        if self.source == "lattice" and self.count is not None:
            found = "given with a lattice, whose points are counted by its values"
            yield Problem("population: count", found, "nothing", "each = 100 puts 100 people at each point")
        if self.count is not None and self.count < 1:
            yield Problem("population: count", str(self.count), "1 or more")
        for source, key, example in (
            ("list", "file", 'file = "people.csv"'),
            ("described", "described", "a section [population.described]"),
            ("lattice", "lattice", "a section [population.lattice]"),
        ):
            if self.source == source and not getattr(self, key):
                yield Problem(f"population: {key}", "missing", example)
        if self.on_bad_row not in ("stop", "skip"):
            yield Problem("population: on_bad_row", f'"{self.on_bad_row}"', "stop, skip")
        if self.sex not in (None, "female", "male"):
            yield Problem("population: sex", f'"{self.sex}"', "female, male")
        yield from self._limit_problems()
        yield from self._attribute_problems()
        yield from self._unit_problems()

    def _limit_problems(self) -> Iterator[Problem]:
        usable = True
        for name, (low, high) in self.limits.items():
            if name not in LIMITED:
                allowed = f"limits of {', '.join(LIMITED)}"
                yield Problem(f"population: {name}", "a limit", allowed, nearest(name, LIMITED))
            if not low <= high:
                usable = False
                yield Problem(f"population: {name}", f"from {low:g} to {high:g}", "a range from low to high")
        if self.source == "survey" and usable and self.sex in (None, "female", "male"):
            yield from self._survey_age_problems()

    def _survey_age_problems(self) -> Iterator[Problem]:
        low, high = self.limits.get("age", (-math.inf, math.inf))
        if (math.isfinite(low) and low < YOUNGEST_YEARS) or (math.isfinite(high) and high > OLDEST_YEARS):
            yield Problem(
                "population: age",
                f"from {low:g} to {high:g} years",
                f"the survey holds adults of {YOUNGEST_YEARS:g} to {OLDEST_YEARS:g} years",
                'narrow the range, leave one side open (">= 65 years"), or for others source = "described" or "list"',
            )
        elif low >= OLDEST_YEARS or high <= YOUNGEST_YEARS or low == high:
            found = f"from {low:g} to {high:g} years: nobody"
            yield Problem("population: age", found, "a range that holds adults of the survey")
        else:
            try:
                somebody = sum(self.age_curve().within(self.limits_of_age(), self.sex)[1]) > 0
            except ValueError:
                somebody = False
            if not somebody:
                yield Problem(
                    "population: age_mix",
                    "nobody within the limits of age and sex",
                    "a mix and a share of women that leave somebody",
                )

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

    def _unit_problems(self) -> Iterator[Problem]:
        for name, unit in self.units.items():
            if name not in UNIT_KINDS:
                allowed = ", ".join(UNIT_KINDS)
                yield Problem("population: units", f'"{name}"', allowed, nearest(name, UNIT_KINDS))
            elif normal_unit(unit) not in UNITS[UNIT_KINDS[name]]:
                known = UNITS[UNIT_KINDS[name]]
                yield Problem(f"population: units: {name}", f'"{unit}"', ", ".join(known), nearest(unit, known))
