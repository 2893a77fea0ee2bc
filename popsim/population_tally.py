"""Who is simulated, in integer counts: by group, by total weight, and by age and weight with what became of them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from itertools import product

import numpy as np

from covariates.catalogue import attributes_needed, compute
from popsim.records import Judged
from popsim.study_records import Protocol, Study

LEAN = "lean_body_mass_janmahasatian"
GROUP_MEASURES = ("age", "weight", "height", "bmi", LEAN)
SIZE_MEASURES = ("weight", LEAN, "ideal_body_weight_devine", "adjusted_body_weight")
FOR_ADULTS = (LEAN, "ideal_body_weight_devine", "adjusted_body_weight")  # the equations' own people
ADULT_YEARS = 18.0
SEXES = ("female", "male")
AGE_STEP_YEARS, AGE_BINS = 10.0, 13  # the last bin of each is open: 120 years, 200 kg and more
WEIGHT_STEP_KG, WEIGHT_BINS = 10.0, 21
TENTHS = 10_000  # values are counted in tenths from 0 to 1000; a bin below and one above hold the rest


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
            by_group={name: counts(groups, TENTHS + 3) for name in GROUP_MEASURES},
            by_weight={name: np.zeros((2, WEIGHT_BINS, TENTHS + 3), dtype=np.int32) for name in size_measures(study)},
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
            of, tenths = _counted(name, attributes)
            for group in range(members.shape[1]) if of is not None else ():
                np.add.at(counts[group], tenths[members[of, group] > 0], 1)
        if "weight" not in attributes:
            return None
        heavy = _bin(attributes["weight"], WEIGHT_STEP_KG, WEIGHT_BINS)
        for name, counts in self.by_weight.items() if female is not None else ():
            of, tenths = _counted(name, attributes)
            if of is not None:
                np.add.at(counts, (1 - female[of].astype(np.int64), heavy[of], tenths), 1)
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


def _counted(name: str, attributes: Mapping[str, np.ndarray]) -> tuple[np.ndarray | None, np.ndarray | None]:
    """Which patients have this measure, and theirs in tenths; None where the patients' attributes do not tell it."""
    if not attributes_needed(name, attributes) <= attributes.keys():
        return None, None
    of = np.ones(len(next(iter(attributes.values()))), dtype=bool)
    if name in FOR_ADULTS and "age" in attributes:
        of = attributes["age"] >= ADULT_YEARS
    if not of.any():
        return None, None
    values = compute(name, {key: column[of] for key, column in attributes.items()})
    return of, np.clip(np.rint(values * 10) + 1, 0, TENTHS + 2).astype(np.int64)


def _bin(values: np.ndarray, step: float, bins: int) -> np.ndarray:
    return np.clip(np.floor(values / step), 0, bins - 1).astype(np.int64)


def _add_cells(counts: np.ndarray, cell: np.ndarray, marked: np.ndarray) -> None:
    counts += np.bincount(cell[marked], minlength=counts.size).reshape(counts.shape)


def tenths_quantile(counts: np.ndarray, share: float) -> float:
    """Smallest counted value with at least `share` of the counts at or below it, to a tenth; NaN without counts."""
    total = int(counts.sum())
    if total == 0:
        return float("nan")
    place = int(np.searchsorted(np.cumsum(counts), max(int(np.ceil(share * total - 1e-9)), 1)))
    return float("-inf") if place == 0 else float("inf") if place == TENTHS + 2 else (place - 1) / 10
