"""Quarters of the patients by covariates, to see who gains and who loses."""

from __future__ import annotations

from collections.abc import Callable, Mapping

import numpy as np

from popsim.lookup import Lookup
from popsim.patients.draw import blocks
from popsim.study_records import Study

SLICED_BY = ("age", "weight", "bmi", "serum_creatinine")
QUARTILES = (0.25, 0.5, 0.75)


def quartile_cuts(study: Study) -> dict[str, np.ndarray]:
    """The three quartiles of each covariate among the patients of the first block (a list: its first 8,192 people).

    Empty for a single protocol. Serum creatinine only where a model looks at it.
    """
    if len(study.protocols) == 1:
        return {}
    patients = next(iter(blocks(study.population, study.seed)))
    has, lookup = patients.attributes.keys(), Lookup(patients.attributes)
    names = [name for name in SLICED_BY if name in has or (name == "bmi" and {"weight", "height"} <= has)]
    if not any("creatinine" in need for model in study.models for need in model.needs):
        names = [name for name in names if name != "serum_creatinine"]
    cuts = {name: np.quantile(lookup(name), QUARTILES) for name in names}
    return {name: cut for name, cut in cuts.items() if len(set(cut)) == len(QUARTILES)}


def quartile_members(cuts: Mapping[str, np.ndarray], lookup: Callable[[str], np.ndarray], count: int) -> np.ndarray:
    """(count, 4 x covariates) bool: for each covariate the quarter that each patient belongs to, upper ends inside."""
    inside = np.zeros((count, 4 * len(cuts)), dtype=bool)
    for place, (name, cut) in enumerate(cuts.items()):
        inside[np.arange(count), 4 * place + np.searchsorted(cut, lookup(name))] = True
    return inside
