"""Patients + drug model + luck -> individual parameters, and who lies outside the people the model was built on."""

from __future__ import annotations

from collections.abc import Callable, Mapping

import numpy as np

from covariates.sheet import DrugModel, parameters_of
from covariates.variability import cholesky_factor, covariance_from
from popsim.records import IndividualParameters, Patients
from popsim.streams import normals
from popsim.study_records import Variability

VOLUMES_AND_CLEARANCES = ("V1", "V2", "V3", "CL", "Q2", "Q3")
RANGE_SLACK = 1e-9


def individual_parameters(model: DrugModel, variability: Variability, seed: int, patients: Patients,
                          lookup: Callable[[str], np.ndarray]) -> IndividualParameters:
    """Parameters of each patient of a block in mg, L, min. The same patient has the same luck under every model."""
    effects = random_effects(model, variability, seed, patients)
    n = len(patients)
    values = parameters_of(model, lookup, effects, n, forms_used(model, variability))
    beyond = outside_ranges(model, lookup)
    outside = np.zeros(n, dtype=bool)
    for marked in beyond.values():
        outside |= marked
    return IndividualParameters(values, outside, beyond)


def spread_used(model: DrugModel, variability: Variability) -> dict[str, float]:
    """SD of the random effect (of ln where it is lognormal) of each parameter that varies in this study: the sheet's
    own or those borrowed, those that the study gives itself, scaled."""
    if not variability.between_subject:
        return {}
    lender = variability.from_model
    names = {equation.name for equation in model.equations}
    if lender is None or lender.name == model.name:
        spread: Mapping[str, float] = model.spread
    else:
        spread = {name: omega for name, omega in lender.spread.items()
                  if name in VOLUMES_AND_CLEARANCES and name in names}
    own = {name: omega for name, (omega, _) in variability.own.items() if name in names}
    return {name: omega * variability.scale for name, omega in {**spread, **own}.items() if own.get(name) != 0}


def forms_used(model: DrugModel, variability: Variability) -> dict[str, str]:
    """Parameter -> form of its random effect, where it is not lognormal."""
    own = {name: form for name, (_, form) in variability.own.items()}
    forms = {**(variability.from_model or model).spread_forms, **own}
    used = spread_used(model, variability)
    return {name: form for name, form in forms.items() if form != "lognormal" and name in used}


def random_effects(model: DrugModel, variability: Variability, seed: int, patients: Patients) -> dict[str, np.ndarray]:
    """Random effects, (n,) for each parameter that varies: deviations of ln from the typical value, where lognormal."""
    spread = spread_used(model, variability)
    luck = {name: normals(seed, f"spread {name}", patients.block)[patients.slots] for name in spread}
    source = variability.from_model or model
    together = {pair: value for pair, value in source.correlations.items() if pair[0] in spread and pair[1] in spread}
    if not together:
        return {name: omega * luck[name] for name, omega in spread.items()}
    # correlated first, scaled after, so that a scale of 0 is no special case
    factor = cholesky_factor(covariance_from(dict.fromkeys(spread, 1.0), together))
    correlated = factor @ np.stack(list(luck.values()))
    return {name: omega * row for (name, omega), row in zip(spread.items(), correlated, strict=True)}


def outside_ranges(model: DrugModel, lookup: Callable[[str], np.ndarray]) -> dict[str, np.ndarray]:
    """Attribute -> who lies outside the range of the people the model was built on."""
    beyond = {}
    for name, limit in model.built_on.ranges.items():
        value = lookup(name)
        beyond[name] = ((value < limit.low - RANGE_SLACK * abs(limit.low))
                        | (value > limit.high + RANGE_SLACK * abs(limit.high)))
    if model.built_on.sex is not None:
        beyond["sex"] = lookup("sex") != model.built_on.sex
    return beyond
