"""One target judged in one block: the solver's courses and areas turned into what the target asks."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from popsim import solve
from popsim.lookup import Lookup
from popsim.records import (
    Disposition, IndividualParameters, Judged, Patients, Received, Timeline, WindowCourse,
)  # fmt: skip
from popsim.streams import normals
from popsim.study_records import Study, Target
from popsim.target import (
    concentration_limits, course_of, judge, judge_value, measured_level, recovery_limits, summary_value, window_of,
)  # fmt: skip

AREAS = ("area_under_curve", "average")
JUST_BEFORE_MIN = 1.0  # a trough is looked at from so long before; any time would do


def judge_target(study: Study, m: int, target: Target, patients: Patients, parameters: IndividualParameters,
                 disposition: Disposition, timeline: Timeline, received: Received,
                 lookup: Lookup, steady: Timeline | None, numbers: bool) -> tuple[Judged, np.ndarray]:
    """What a target finds in each patient of a block under model `m`, and each patient's status.

    steady    the regimen as repeated for ever, None where it is not repeated
    numbers   whether each patient's own numbers are wanted beside attainment
    """
    judged, status = _judge(study, m, target, patients, parameters, disposition, timeline, received, lookup, steady,
                            numbers)
    return (judged if numbers else replace(judged, measures={})), status


def _judge(study: Study, m: int, target: Target, patients: Patients, parameters: IndividualParameters,
           disposition: Disposition, timeline: Timeline, received: Received, lookup: Lookup, steady: Timeline | None,
           numbers: bool) -> tuple[Judged, np.ndarray]:
    model, n = study.models[m], len(disposition)
    if target.steady:
        assert steady is not None
        timeline, start, end = steady, np.zeros(n), steady.interval_min
    else:
        start, end = window_of(target, lookup, n, study.until_min)
    if target.summary or target.measured:
        level, status = _one_number(target, disposition, timeline, start, end)
        if target.measured:
            luck = (normals(study.seed, f"assay {name}", patients.block)[patients.slots]
                    for name in ("proportional", "additive"))
            level = measured_level(model, level, *luck)
        judged = judge_value(target, summary_value(target, model, level, end - start), status, received.undosed)
        if numbers and steady is not None and not target.steady and target.summary in AREAS:
            at_steady, _ = solve.area_under_curve(disposition, steady, "plasma", np.zeros(n), steady.interval_min)
            share = level / (end - start) / (at_steady / steady.interval_min)
            judged = replace(judged, measures=judged.measures | {"of_steady_state": share})
        return judged, status
    low, high = concentration_limits(target, model, parameters.values, n)
    course = solve.window_course(disposition, timeline, course_of(target), low, high, start, end)
    judged = judge(target, model, parameters.values, course, received.undosed)
    if numbers and target.over_time and not target.steady:
        more = _times(study, target, m, parameters, disposition, timeline, received, low, start, end, course)
        judged = replace(judged, measures=judged.measures | {
            name: np.where(judged.failed, np.nan, minutes) for name, minutes in more.items()})
    return judged, course.status


def _one_number(target: Target, disposition: Disposition, timeline: Timeline, start: np.ndarray,
                end: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """The area (mg/L min), or the peak, the trough or the level (mg/L), of plasma in the window."""
    if target.summary in AREAS:
        return solve.area_under_curve(disposition, timeline, "plasma", start, end)
    anything = np.full(len(disposition), -np.inf), np.full(len(disposition), np.inf)
    if target.summary == "trough":
        start = np.maximum(end - JUST_BEFORE_MIN, 0.0)
    course = solve.window_course(disposition, timeline, "plasma", *anything, start, end)
    return (course.highest if target.summary == "peak" else course.at_end), course.status


def _times(study: Study, target: Target, m: int, parameters: IndividualParameters, disposition: Disposition,
           timeline: Timeline, received: Received, low: np.ndarray, start: np.ndarray, end: np.ndarray,
           course: WindowCourse) -> dict[str, np.ndarray]:
    """Minutes from time 0 until the course first reaches the range's lower limit (inf: not before the window's end),
    and from the last dose until it has recovered (inf: not before the run's end)."""
    n, found = len(disposition), {}
    anything = np.full(n, np.inf)
    if np.isfinite(low).any():
        found["first_reached_min"] = _first_reached(target, disposition, timeline, low, start, end, course)
    if target.recovers_at is not None:
        level = recovery_limits(target, study.models[m], parameters.values, n)
        after = solve.window_course(disposition, timeline, course_of(target), -anything, level,
                                    received.last_given_min, np.full(n, study.until_min))
        waited = np.maximum(after.last_above_min - received.last_given_min, 0.0)
        found["recovery_min"] = np.where(after.at_end > level, np.inf, waited)
    return found


def _first_reached(target: Target, disposition: Disposition, timeline: Timeline, low: np.ndarray, start: np.ndarray,
                   end: np.ndarray, course: WindowCourse) -> np.ndarray:
    """Minutes until a course first reaches `low`, inf where not before `end`; `course` is what it does in the window.

    Looked for before the window, then in it. The effect site moves without jumps: whoever was below first reaches `low`
    where the window's course first lies in range. Plasma may jump over the range, and is looked through again.
    """
    which = course_of(target)

    def minutes(who: np.ndarray, since: np.ndarray, until: np.ndarray) -> np.ndarray:
        part = solve.window_course(_of(disposition, who), _of(timeline, who), which, low[who], np.full(who.sum(), np.inf),
                                   since[who], until[who])
        return part.first_inside_min

    reached = np.full(len(disposition), np.inf)
    early = start > 0
    reached[early] = minutes(early, np.zeros(len(start)), start)
    late = np.isinf(reached)
    reached[late] = course.first_inside_min[late] if which == "effect_site" else minutes(late, start, end)
    return reached


def _of(record: Disposition | Timeline, who: np.ndarray) -> Disposition | Timeline:
    """The same record for some of its patients only."""
    return replace(record, **{name: values[who] for name, values in vars(record).items()})
