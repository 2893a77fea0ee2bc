"""How much one administration is: a dose scaled by a size or filling a volume, then floor, cap and rounding."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from covariates.problems import Problem, ProblemsError
from covariates.sheet import parameters_of
from covariates.units import Quantity
from popsim.study_records import DoseStep, Loading

ROUNDING_SLACK = 1e-9  # 0.15 mg in steps of 0.1 mg is 1.4999999999999998 steps, and must round up
Lookup = Callable[[str], np.ndarray]


def as_given(wanted: np.ndarray, at_least: float | None, at_most: float | None,
             round_to: float | None) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Floor, cap, round half up, never above the cap: (given, floored, capped, rounded).

    105 mg with a cap of 100 mg and steps of 15 mg is given as 90 mg: 100 would round up to 105, above the cap.
    """
    given = np.array(wanted, dtype=np.float64)
    floored = np.zeros(len(given), dtype=bool)
    capped = np.zeros(len(given), dtype=bool)
    rounded = np.zeros(len(given), dtype=bool)
    if at_least is not None:
        floored = given < at_least
        given[floored] = at_least
    if at_most is not None:
        capped = given > at_most
        given[capped] = at_most
    if round_to is not None:
        steps = np.floor(given / round_to + 0.5 + ROUNDING_SLACK)
        if at_most is not None:
            steps = np.minimum(steps, np.floor(at_most / round_to + ROUNDING_SLACK))
        in_steps = steps * round_to
        rounded = np.abs(in_steps - given) > ROUNDING_SLACK * np.maximum(given, round_to)
        given = np.where(rounded, in_steps, given)
    return given, floored, capped, rounded


def loading_mg(loading: Loading, step: DoseStep, lookup: Lookup, gets_it: np.ndarray) -> np.ndarray:
    """mg that bring each patient's stated or typical volume to the concentration: 25 mg/L in 50 L is 1250 mg."""
    if loading.model is None:
        return loading.concentration.value * loading.litres_per_kg * _size(step, lookup, gets_it, loading.text)
    typical = parameters_of(loading.model, lookup, {}, len(gets_it))
    volumes = ("V1", "V2", "V3") if loading.volume == "Vss" else ("V1",)
    litres = sum(typical[name] for name in volumes if name in typical)
    unfit = gets_it & ~((litres > 0) & np.isfinite(litres))
    if unfit.any():
        raise ProblemsError(Problem(f"dose {step.number}: {loading.text}", f"no volume in {unfit.sum():,} patients",
                                    "a volume above zero", "state a volume, or let where leave these patients out"))
    return loading.concentration.value * litres


def scaled_dose(quantity: Quantity, step: DoseStep, lookup: Lookup, gets_it: np.ndarray) -> np.ndarray:
    """mg or mg/min for each patient; a size by which nobody can be dosed is refused."""
    if quantity.kind in ("mass", "rate"):
        return np.full(len(gets_it), quantity.value)
    return quantity.value * _size(step, lookup, gets_it, quantity.text)


def _size(step: DoseStep, lookup: Lookup, gets_it: np.ndarray, written: str) -> np.ndarray:
    size = np.broadcast_to(lookup(step.by), gets_it.shape)
    if size.dtype.kind not in "fiu":
        raise ProblemsError(Problem(f"dose {step.number}: {written} by {step.by}", f"{step.by} is no number",
                                    "a size, such as weight"))
    unfit = gets_it & ~((size > 0) & np.isfinite(size))
    if unfit.any():
        raise ProblemsError(Problem(f"dose {step.number}: {written} by {step.by}",
                                    f"{step.by} is zero, negative or unknown in {unfit.sum():,} patients",
                                    "a size above zero", "dose by another size, or let where leave these patients out"))
    return size
