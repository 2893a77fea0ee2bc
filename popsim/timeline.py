"""Dose steps -> what each patient is given, and when. Sees covariates only, never drawn parameters."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from covariates.formula import Formula
from covariates.problems import Problem, ProblemsError
from popsim.amounts import ROUNDING_SLACK, Lookup, as_given, loading_mg, scaled_dose
from popsim.records import Received, Timeline
from popsim.study_records import DoseStep, DoseVariant, Protocol

FAR_MIN = 1e9  # no run is as long
GAP_MIN = 1e-9  # between two infusions: no pause, but the rounding of start + duration


@dataclass(frozen=True)
class Administration:
    """One administration of dose step `step`: (n,) arrays. A bolus has duration 0; who does not get it has amount 0."""

    step: int
    start_min: float
    duration_min: np.ndarray
    amount_mg: np.ndarray
    gets_it: np.ndarray
    oral: bool


@dataclass
class Changes:
    """(n,) bool each: who had any administration changed on its way from the card to the syringe."""

    capped: np.ndarray
    floored: np.ndarray
    rounded: np.ndarray
    impossible: np.ndarray
    too_fast: np.ndarray

    @classmethod
    def none(cls, n: int) -> Changes:
        return cls(*(np.zeros(n, dtype=bool) for _ in range(5)))


def build_timeline(protocol: Protocol, lookup: Lookup, n: int, until_min: float) -> tuple[Timeline, Received]:
    """The events of n patients under a protocol, and what they receive until the run's end.

    Raises ProblemsError when a patient falls in two bands of a step, or in none, or is reached by no step at all,
    unless the protocol allows patients without a dose.
    """
    administrations, changes = administrations_of(protocol, lookup, n, until_min)
    reached = np.zeros(n, dtype=bool)
    for administration in administrations:
        reached |= administration.gets_it
    if not protocol.no_dose_allowed and not reached.all():
        raise _left_out(protocol, "no dose step covers", ~reached)
    timeline, longest = _events(administrations, n, until_min)
    total = np.zeros(n)
    for administration in administrations:
        total += _within_run(administration, until_min)
    received = Received(total, changes.capped, changes.floored, changes.rounded, changes.impossible, total == 0,
                        longest, changes.too_fast, _vials(protocol, administrations, n, until_min),
                        _last_given(administrations, n, until_min))
    return timeline, received


def _vials(protocol: Protocol, administrations: list[Administration], n: int, until_min: float) -> np.ndarray:
    """Containers opened when each administration opens its own; 0 without a strength and a vial."""
    vials = np.zeros(n, dtype=np.int64)
    if protocol.strength_mg_per_ml is None or protocol.vial_ml is None:
        return vials
    for administration in administrations:
        volume = _within_run(administration, until_min) / protocol.strength_mg_per_ml
        vials += np.ceil(volume / protocol.vial_ml - ROUNDING_SLACK).astype(np.int64)
    return vials


def _last_given(administrations: list[Administration], n: int, until_min: float) -> np.ndarray:
    """When each patient's last dose or infusion ends, at most the run's end; 0 for who gets none."""
    last = np.zeros(n)
    for administration in administrations:
        given = administration.gets_it & (administration.amount_mg > 0)
        last = np.where(given, np.maximum(last, administration.start_min + administration.duration_min), last)
    return np.minimum(last, until_min)


def administrations_of(protocol: Protocol, lookup: Lookup, n: int,
                       until_min: float) -> tuple[list[Administration], Changes]:
    """Every administration of a protocol to n patients, after floors, caps and rounding."""
    changes = Changes.none(n)
    administrations: list[Administration] = []
    for step in protocol.steps:
        administrations += _of_step(protocol, step, lookup, n, until_min, changes)
    if protocol.pump_mg_per_min is not None:
        for administration in administrations:
            allowed = protocol.pump_mg_per_min * administration.duration_min * (1 + ROUNDING_SLACK)
            changes.too_fast |= (administration.duration_min > 0) & (administration.amount_mg > allowed)
    if protocol.impossible_refused and (impossible := changes.impossible | changes.too_fast).any():
        raise _impossible(protocol, changes, impossible)
    return administrations, changes


def _impossible(protocol: Protocol, changes: Changes, who: np.ndarray) -> ProblemsError:
    what = [words for words, marked in (("comes out as zero", changes.impossible),
                                        ("is faster than the pump can give", changes.too_fast)) if marked.any()]
    return ProblemsError(Problem(
        f'protocol "{protocol.name}"', f"a dose that {' or '.join(what)} in {who.sum():,} of {len(who):,} patients "
        "looked at", "doses that can be given to everyone",
        'impossible = "warn" in the protocol counts these patients instead'))


def steady_timeline(protocol: Protocol, lookup: Lookup, n: int) -> Timeline | None:
    """One interval of what a protocol keeps repeating to the run's end, as if repeated for ever; None where nothing is.

    The interval begins with the first dose of the first such step; what is given only for a time is left out. A
    patient whom no repeated step reaches has an endless interval. Raises ProblemsError where a patient would have two
    different intervals.
    """
    kept = [step for step in protocol.steps if step.maintained]
    if not kept:
        return None
    interval = np.full(n, np.inf)
    for step in kept:
        for variant in step.variants:
            gets_it = holds(step.where, lookup, n) & holds(variant.where, lookup, n)
            if (np.isfinite(interval) & (interval != variant.every_min) & gets_it).any():
                raise ProblemsError(Problem(f'protocol "{protocol.name}"', "steps that repeat at different intervals",
                                            "one interval for each patient, for a target at steady state"))
            interval[gets_it] = variant.every_min
    first = min(variant.at_min for variant in kept[0].variants)
    once = tuple(replace(step, times=1, until_min=None, variants=tuple(
        replace(variant, at_min=(variant.at_min - first) % variant.every_min) for variant in step.variants))
        for step in kept)
    administrations, _ = administrations_of(replace(protocol, steps=once, no_dose_allowed=True), lookup, n, FAR_MIN)
    timeline, _ = _events(administrations, n, FAR_MIN)
    return replace(timeline, interval_min=interval)


def _of_step(protocol: Protocol, step: DoseStep, lookup: Lookup, n: int, until_min: float,
             changes: Changes) -> list[Administration]:
    reach = holds(step.where, lookup, n)
    covered = np.zeros(n, dtype=np.int64)
    administrations = []
    for variant in step.variants:
        gets_it = reach & holds(variant.where, lookup, n)
        covered += gets_it
        if gets_it.any():
            amount, duration = _one_administration(step, variant, lookup, gets_it, changes)
            administrations += [Administration(step.number, start, duration, amount, gets_it, step.oral)
                                for start in _starts(step, variant, until_min)]
    if (covered > 1).any():
        raise ProblemsError(Problem(f'protocol "{protocol.name}", dose {step.number}: band',
                                    f"two bands cover {(covered > 1).sum():,} of {n:,} patients looked at",
                                    "bands that do not overlap", 'such as "age < 65" and "age >= 65"'))
    uncovered = reach & (covered == 0)
    if uncovered.any() and not protocol.no_dose_allowed:
        raise _left_out(protocol, f"no band of dose {step.number} covers", uncovered)
    return administrations


def holds(condition: Formula | None, lookup: Lookup, n: int) -> np.ndarray:
    """Whom a condition is true of, (n,) bool; everyone where there is none."""
    if condition is None:
        return np.ones(n, dtype=bool)
    return np.broadcast_to(np.asarray(condition.evaluate(lookup), dtype=bool), (n,))


def _left_out(protocol: Protocol, nothing_covers: str, who: np.ndarray) -> ProblemsError:
    return ProblemsError(Problem(
        f'protocol "{protocol.name}"', f"{nothing_covers} {who.sum():,} of {len(who):,} patients looked at",
        "each patient covered by the dose steps",
        'no_dose = "allowed" in the protocol, if going without is meant'))


def _one_administration(step: DoseStep, variant: DoseVariant, lookup: Lookup, gets_it: np.ndarray,
                        changes: Changes) -> tuple[np.ndarray, np.ndarray]:
    """Amount in mg and duration in min of each administration of a step."""
    n = len(gets_it)
    if variant.loading is not None:
        wanted = loading_mg(variant.loading, step, lookup, gets_it)
    else:
        wanted = scaled_dose(variant.amount or variant.rate, step, lookup, gets_it)
    given, floored, capped, rounded = as_given(wanted, step.at_least, step.at_most, step.round_to)
    changes.floored |= floored & gets_it
    changes.capped |= capped & gets_it
    changes.rounded |= rounded & gets_it
    changes.impossible |= ~(given > 0) & gets_it
    given = np.where(gets_it, given, 0.0)
    if variant.is_rate:
        end = variant.at_min + step.over_min if step.over_min is not None else step.until_min
        duration = np.full(n, end - variant.at_min)
        return given * duration, duration
    if variant.rate is not None:
        duration = np.zeros(n)
        np.divide(given, scaled_dose(variant.rate, step, lookup, gets_it), out=duration, where=gets_it)
        return given, duration
    return given, np.full(n, step.over_min or 0.0)


def _starts(step: DoseStep, variant: DoseVariant, until_min: float) -> list[float]:
    """Times of the administrations: all counted by `times`, else repeated until before `until` or the run's end."""
    if variant.every_min is None:
        return [variant.at_min]
    if step.times is not None:
        count = step.times
    else:
        end = until_min if step.until_min is None else min(step.until_min, until_min)
        count = max(int(np.ceil((end - variant.at_min) / variant.every_min - 1e-9)), 1)
    starts = [variant.at_min + k * variant.every_min for k in range(count)]
    return [start for start in starts if start <= until_min]


