"""Who the patients are, before any drug is given: quantiles of age, size and kidney function by group."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from popsim.counted import KEY_COUNT, QUANTILES, count_by_group, decimal_keys, decimal_quantile
from popsim.population_tally import CLEARANCE, LEAN, measured
from popsim.records import Patients
from popsim.screen import wrapped
from popsim.study_records import Study

SHOWN_IN_PICTURE = 1500  # people of the first block that a picture shows one by one
SHARES = tuple(QUANTILES.values())


@dataclass(frozen=True)
class Measure:
    """What is summarised: covariate, its words, its unit."""

    covariate: str
    words: str
    unit: str


MEASURES = (
    Measure("age", "age", "years"),
    Measure("weight", "weight", "kg"),
    Measure("height", "height", "cm"),
    Measure("bmi", "BMI", "kg/m2"),
    Measure(LEAN, "lean mass", "kg"),
    Measure(CLEARANCE, "clearance", "mL/min"),
)
FOOTNOTE = (
    "lean mass by Janmahasatian 2005; clearance of creatinine by Cockcroft and Gault 1976 with adjusted body weight; "
    "both in adults only"
)


class People:
    """Counts by measure and group, to four significant digits, so that memory does not grow with the patients.

    sample  attribute -> values of the first few, for a picture
    """

    def __init__(self, study: Study):
        self.names = study.group_names
        self.patients = np.zeros(len(self.names), dtype=np.int64)
        self.counts: dict[Measure, np.ndarray] = {}
        self.sample: dict[str, np.ndarray] = {}

    def add(self, patients: Patients, members: np.ndarray) -> None:
        """One block, with (n, groups) bool of who belongs to which group."""
        self.patients += members.sum(axis=0)
        if not self.sample:
            self.sample = {name: values[:SHOWN_IN_PICTURE] for name, values in patients.attributes.items()}
        for measure in MEASURES:
            if found := measured(measure.covariate, patients.attributes):
                of, values = found
                counts = self.counts.setdefault(measure, np.zeros((len(self.names), KEY_COUNT), dtype=np.int32))
                count_by_group(counts, decimal_keys(values), members[of])

    def quantiles(self, measure: Measure, group: int) -> list[float]:
        """At SHARES; NaN where nobody is counted."""
        return [decimal_quantile(self.counts[measure][group], share) for share in SHARES]

    def shown(self) -> list[Measure]:
        """The measures that these patients have."""
        return [measure for measure in MEASURES if measure in self.counts]


def summary(study: Study, people: People, eligible_line: str) -> str:
    """The people by group, for the terminal."""
    lines = [*wrapped(study.title), *wrapped(eligible_line)]
    heads = "".join(f"{f'{100 * share:.0f} %':>9}" for share in SHARES)
    for group, name in enumerate(people.names):
        title = f"{name}: {people.patients[group]:,} patients"
        lines += ["", *wrapped(title), f"{'':<22}{heads}"]
        for measure in people.shown():
            numbers = "".join(f"{_three_digits(value):>9}" for value in people.quantiles(measure, group))
            lines.append(f"  {f'{measure.words} ({measure.unit})':<20}{numbers}")
    notes = [line for note in study.population.notes() for line in wrapped(note, "- ")]
    return "\n".join([*lines, "", *wrapped(FOOTNOTE), *notes])


def _three_digits(value: float) -> str:
    return "-" if np.isnan(value) else f"{value:.3g}" if value < 100 else f"{value:.0f}"
