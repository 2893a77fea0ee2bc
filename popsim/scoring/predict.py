"""What a model predicts for measured people: the typical prediction, and what chance would make of it."""

from __future__ import annotations

from dataclasses import dataclass, fields, replace
from typing import TypeVar

import numpy as np

from covariates.catalogue import attributes_needed
from covariates.problems import ProblemsError
from covariates.sheet import DrugModel
from popsim import solve
from popsim.lookup import Lookup
from popsim.parameters import individual_parameters
from popsim.records import Disposition, Timeline
from popsim.scoring.files import Measured
from popsim.streams import normals
from popsim.study_records import Variability

TYPICAL = Variability(between_subject=False, scale=1.0, from_model=None)
AS_PUBLISHED = Variability(between_subject=True, scale=1.0, from_model=None)
Record = TypeVar("Record", Disposition, Timeline)


@dataclass(frozen=True)
class Predictions:
    """Of one model, for m measurements, in mg/L.

    typical    (m,) float64, between-subject variability left out; NaN where the patient cannot be computed
    spread     (replicates, m) float64, between-subject variability alone; None where the sheet has none
    with_error (replicates, m) float64, measurement error too; None where the sheet has none of either
    """

    typical: np.ndarray
    spread: np.ndarray | None
    with_error: np.ndarray | None


def rows_of(record: Record, rows: slice | np.ndarray) -> Record:
    """The same record (Disposition, Timeline) for some of its patients, or for one of them many times."""
    return replace(record, **{field.name: getattr(record, field.name)[rows] for field in fields(record)})


def lacking(model: DrugModel, measured: Measured) -> str:
    """Why this model cannot be asked about these people; empty where it can."""
    names = {*model.needs, *model.switches, *model.numbers, *model.built_on.ranges}
    missing: set[str] = set()
    for name in names:
        if name not in measured.attributes:
            try:
                missing |= attributes_needed(name, measured.attributes)
            except ProblemsError:
                missing.add(name)
    if missing:
        return f"needs {', '.join(sorted(missing))}, which the people's file lacks"
    for quantity in sorted(set(measured.quantity)):
        if not np.isfinite(_as_measured(model, quantity)):
            return f"gives no fraction unbound, by which {quantity} could be had of {model.measured_in['fluid']}"
    return ""


def predict(model: DrugModel, measured: Measured, replicates: int, seed: int) -> Predictions:
    """Predictions of every measurement; `replicates` people (at most 8192) like each patient give the chance."""
    people = measured.people()
    typical = np.empty(len(measured.value))
    spread = np.empty((replicates, len(measured.value))) if model.spread else None
    everyone = solve.disposition(individual_parameters(model, TYPICAL, seed, people, Lookup(people.attributes)).values)
    factor = np.array([_as_measured(model, quantity) for quantity in measured.quantity])
    for i in range(len(measured.labels)):
        own = np.flatnonzero(measured.patient == i)
        times, timeline = measured.time_min[own], measured.timelines[i]
        typical[own] = _before_doses(rows_of(everyone, slice(i, i + 1)), timeline, times)[0]
        if spread is not None:
            copies = measured.people(i, replicates)
            drawn = individual_parameters(model, AS_PUBLISHED, seed, copies, Lookup(copies.attributes))
            same = rows_of(timeline, np.zeros(replicates, dtype=np.int64))
            spread[:, own] = _before_doses(solve.disposition(drawn.values), same, times)
    typical *= factor
    if spread is not None:
        spread *= factor
    return Predictions(typical, spread, _with_error(model, measured, spread, typical, replicates, seed))


def _as_measured(model: DrugModel, quantity: str) -> float:
    """What turns the sheet's concentration into the measured quantity; NaN where the sheet cannot say."""
    predicts_unbound = model.measured_in.get("fluid") == "unbound plasma"
    if predicts_unbound == (quantity == "unbound_plasma"):
        return 1.0
    fraction = float(model.measured_in.get("fraction_unbound", np.nan))
    return 1.0 / fraction if predicts_unbound else fraction


def _before_doses(disposition: Disposition, timeline: Timeline, times: np.ndarray) -> np.ndarray:
    """Plasma (n, k) at the times of sampling; a sample at the time of a bolus is taken as drawn just before it."""
    grid, place = np.unique(times, return_inverse=True)
    plasma, _ = solve.courses_on_grid(disposition, timeline, grid)
    given = np.array([timeline.bolus_mg[0, timeline.time_min[0] == time].sum() for time in grid])
    return np.maximum(plasma - given * disposition.weights.sum(axis=1)[:, None], 0.0)[:, place]


def at_a_bolus(measured: Measured) -> int:
    """How many samples share their time with a bolus."""
    return sum(bool(timeline.bolus_mg[0, timeline.time_min[0] == time].sum() > 0)
               for time, timeline in zip(measured.time_min, (measured.timelines[i] for i in measured.patient),
                                         strict=True))


def infusing(measured: Measured) -> np.ndarray:
    """(m,) bool: whether an infusion was running up to that moment."""
    running = np.zeros(len(measured.value), dtype=bool)
    for k, (i, time) in enumerate(zip(measured.patient, measured.time_min, strict=True)):
        timeline = measured.timelines[i]
        before = np.flatnonzero(timeline.time_min[0] < time)
        running[k] = before.size > 0 and timeline.rate_mg_per_min[0, before[-1]] > 0
    return running


def _with_error(model: DrugModel, measured: Measured, spread: np.ndarray | None, typical: np.ndarray,
                replicates: int, seed: int) -> np.ndarray | None:
    """Proportional error as the SD of ln, additive error in mg/L: C exp(p z) + a z'."""
    proportional = float(model.measurement_error.get("proportional", 0.0))
    additive = float(model.measurement_error.get("additive", 0.0))
    if not (proportional or additive):
        return None
    free = np.array(np.broadcast_to(typical, (replicates, len(typical))) if spread is None else spread)
    for i in range(len(measured.labels)):
        for k, column in enumerate(np.flatnonzero(measured.patient == i)):
            luck = [normals(seed, f"{kind} measurement error {k}", i)[:replicates]
                    for kind in ("proportional", "additive")]
            free[:, column] = free[:, column] * np.exp(proportional * luck[0]) + additive * luck[1]
    return free
