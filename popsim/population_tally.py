"""Who is simulated, in integer counts: by group, by total weight, and by age and weight with what became of them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from itertools import product

import numpy as np

from covariates.catalogue import attributes_needed, compute
from popsim.counted import TENTHS_KEYS, count_by_group, tenths_keys
from popsim.patients.possible import ADULT_YEARS
from popsim.records import Judged
from popsim.study_records import Protocol, Study

LEAN = "lean_body_mass_janmahasatian"
CLEARANCE = "creatinine_clearance_cockcroft_gault_adjusted"
GROUP_MEASURES = ("age", "weight", "height", "bmi", LEAN)
SIZE_MEASURES = ("weight", LEAN, "ideal_body_weight_devine", "adjusted_body_weight")
FOR_ADULTS = (LEAN, CLEARANCE, "ideal_body_weight_devine", "adjusted_body_weight")  # the equations' own people
SEXES = ("female", "male")
AGE_STEP_YEARS, AGE_BINS = 10.0, 13  # the last bin of each is open: 120 years, 200 kg and more
WEIGHT_STEP_KG, WEIGHT_BINS = 10.0, 21


@dataclass
class PopulationTally:
    """Counts of one thread.

    sexed, female   (groups,) patients whose sex is known, and the women among them
    by_group    measure -> (groups, tenths)
    by_weight   measure of body size -> (sexes, bins of total weight, tenths)
    cells       (age bins, weight bins) patients
    outside     model -> cells outside the people it was built on
    attained, failed   (model, protocol, target) -> cells
    """

    sexed: np.ndarray
    female: np.ndarray
    by_group: dict[str, np.ndarray]
    by_weight: dict[str, np.ndarray]
    cells: np.ndarray
    outside: dict[int, np.ndarray]
    attained: dict[tuple[int, int, int], np.ndarray]
    failed: dict[tuple[int, int, int], np.ndarray]

    @classmethod
    def empty(cls, study: Study) -> PopulationTally:
        groups, models = len(study.group_names), range(len(study.models))
        judged = list(product(models, range(len(study.protocols)), range(len(study.targets))))

        def counts(*shape: int) -> np.ndarray:
            return np.zeros(shape, dtype=np.int64)

        return cls(
            sexed=counts(groups),
            female=counts(groups),
            by_group={name: counts(groups, TENTHS_KEYS) for name in GROUP_MEASURES},
            by_weight={name: np.zeros((2, WEIGHT_BINS, TENTHS_KEYS), dtype=np.int32) for name in size_measures(study)},
            cells=counts(AGE_BINS, WEIGHT_BINS),
            outside={m: counts(AGE_BINS, WEIGHT_BINS) for m in models},
            attained={key: counts(AGE_BINS, WEIGHT_BINS) for key in judged},
            failed={key: counts(AGE_BINS, WEIGHT_BINS) for key in judged},
        )

    def arrays(self) -> list[np.ndarray]:
        """Every counting array, always in the same order."""
        tables = (self.by_group, self.by_weight, self.outside, self.attained, self.failed)
        return [self.sexed, self.female, self.cells, *(counts for table in tables for counts in table.values())]

    def add_patients(self, attributes: Mapping[str, np.ndarray], members: np.ndarray) -> np.ndarray | None:
        """Count a block by group, size and cell; gives each patient's cell, None where age or weight is not known."""
        female = attributes["sex"] == "female" if "sex" in attributes else None
        if female is not None:
            self.sexed += members.sum(axis=0)
            self.female += members.T @ female
        for name, counts in self.by_group.items():
            if found := measured(name, attributes):
                of, values = found
                count_by_group(counts, tenths_keys(values), members[of])
        if "weight" not in attributes:
            return None
        heavy = _bin(attributes["weight"], WEIGHT_STEP_KG, WEIGHT_BINS)
        for name, counts in self.by_weight.items() if female is not None else ():
            if found := measured(name, attributes):
                of, values = found
                np.add.at(counts, (1 - female[of].astype(np.int64), heavy[of], tenths_keys(values)), 1)
        if "age" not in attributes:
            return None
        cell = _bin(attributes["age"], AGE_STEP_YEARS, AGE_BINS) * WEIGHT_BINS + heavy
        _add_cells(self.cells, cell, np.ones(len(cell), dtype=bool))
        return cell

    def add_outside(self, model: int, cell: np.ndarray | None, outside: np.ndarray) -> None:
        if cell is not None:
            _add_cells(self.outside[model], cell, outside)

    def add_judged(self, key: tuple[int, int, int], cell: np.ndarray | None, judged: Judged) -> None:
        if cell is not None:
            _add_cells(self.attained[key], cell, judged.attained)
            _add_cells(self.failed[key], cell, judged.failed)


def size_measures(study: Study) -> tuple[str, ...]:
    """The measures of body size that are compared: the usual ones, and those by which a protocol doses per kg."""
    dosed = [name for protocol in study.protocols for name in dosed_by(protocol)]
    return tuple(dict.fromkeys([*SIZE_MEASURES, *dosed]))


def dosed_by(protocol: Protocol) -> set[str]:
    """The covariates that a "/kg" of this protocol means; none where no dose is scaled by weight."""
    return {step.by for step in protocol.steps for variant in step.variants
            for dose in (variant.amount, variant.rate) if dose is not None and dose.kind.endswith("_per_kg")}


def measured(name: str, attributes: Mapping[str, np.ndarray]) -> tuple[np.ndarray, np.ndarray] | None:
    """Who has this measure, (n,) bool, and their values; None where nobody does, or the attributes do not tell it."""
    if not attributes_needed(name, attributes) <= attributes.keys():
        return None
    of = np.ones(len(next(iter(attributes.values()))), dtype=bool)
    if name in FOR_ADULTS and "age" in attributes:
        of = attributes["age"] >= ADULT_YEARS
    if not of.any():
        return None
    return of, compute(name, {key: column[of] for key, column in attributes.items()})


def _bin(values: np.ndarray, step: float, bins: int) -> np.ndarray:
    return np.clip(np.floor(values / step), 0, bins - 1).astype(np.int64)


def _add_cells(counts: np.ndarray, cell: np.ndarray, marked: np.ndarray) -> None:
    counts += np.bincount(cell[marked], minlength=counts.size).reshape(counts.shape)
