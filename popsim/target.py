"""One target judged in each patient: how long in range, whether attained, how badly missed."""

from __future__ import annotations

from collections.abc import Callable, Mapping

import numpy as np

from covariates.problems import Problem, ProblemsError
from covariates.sheet import DrugModel
from popsim.effect import concentration_at, effect_at, effect_curve, falls
from popsim.records import Judged, Target, WindowCourse

SHARE_SLACK = 1e-9  # a share found to 1e-12 of the window must not miss "80 %" by rounding
COURSE_OF = {"plasma": "plasma", "effect_site": "effect_site", "effect": "effect_site"}


def window_of(target: Target, lookup: Callable[[str], np.ndarray], n: int,
              until_min: float) -> tuple[np.ndarray, np.ndarray]:
    """Start and end of the window in minutes, (n,) each; either may be an attribute in minutes or hours.

    Raises ProblemsError where an attribute lies before time 0 or past the run's end, after which nobody is dosed. An
    end before its start is left to the solver, which marks that patient.
    """
    def minutes(edge: float | str) -> np.ndarray:
        if not isinstance(edge, str):
            return np.full(n, edge)
        times = lookup(edge) * (60.0 if edge.endswith("_h") else 1.0)
        wrong = ~((times >= 0) & (times <= until_min * (1 + 1e-12)))
        if wrong.any():
            raise ProblemsError(Problem(
                f'target "{target.name}": during', f"{edge} is {times[wrong][0]:g} min in a patient",
                f"0 to {until_min:g} min, the run's end", "lengthen [run] until, or mend the attribute"))
        return times

    return minutes(target.start), minutes(target.end)


def concentration_limits(target: Target, model: DrugModel, values: Mapping[str, np.ndarray],
                         n: int) -> tuple[np.ndarray, np.ndarray]:
    """The target's range as concentrations in mg/L, (n,) each; an effect's range differs from patient to patient."""
    if target.quantity != "effect":
        return np.full(n, target.low), np.full(n, target.high)
    at_low, at_high = (concentration_at(model, values, limit) for limit in (target.low, target.high))
    falling = falls(model, values)
    return np.where(falling, at_high, at_low), np.where(falling, at_low, at_high)


def judge(target: Target, model: DrugModel, values: Mapping[str, np.ndarray], course: WindowCourse,
          undosed: np.ndarray) -> Judged:
    """Turn what a course does in the window into what the target asks. Failed and undosed patients do not attain."""
    below, above = course.below, course.above
    lowest, highest, at_end = course.lowest, course.highest, course.at_end
    if target.quantity == "effect":
        falling = falls(model, values)
        below, above = np.where(falling, above, below), np.where(falling, below, above)
        extremes = effect_at(model, values, lowest), effect_at(model, values, highest)
        lowest, highest = np.where(falling, extremes[1], extremes[0]), np.where(falling, extremes[0], extremes[1])
        at_end = effect_at(model, values, at_end)
    failed = (course.status != 0) | undosed
    # half a limit and twice a limit are further out only where the limit is above zero
    far_below = (lowest < target.low / 2) & (target.low > 0)
    far_above = (highest > target.high * 2) & (target.high > 0)
    if target.rule == "share":
        attained = course.inside >= target.share_needed - SHARE_SLACK
    elif target.rule == "any":
        attained = course.touched
    elif target.rule == "always":
        attained = (lowest >= target.low) & (highest <= target.high)
    else:
        attained = (at_end >= target.low) & (at_end <= target.high)
    return Judged(
        failed=failed,
        attained=attained & ~failed,
        below=below, inside=course.inside, above=above,
        far_below=far_below & ~failed,
        far_above=far_above & ~failed,
    )


def grid_course(target: Target, model: DrugModel, values: Mapping[str, np.ndarray]) -> str | tuple[np.ndarray, ...]:
    """The target's course quantity as `solve.count_over_time` takes it: a course's name, or an effect's curve."""
    return effect_curve(model, values) if target.quantity == "effect" else COURSE_OF[target.quantity]
