"""One target judged in each patient: how long in range, whether attained, how badly missed."""

from __future__ import annotations

from collections.abc import Callable, Mapping

import numpy as np

from covariates.problems import Problem, ProblemsError
from covariates.sheet import DrugModel
from popsim.effect import concentration_at, effect_at, effect_curve, falls
from popsim.records import Judged, WindowCourse
from popsim.study_records import MINUTES_A_DAY, Target, needs_effect_site

SHARE_SLACK = 1e-9  # a share found to 1e-12 of the window must not miss "80 %" by rounding


def course_of(target: Target) -> str:
    """Which course of the solver a target is about: "plasma" or "effect_site"."""
    return "effect_site" if needs_effect_site(target) else "plasma"


def unbound_share(target: Target, model: DrugModel) -> float:
    """What the solver's concentrations are multiplied by: the fraction unbound where the target asks for unbound drug
    and the model was built on total plasma; 1 where it was built on unbound concentrations, so that it never counts
    twice.
    """
    follows = target.response.follows if target.response else target.quantity
    if not follows.startswith("unbound_") or model.measured_in["fluid"] == "unbound plasma":
        return 1.0
    return float(model.measured_in["fraction_unbound"])


def in_target_unit(target: Target, model: DrugModel, values: Mapping[str, np.ndarray],
                   concentration: np.ndarray) -> np.ndarray:
    """The target's course quantity at a concentration of the solver in mg/L, (n,) or (n, times): a concentration in
    mg/L, an effect, or a probability."""
    if target.quantity == "effect":
        return effect_at(model, values, concentration)
    level = concentration * unbound_share(target, model)
    if target.response is None:
        return level
    with np.errstate(divide="ignore"):
        return 1 / (1 + (target.response.half_mg_per_l / level) ** target.response.steepness)


def window_of(target: Target, lookup: Callable[[str], np.ndarray], n: int,
              until_min: float) -> tuple[np.ndarray, np.ndarray]:
    """Start and end of the window in minutes, (n,) each; either may be an attribute in minutes or hours.

    Raises ProblemsError where an attribute lies before time 0 or past the run's end, after which nobody is dosed. An
    end before its start is left to the solver, which marks that patient.
    """
    def minutes(edge: float | str) -> np.ndarray:
        if not isinstance(edge, str):
            return np.full(n, edge)
        times = lookup(edge)
        if times.dtype.kind == "b":
            raise ProblemsError(Problem(f'target "{target.name}": during', f"{edge} is true or false",
                                        "an attribute that counts minutes or hours"))
        times = times * (60.0 if edge.endswith("_h") else 1.0)
        wrong = ~((times >= 0) & (times <= until_min * (1 + 1e-12)))
        if wrong.any():
            raise ProblemsError(Problem(
                f'target "{target.name}": during', f"{edge} is {times[wrong][0]:g} min in a patient",
                f"0 to {until_min:g} min, the run's end", "lengthen [run] until, or mend the attribute"))
        return times

    return minutes(target.start), minutes(target.end)


def concentration_limits(target: Target, model: DrugModel, values: Mapping[str, np.ndarray],
                         n: int) -> tuple[np.ndarray, np.ndarray]:
    """The target's range as concentrations of the solver in mg/L, (n,) each; an effect's differs between patients."""
    if target.quantity != "effect":
        return tuple(np.full(n, _concentration_of(target, limit) / unbound_share(target, model))
                     for limit in (target.low, target.high))
    at_low, at_high = (concentration_at(model, values, limit) for limit in (target.low, target.high))
    falling = falls(model, values)
    return np.where(falling, at_high, at_low), np.where(falling, at_low, at_high)


def _concentration_of(target: Target, limit: float) -> float:
    """A limit as a concentration: of a probability, -1 where none is too low and inf where none is high enough."""
    if target.response is None:
        return limit
    if limit <= 0:
        return -1.0
    if limit >= 1:
        return float("inf")
    return target.response.half_mg_per_l * (limit / (1 - limit)) ** (1 / target.response.steepness)


def recovery_limits(target: Target, model: DrugModel, values: Mapping[str, np.ndarray], n: int) -> np.ndarray:
    """The level of recovery as a concentration of the solver in mg/L, (n,): recovered means below it."""
    if target.quantity == "effect":
        return concentration_at(model, values, target.recovers_at)
    return np.full(n, target.recovers_at / unbound_share(target, model))