def _within_run(administration: Administration, until_min: float) -> np.ndarray:
    duration = administration.duration_min
    share = np.ones(len(duration))
    np.divide(until_min - administration.start_min, duration, out=share, where=duration > 0)
    return administration.amount_mg * np.clip(share, 0.0, 1.0)


def _events(administrations: list[Administration], n: int, until_min: float) -> tuple[Timeline, np.ndarray]:
    """Events in order of time for each patient, and the longest infusion at one stretch."""
    ends = [bool((one.duration_min > 0)[one.gets_it].any()) for one in administrations]  # a bolus has no end of its own
    columns = len(administrations) + sum(ends) or 1
    time = np.full((n, columns), np.inf)
    bolus, oral = np.zeros((n, columns)), np.zeros((n, columns))
    rate_change = np.zeros((n, columns))
    running = np.zeros((n, columns), dtype=np.int8)
    begin = 0
    for administration, has_end in zip(administrations, ends, strict=True):
        infused = administration.gets_it & (administration.duration_min > 0)
        at_once = administration.gets_it & (administration.duration_min == 0)
        rate = np.zeros(n)
        np.divide(administration.amount_mg, administration.duration_min, out=rate, where=infused)
        time[administration.gets_it, begin] = administration.start_min
        (oral if administration.oral else bolus)[at_once, begin] = administration.amount_mg[at_once]
        rate_change[:, begin] = rate
        running[rate > 0, begin] = 1
        if has_end:
            time[infused, begin + 1] = administration.start_min + administration.duration_min[infused]
            rate_change[:, begin + 1] = -rate
            running[rate > 0, begin + 1] = -1
        begin += 1 + has_end
    order = np.argsort(time, axis=1, kind="stable")
    time, bolus, oral, rate_change, running = (np.take_along_axis(array, order, axis=1)
                                               for array in (time, bolus, oral, rate_change, running))
    active = np.cumsum(running, axis=1, dtype=np.int64)
    # no infusion running is exactly no rate, whatever the rounding of the sum
    rate = np.where(active > 0, np.maximum(np.cumsum(rate_change, axis=1), 0.0), 0.0)
    used = max(int(np.isfinite(time).any(axis=0).sum()), 1)
    timeline = Timeline(*(np.ascontiguousarray(array[:, :used]) for array in (time, bolus, rate, oral)))
    return timeline, _longest_infusion(timeline, until_min)


def _longest_infusion(timeline: Timeline, until_min: float) -> np.ndarray:
    """Longest stretch of minutes with a rate above zero, up to the run's end."""
    n, columns = timeline.time_min.shape
    longest, stretch = np.zeros(n), np.zeros(n)
    for j in range(columns):
        start = np.minimum(timeline.time_min[:, j], until_min)
        following = timeline.time_min[:, j + 1] if j + 1 < columns else np.full(n, np.inf)
        span = np.minimum(following, until_min) - start
        flowing = timeline.rate_mg_per_min[:, j] > 0
        # events at one time (one infusion ends, the next begins) do not break a stretch
        stretch = np.where(flowing, stretch + span, np.where(span > GAP_MIN, 0.0, stretch))
        longest = np.maximum(longest, stretch)
    return longest
