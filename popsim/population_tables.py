"""Counts of who was simulated -> tables: people.csv by group, attainment_map.csv by age and weight, body_size.csv."""

from __future__ import annotations

import math
from collections.abc import Callable
from functools import partial

import numpy as np
import pandas as pd

from popsim.counted import QUANTILES, tenths_quantile
from popsim.estimate import quantile_error, wilson
from popsim.population_tally import (
    AGE_BINS, AGE_STEP_YEARS, GROUP_MEASURES, SEXES, WEIGHT_BINS, WEIGHT_STEP_KG, dosed_by, size_measures,
)  # fmt: skip
from popsim.study_records import Study
from popsim.tally import Tally, range_names


def people(study: Study, tally: Tally) -> pd.DataFrame:
    """One row per group: how many, share of women, quantiles of age, weight, height, BMI and lean mass (adults only).

    Empty cells where a list does not say; values to a tenth.
    """
    counts, rows = tally.population, []
    for g, group in enumerate(study.group_names):
        row: dict = {"group": group, "patients": int(tally.patients[g]),
                     "female": int(counts.female[g]) / (int(counts.sexed[g]) or math.nan)}
        for name in GROUP_MEASURES:
            row |= _quantiles(f"{name}_", counts.by_group[name][g], tally.clusters is None)
        rows.append(row)
    return pd.DataFrame(rows)


def _quantiles(lead: str, counts: np.ndarray, independent: bool) -> dict[str, float]:
    """Quantiles with their Monte Carlo errors, which are not known of people drawn again and again."""
    quantile, n = partial(tenths_quantile, counts), int(counts.sum())
    found = {f"{lead}{name}": quantile(share) for name, share in QUANTILES.items()}
    return found | {f"{lead}{name}_error": quantile_error(quantile, share, n) if independent else math.nan
                    for name, share in QUANTILES.items()}


MAP_COLUMNS = ("model", "protocol", "target", "age_from", "age_to", "weight_from", "weight_to", "patients", "failed",
               "attained", "attained_low", "attained_high", "outside_model")


def attainment_map(study: Study, tally: Tally) -> pd.DataFrame:
    """One row per model, protocol, target and cell of age (years) and total weight (kg) that holds patients.

    A cell takes in its lower limits; the last ones are open (inf). Failed patients count as not attained. No intervals
    for a list that is drawn from again and again: a cell may hold one person many times.
    """
    counts, rows = tally.population, []
    for (m, p, t), attained in counts.attained.items():
        low, high = wilson(attained, np.where(tally.clusters is None, counts.cells, 0))
        for i, j in zip(*np.nonzero(counts.cells), strict=True):
            n = int(counts.cells[i, j])
            known = bool(range_names(study.models[m]))
            rows.append((study.models[m].name, study.protocols[p].name, study.targets[t].name,
                         *_limits(i, AGE_STEP_YEARS, AGE_BINS), *_limits(j, WEIGHT_STEP_KG, WEIGHT_BINS), n,
                         int(counts.failed[m, p, t][i, j]), int(attained[i, j]) / n, low[i, j], high[i, j],
                         int(counts.outside[m][i, j]) / n if known else math.nan))
    return pd.DataFrame(rows, columns=list(MAP_COLUMNS))


def _limits(place: int, step: float, bins: int) -> tuple[float, float]:
    return place * step, math.inf if place == bins - 1 else (place + 1) * step


SIZE_COLUMNS = ("measure", "sex", "weight_from", "weight_to", "patients", *QUANTILES, "doses",
                *(f"{name}_error" for name in QUANTILES))


def body_size(study: Study, tally: Tally) -> pd.DataFrame:
    """One row per measure of body size, sex and bin of total weight: quantiles in kg, to a tenth.

    `doses`: whether a protocol of the study doses by this measure.
    """
    dosed = set().union(*(dosed_by(protocol) for protocol in study.protocols))
    rows = []
    for name in size_measures(study):
        for s, sex in enumerate(SEXES):
            for j, counts in enumerate(tally.population.by_weight[name][s]):
                if counts.any():
                    rows.append({"measure": name, "sex": sex,
                                 **dict(zip(("weight_from", "weight_to"), _limits(j, WEIGHT_STEP_KG, WEIGHT_BINS),
                                            strict=True)),
                                 "patients": int(counts.sum()), **_quantiles("", counts, tally.clusters is None),
                                 "doses": name in dosed})
    return pd.DataFrame(rows, columns=list(SIZE_COLUMNS))


POPULATION_TABLES: dict[str, Callable[[Study, Tally], pd.DataFrame]] = {
    "people": people, "attainment_map": attainment_map, "body_size": body_size}