def judge(target: Target, model: DrugModel, values: Mapping[str, np.ndarray], course: WindowCourse,
          undosed: np.ndarray) -> Judged:
    """Turn what a course does in the window into what the target asks. Failed and undosed patients do not attain."""
    below, above = course.below, course.above
    lowest, highest, at_end = (in_target_unit(target, model, values, level)
                               for level in (course.lowest, course.highest, course.at_end))
    if target.quantity == "effect":
        falling = falls(model, values)
        below, above = np.where(falling, above, below), np.where(falling, below, above)
        lowest, highest = np.where(falling, highest, lowest), np.where(falling, lowest, highest)
    if target.rule == "share":
        attained = course.inside >= target.share_needed - SHARE_SLACK
    elif target.rule == "any":
        attained = course.touched
    elif target.rule == "always":
        attained = (lowest >= target.low) & (highest <= target.high)
    else:
        attained = (at_end >= target.low) & (at_end <= target.high)
    measures = {"value": at_end} if target.instant else {}
    return _judged(target, (course.status != 0) | undosed, attained, (below, course.inside, above), lowest, highest,
                   measures)


def judge_value(target: Target, value: np.ndarray, status: np.ndarray, undosed: np.ndarray) -> Judged:
    """Judge one number of each patient, in the target's unit: an area, peak, trough, average or measured level."""
    below, above = value < target.low, value > target.high
    inside = ~below & ~above & ~np.isnan(value)
    shares = tuple(np.where(status == 0, one, np.nan) for one in (below, inside, above))
    return _judged(target, (status != 0) | undosed, inside, shares, value, value, {"value": value})


def _judged(target: Target, failed: np.ndarray, attained: np.ndarray, shares: tuple[np.ndarray, ...],
            lowest: np.ndarray, highest: np.ndarray, measures: dict[str, np.ndarray]) -> Judged:
    below, inside, above = shares
    # half a limit and twice a limit are further out only where the limit is above zero
    far_below = (lowest < target.low / 2) & (target.low > 0)
    far_above = (highest > target.high * 2) & (target.high > 0)
    return Judged(
        failed=failed,
        attained=attained & ~failed,
        below=below, inside=inside, above=above,
        far_below=far_below & ~failed,
        far_above=far_above & ~failed,
        ever_below=(lowest < target.low) & ~failed,
        ever_above=(highest > target.high) & ~failed,
        measures={name: np.where(failed, np.nan, values) for name, values in measures.items()},
    )


def all_attained(judged: list[Judged]) -> Judged:
    """Several targets as one: attained, and in range all the time, where every one of them is; failed where any is."""
    failed = np.any([one.failed for one in judged], axis=0)
    attained = np.all([one.attained for one in judged], axis=0)
    inside, none = attained.astype(np.float64), np.zeros(len(failed), dtype=bool)
    return Judged(failed, attained, 1 - inside, inside, 0 * inside, none, none, none, none)


def grid_course(target: Target, model: DrugModel, values: Mapping[str, np.ndarray]) -> str | tuple[np.ndarray, ...]:
    """What `solve.count_over_time` is to count for a target: a course in the solver's mg/L, or an effect's curve."""
    return effect_curve(model, values) if target.quantity == "effect" else course_of(target)


def grid_limits(target: Target, model: DrugModel, n: int) -> tuple[np.ndarray, np.ndarray]:
    """The range in the unit that is counted, (n,) each; without limits for a summary, which no instant has."""
    if target.summary:
        return np.full(n, -np.inf), np.full(n, np.inf)
    if target.quantity == "effect":
        return np.full(n, target.low), np.full(n, target.high)
    return concentration_limits(target, model, {}, n)


def summary_value(target: Target, model: DrugModel, course: np.ndarray, minutes: np.ndarray) -> np.ndarray:
    """A summary in the target's unit from what the solver gives of it: an area (mg/L min) over so many minutes, or a
    level (mg/L)."""
    level = course * unbound_share(target, model)
    if target.summary == "average":
        return level / minutes
    return level * (MINUTES_A_DAY / minutes) if target.per_day else level


def measured_level(model: DrugModel, level: np.ndarray, proportional: np.ndarray, additive: np.ndarray) -> np.ndarray:
    """A level (mg/L) as an assay would measure it, from two standard normal numbers of each patient.

    level x (1 + proportional error) + additive error. It may come out below zero, and stays so. Source: the combined
    error model as the sheets print it.
    """
    error = model.measurement_error
    return level * (1 + error.get("proportional", 0.0) * proportional) + error.get("additive", 0.0) * additive
