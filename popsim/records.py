"""The records that pass from step to step of a block. Plain arrays in mg, L, min; one row a patient."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from popsim.lookup import Lookup


@dataclass(frozen=True)
class Patients:
    """One block of virtual patients.

    first       number of its first patient (1, 2, ... over the whole population)
    block       which block of candidates they were drawn from: with `slots`, the key to their luck
    slots       (n,) int64, position of each within its block of candidates
    attributes  name -> (n,) array: `sex` as text ("female", "male"), switches as bool, numbers as float64
                in the attribute's own unit (age years, weight kg, height cm, serum_creatinine mg/dL)
    labels      (n,) text, what a list calls its people; None elsewhere
    origins     (n,) int64, row of the list that each was drawn from, where people are drawn again and again; else None
    """

    first: int
    block: int
    slots: np.ndarray
    attributes: dict[str, np.ndarray]
    labels: np.ndarray | None = None
    origins: np.ndarray | None = None

    def __len__(self) -> int:
        return len(self.slots)


@dataclass(frozen=True)
class IndividualParameters:
    """What a drug model says of each patient of a block, random effects applied.

    values    parameter -> (n,) float64 in L, L/min, 1/min (or the parameter's own unit: E0, C50 in mg/L)
    outside   (n,) bool: outside the people the model was built on
    beyond    attribute -> (n,) bool: outside by that attribute alone
    """

    values: dict[str, np.ndarray]
    outside: np.ndarray
    beyond: dict[str, np.ndarray] = field(default_factory=dict)


@dataclass(frozen=True)
class Disposition:
    """Plasma after a unit bolus, patient by patient: the sum over i of weights[i] exp(-rates[i] t).

    rates    (n, 3) float64, 1/min, ascending; unused compartments have rate 1 and weight 0
    weights  (n, 3) float64, 1/L, none negative, adding up to 1/V1
    ke0      (n,) float64, 1/min; 0 where the model has no effect site
    ka       (n,) float64, 1/min, from the depot into plasma; 0 where the model has no absorption
    bioavailability  (n,) float64, the share of a dose by mouth that reaches plasma
    lag_min  (n,) float64, from a dose by mouth until the depot begins to empty
    status   (n,) int64, 0 = fine, else a code of `solve.STATUS`
    """

    rates: np.ndarray
    weights: np.ndarray
    ke0: np.ndarray
    ka: np.ndarray
    bioavailability: np.ndarray
    lag_min: np.ndarray
    status: np.ndarray

    def __len__(self) -> int:
        return len(self.ke0)


@dataclass(frozen=True)
class Timeline:
    """What each patient is given, as events in order of time.

    time_min         (n, m) float64, ascending, padded with inf
    bolus_mg         (n, m) float64, given at that time
    rate_mg_per_min  (n, m) float64, infused from that time until the next event
    oral_mg          (n, m) float64, taken by mouth at that time; none unless given
    interval_min     (n,) float64: these events are one interval, from time 0 on, of a regimen repeated for so long that
                     every interval is like the last; what outlasts the interval runs on into the next. inf unless
                     given: nothing repeats
    """

    time_min: np.ndarray
    bolus_mg: np.ndarray
    rate_mg_per_min: np.ndarray
    oral_mg: np.ndarray = field(default=None)  # type: ignore[assignment]
    interval_min: np.ndarray = field(default=None)  # type: ignore[assignment]

    def __post_init__(self) -> None:
        if self.oral_mg is None:
            object.__setattr__(self, "oral_mg", np.zeros_like(self.time_min))
        if self.interval_min is None:
            object.__setattr__(self, "interval_min", np.full(len(self.time_min), np.inf))


@dataclass(frozen=True)
class WindowCourse:
    """What one course (plasma or effect site) does in each patient's window, found exactly.

    below, inside, above  (n,) float64: shares of the window under `low`, from `low` to `high`, over `high`;
                          for an instant, 0 or 1. They add up to 1; NaN where status is not 0.
    touched               (n,) bool: within the range at any moment of the closed window
    lowest, highest       (n,) float64: smallest and largest value in the closed window, mg/L
    at_end                (n,) float64: value at the window's end, before doses at that time, mg/L
    status                (n,) int64, 0 = fine
    lowest_at_min, highest_at_min  (n,) float64: when those values first are, min
    first_inside_min      (n,) float64: when the course first is within the range, min; inf where it never is
    last_above_min        (n,) float64: when it last is above the range, min; -inf where it never is
    """

    below: np.ndarray
    inside: np.ndarray
    above: np.ndarray
    touched: np.ndarray
    lowest: np.ndarray
    highest: np.ndarray
    at_end: np.ndarray
    status: np.ndarray
    lowest_at_min: np.ndarray
    highest_at_min: np.ndarray
    first_inside_min: np.ndarray
    last_above_min: np.ndarray


@dataclass(frozen=True)
class Received:
    """What each patient of a block really receives until the run's end, one array (n,) each.

    capped, floored, rounded   whether any administration was changed so
    impossible                 whether any administration came out as zero
    longest_infusion_min       longest infusion at one stretch of rates above zero
    too_fast                   whether any infusion is faster than the protocol's pump can give
    vials                      containers opened when each administration opens its own; 0 where no vial is given
    last_given_min             when the last dose or infusion ends, at most the run's end
    """

    total_mg: np.ndarray
    capped: np.ndarray
    floored: np.ndarray
    rounded: np.ndarray
    impossible: np.ndarray
    undosed: np.ndarray
    longest_infusion_min: np.ndarray
    too_fast: np.ndarray
    vials: np.ndarray
    last_given_min: np.ndarray


@dataclass(frozen=True)
class Judged:
    """One target judged in each patient of a block, arrays (n,). Failed patients count as not attained.

    ever_below, ever_above  whether the window's lowest or highest value lies outside the range
    measures                further numbers of each patient, by name: inf where it never happens, NaN where it has none
    """

    failed: np.ndarray
    attained: np.ndarray
    below: np.ndarray
    inside: np.ndarray
    above: np.ndarray
    far_below: np.ndarray
    far_above: np.ndarray
    ever_below: np.ndarray
    ever_above: np.ndarray
    measures: dict[str, np.ndarray] = field(default_factory=dict)


@dataclass(frozen=True)
class BlockRows:
    """What a block leaves for those who ask patient by patient. Courses only when kept; the rest only of a run.

    members   (n, groups) int64, 1 = belongs to that group
    judged    (model, protocol, target) -> what the target made of each patient
    received  what each patient is given, protocol by protocol
    """

    patients: Patients
    lookup: Lookup
    courses: list[tuple[str, str, np.ndarray, np.ndarray, np.ndarray | None]]  # model, protocol, plasma, site, effect
    members: np.ndarray | None = None
    judged: dict[tuple[int, int, int], Judged] = field(default_factory=dict)
    received: list[Received] = field(default_factory=list)
