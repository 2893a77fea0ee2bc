"""Whom the covariate equations of a study mislead in, and who receives more than anyone whom a model was built on."""

from __future__ import annotations

from collections.abc import Collection

import numpy as np

from covariates.flags import equations_behind, flags_of
from covariates.sheet import DrugModel
from popsim.lookup import Lookup
from popsim.records import Received
from popsim.study_records import Study

SLACK = 1e-9


def covariates_used(study: Study) -> list[str]:
    """Every covariate that a study's models, protocols, groups and limits use, sorted."""
    names: set[str] = set()
    for model in study.models:
        names |= model.needs
    for protocol in study.protocols:
        for step in protocol.steps:
            conditions = [step.where, *(variant.where for variant in step.variants)]
            names |= {name for condition in conditions if condition is not None for name in condition.names}
            if any(dose is not None and "_per_" in dose.kind for variant in step.variants
                   for dose in (variant.amount, variant.rate)):
                names.add(step.by)
            for loading in (variant.loading for variant in step.variants if variant.loading is not None):
                names |= {step.by} if loading.model is None else loading.model.needs
    for _, where in study.groups:
        names |= where.names
    if study.population.where is not None:
        names |= study.population.where.names
    return sorted(names)


def flag_counts(study: Study, lookup: Lookup, given: Collection[str]) -> dict[tuple[str, str], int]:
    """(equation, words of its flag) -> how many patients of a block it is true of."""
    marks: dict[tuple[str, str], np.ndarray] = {}
    for name in covariates_used(study):
        marks |= flags_of(name, lookup, given)
    return {flag: int(np.count_nonzero(mark)) for flag, mark in marks.items()}


def flag_notes(study: Study, counts: dict[tuple[str, str], int], patients: int) -> list[str]:
    """One sentence for each flag that is true of anybody, with the models whose answer it touches."""
    notes = []
    for (equation, words), count in sorted(counts.items()):
        if count:
            models = [model.name for model in study.models
                      if any(equation in equations_behind(name) for name in model.needs)]
            used = f" (used by {', '.join(models)})" if models else ""
            notes.append(f"{equation}{used}: {count:,} of {patients:,} patients are {words}.")
    return notes


def beyond_total(model: DrugModel, received: Received, lookup: Lookup) -> np.ndarray:
    """Who receives more in all than anyone whom the model was built on, (n,) bool; nobody where that is not known."""
    largest = model.built_on.largest_total
    if largest is None:
        return np.zeros(len(received.total_mg), dtype=bool)
    limit = largest.value * (lookup("weight") if largest.kind == "mass_per_kg" else 1.0)
    return received.total_mg > limit * (1 + SLACK)
