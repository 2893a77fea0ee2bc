"""The solver's door: checks shapes, calls the compiled kernels, words their status codes.

Everything is in mg, L, min. What a patient's numbers can spoil becomes a status code of that patient and never
touches another; a wrong shape is a programming error (ValueError).
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import NamedTuple

import numpy as np

from popsim import kernels
from popsim.records import Disposition, Timeline, WindowCourse

STATUS: dict[int, str] = {
    kernels.FINE: "computed",
    kernels.NOT_POSITIVE: "a volume or elimination clearance that is not positive, or a negative flow, ke0, ka or lag",
    kernels.NOT_FINITE: "a parameter that is missing or not a finite number",
    kernels.OUT_OF_REACH: "volumes and clearances too far apart to compute with",
    kernels.BAD_EVENT: "a dose, rate or repeat that is negative or not a number, or doses out of order of time",
    kernels.BAD_WINDOW: "a window without finite start and end, that ends before it starts or outlasts its interval",
    kernels.BAD_LIMITS: "a range without limits, or whose lower limit lies above the upper",
    kernels.NO_EFFECT_SITE: "no effect site in this model (ke0 is zero)",
    kernels.NO_ABSORPTION: "a dose by mouth in a model without absorption (ka is zero)",
}

COURSES = {"plasma": kernels.PLASMA, "effect_site": kernels.EFFECT_SITE}
BIN_COUNT = kernels.BIN_COUNT
PARAMETERS = ("V1", "CL", "V2", "Q2", "V3", "Q3", "ke0", "ka", "F", "lag")
# what stands in for a part the model lacks
OPTIONAL = {"V2": 1.0, "Q2": 0.0, "V3": 1.0, "Q3": 0.0, "ke0": 0.0, "ka": 0.0, "F": 1.0, "lag": 0.0}


class Given(NamedTuple):
    """A disposition and a timeline as the kernels take them: see the head of kernels.py."""

    drug: np.ndarray
    status: np.ndarray
    events: np.ndarray
    start: np.ndarray
    interval: np.ndarray


def code_is_kept() -> bool:
    """Whether compiled code is kept on disk; if not (read-only install and home), every process compiles anew."""
    return kernels.CACHED


def disposition(parameters: Mapping[str, np.ndarray]) -> Disposition:
    """Hybrid rates and weights of each patient from V1 (L), CL (L/min) and, where the model has them, V2 and Q2,
    V3 and Q3, ke0 and ka (1/min), F (a share), lag (min); each an (n,) array.

    A parameter that is not finite or not positive sets that patient's status; other parameters are passed over.
    Raises ValueError for a missing V1 or CL, a compartment with only one of V and Q, or unequal shapes.
    Source: the partial-fraction form of the mammillary model, from memory; roots found as in kernels.disposition.
    Example: V1 = 10, CL = 1 alone gives rate 0.1 and weight 0.1.
    """
    missing = [name for name in ("V1", "CL") if name not in parameters]
    missing += [a for a, b in (("V2", "Q2"), ("Q2", "V2"), ("V3", "Q3"), ("Q3", "V3"))
                if a not in parameters and b in parameters]  # fmt: skip
    if missing:
        raise ValueError(f"parameters without {', '.join(missing)}")
    n = np.asarray(parameters["V1"]).shape
    if len(n) != 1:
        raise ValueError(f"V1 has shape {n}, not (n,)")
    columns = [
        _array(name, parameters[name] if name in parameters else np.full(n, OPTIONAL[name]), n)
        for name in PARAMETERS
    ]
    rates, weights = np.empty((*n, 3)), np.empty((*n, 3))
    status = np.empty(n, dtype=np.int64)
    kernels.disposition(*columns, rates, weights, status)
    ke0, ka, bioavailability, lag = (np.where(status == kernels.FINE, columns[PARAMETERS.index(name)], otherwise)
                                     for name, otherwise in list(OPTIONAL.items())[4:])  # fmt: skip
    return Disposition(rates, weights, ke0, ka, bioavailability, lag, status)


def courses_on_grid(
    disposition: Disposition, timeline: Timeline, grid_min: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Plasma and effect-site concentration (n, T), mg/L, of each patient at each of T ascending times, just after
    doses at that time. Rows of patients with a status, or with a bad timeline, are NaN; the effect site is 0 where
    ke0 is 0. Raises ValueError for a grid that is empty, not finite or not ascending, or unequal shapes.
    """
    grid = _grid(grid_min)
    given = _given(disposition, timeline)
    _within_interval(grid, given.interval)
    plasma = np.empty((len(disposition), grid.size))
    effect_site = np.empty_like(plasma)
    n, nothing = len(disposition), np.empty(len(disposition))
    nobody, uncounted = np.empty((n, 0), dtype=np.bool_), np.empty((0, grid.size, 0), dtype=np.int64)
    kernels.on_grid(kernels.PLASMA, *given[:4], grid, *_steps(grid), np.empty((0, 5)), nothing, nothing, nobody,
                    uncounted, uncounted.astype(np.int32), plasma, effect_site)  # fmt: skip
    return plasma, effect_site


def window_course(
    disposition: Disposition,
    timeline: Timeline,
    which: str,
    low: np.ndarray,
    high: np.ndarray,
    start_min: np.ndarray,
    end_min: np.ndarray,
) -> WindowCourse:
    """What "plasma" or "effect_site" does between start and end (min) against low and high (mg/L), each (n,).

    Found by exact root finding, not on a grid. The range is closed; low may be -inf, high inf. The window is
    closed: it begins after the doses at its start and ends before those at its end. Where start equals end it is an
    instant, after the doses at that time. Raises ValueError for another `which` or unequal shapes.
    """
    if which not in COURSES:
        raise ValueError(f"{which!r} is not one of {', '.join(COURSES)}")
    drug, status, events, start, interval = _given(disposition, timeline)
    n = (len(disposition),)
    low, high = _array("low", low, n), _array("high", high, n)
    begin, end = _array("start_min", start_min, n), _array("end_min", end_min, n)
    shares, found = np.empty((*n, 3)), np.empty((*n, 7))
    kernels.windows(COURSES[which], drug, events, start, interval, low, high, begin, end, status, shares, found)
    below, inside, above = shares.T.copy()
    lowest, highest, lowest_at, highest_at, at_end, first_inside, last_above = found.T.copy()
    return WindowCourse(below, inside, above, np.isfinite(first_inside), lowest, highest, at_end, status, lowest_at,
                        highest_at, first_inside, last_above)  # fmt: skip


def area_under_curve(
    disposition: Disposition, timeline: Timeline, which: str, start_min: np.ndarray, end_min: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Area under "plasma" or "effect_site" from start to end, mg/L min, in closed form, and status; each (n,).

    Example: over all time a dose leaves dose / CL. Raises ValueError for another `which` or unequal shapes.
    """
    if which not in COURSES:
        raise ValueError(f"{which!r} is not one of {', '.join(COURSES)}")
    drug, status, events, start, interval = _given(disposition, timeline)
    n = (len(disposition),)
    area = np.empty(n)
    begin, end = _array("start_min", start_min, n), _array("end_min", end_min, n)
    kernels.areas(COURSES[which], drug, events, start, interval, begin, end, status, area)
    return area, status


def count_over_time(
    disposition: Disposition,
    timeline: Timeline,
    grid_min: np.ndarray,
    course: str | Sequence[np.ndarray],
    low: np.ndarray,
    high: np.ndarray,
    members: np.ndarray,
    counts: np.ndarray,
    bins: np.ndarray | None = None,
) -> None:
    """Add every patient's course at T ascending times to integer counts and bins; no course is kept, and the order of
    patients and blocks does not matter.

    course     "plasma", "effect_site", or the curve of an effect: baseline, effect at infinity, concentration of half
               the effect (mg/L), steepness below and above it, each (n,)
    low, high  (n,) closed range, in the course's unit      members  (n, G) bool, who belongs to which group
    counts     (G, T, 3) int64, below, in, above; added to
    bins       (G, T, BIN_COUNT) int32 or int64; added to; None: not counted
    Values just after doses at that time. Patients with a status and NaN values are passed over. Raises ValueError for
    a bad grid or `course`, limits that are NaN, or unequal shapes.
    """
    grid = _grid(grid_min)
    n, groups = len(disposition), members.shape[1]
    if bins is None:
        bins = np.empty((groups, grid.size, 0), dtype=np.int32)
    elif bins.shape != (groups, grid.size, BIN_COUNT) or bins.dtype not in (np.int32, np.int64):
        raise ValueError(f"bins are {bins.shape} {bins.dtype}, not {(groups, grid.size, BIN_COUNT)} int32 or int64")
    if counts.shape != (groups, grid.size, 3) or counts.dtype != np.int64:
        raise ValueError(f"counts are {counts.shape} {counts.dtype}, not {(groups, grid.size, 3)} int64")
    if members.shape != (n, groups) or members.dtype != np.bool_:
        raise ValueError(f"members are {members.shape} {members.dtype}, not {(n, groups)} bool")
    low, high = _array("low", low, (n,)), _array("high", high, (n,))
    if np.isnan(low).any() or np.isnan(high).any():
        raise ValueError("a limit is not a number")
    if isinstance(course, str):
        if course not in COURSES:
            raise ValueError(f"{course!r} is not one of {', '.join(COURSES)}")
        kind, curve = COURSES[course], np.empty((0, 5))
    else:
        kind, curve = kernels.EFFECT, np.stack([_array("an effect's curve", column, (n,)) for column in course], axis=1)
        if curve.shape != (n, 5):
            raise ValueError(f"an effect's curve has {curve.shape[1]} parameters, not 5")
    given = _given(disposition, timeline)
    _within_interval(grid, given.interval)
    unkept = np.empty((0, 0))
    kernels.on_grid(kind, *given[:4], grid, *_steps(grid), curve, low, high, np.ascontiguousarray(members), counts,
                    bins, unkept, unkept)  # fmt: skip


def bin_layout() -> np.ndarray:
    """Edges (BIN_COUNT + 1,) of the bins, half-open, lower edge inside: all below zero; zeros alone (up to the
    smallest positive number); all under 2^-24; 128 equal parts of every octave up to 2^16; all above.
    """
    parts = 1 << kernels.BINS_PER_OCTAVE_LOG2
    octaves = 2.0 ** np.arange(kernels.LOWEST_OCTAVE, kernels.LOWEST_OCTAVE + kernels.OCTAVES)
    inner = (octaves[:, None] * (1.0 + np.arange(parts) / parts)).ravel()
    return np.concatenate([[-np.inf, 0.0, np.nextafter(0.0, 1.0)], inner, [2.0 * octaves[-1], np.inf]])


def percentiles_from_bins(bins: np.ndarray, shares: Sequence[float]) -> np.ndarray:
    """Quantiles (..., Q), for shares 0 to 1, of what was counted in bins (..., BIN_COUNT); NaN where nothing was.

    Within a bin the values are taken as evenly spread: at most 1/128, under 0.8 %, from the sample's own quantile
    (linear between neighbours) from 2^-24 to 2^16; zeros are exact; inf from 2^16 on, -inf below zero.
    """
    edges = bin_layout()
    wanted = np.asarray(shares, dtype=np.float64)
    if bins.shape[-1] != BIN_COUNT:
        raise ValueError(f"{bins.shape[-1]} bins, not {BIN_COUNT}")
    if not ((wanted >= 0.0) & (wanted <= 1.0)).all():
        raise ValueError("a share is not from 0 to 1")
    rows = bins.reshape(-1, bins.shape[-1])
    result = np.full((len(rows), wanted.size), np.nan)
    for row, out in zip(rows, result, strict=True):
        until = np.cumsum(row, dtype=np.int64)
        if until[-1] > 0:
            position = wanted * (until[-1] - 1)
            lower = np.floor(position)
            first, second = (_ordered(rank, row, until, edges) for rank in (lower, np.ceil(position)))
            part = position - lower
            with np.errstate(invalid="ignore"):  # infinity times a part of 0, not taken
                out[:] = np.where(part == 0.0, first, first * (1.0 - part) + second * part)
    return result.reshape(*bins.shape[:-1], wanted.size)


def _ordered(rank: np.ndarray, row: np.ndarray, until: np.ndarray, edges: np.ndarray) -> np.ndarray:
    """Where the values of these ranks (0 = smallest) lie, evenly spread within their bins."""
    place = np.searchsorted(until, rank, side="right")
    within = (rank - (until[place] - row[place]) + 0.5) / row[place]
    lower, upper = edges[place], edges[place + 1]
    bounded = np.isfinite(lower) & np.isfinite(upper) & (place != kernels.ZERO_BIN)
    value = np.where(np.isfinite(lower), lower, -np.inf) + np.where(bounded, within * (upper - lower), 0.0)
    return np.where(np.isfinite(upper), value, np.inf)


def _array(name: str, values: np.ndarray, shape: tuple[int, ...]) -> np.ndarray:
    """As contiguous float64 of that shape, or ValueError."""
    array = np.ascontiguousarray(values, dtype=np.float64)
    if array.shape != shape:
        raise ValueError(f"{name} has shape {array.shape}, not {shape}")
    return array


def _grid(grid_min: np.ndarray) -> np.ndarray:
    grid = np.ascontiguousarray(grid_min, dtype=np.float64)
    if grid.ndim != 1 or grid.size == 0 or not np.isfinite(grid).all() or (np.diff(grid) <= 0).any():
        raise ValueError("the grid is not a line of finite, ascending times")
    return grid


def _within_interval(grid: np.ndarray, interval: np.ndarray) -> None:
    repeats = np.isfinite(interval)
    if repeats.any() and (grid[0] < 0 or grid[-1] > interval[repeats].min()):
        raise ValueError("the grid leaves the interval of a repeated regimen")


def _given(disposition: Disposition, timeline: Timeline) -> Given:
    """Both as the kernels take them; the patients' status with that of their timelines."""
    n, shape = len(disposition), (len(disposition), *np.shape(timeline.time_min)[1:])
    if len(shape) != 2:
        raise ValueError(f"time_min has shape {np.shape(timeline.time_min)}, not (n, m)")
    names = ("time_min", "bolus_mg", "oral_mg", "rate_mg_per_min")
    events = np.stack([_array(name, getattr(timeline, name), shape) for name in names], axis=2)
    interval = _array("interval_min", timeline.interval_min, (n,))
    drug = np.column_stack([disposition.rates, disposition.weights, disposition.ke0, disposition.ka])
    status = disposition.status.copy()
    kernels.check_events(events, disposition.ka, interval, status)
    if events[:, :, kernels.ORAL].any():
        events = _absorbed(events, disposition.bioavailability, disposition.lag_min)
    if np.isfinite(interval).any():
        events = _folded(events, np.where(status == kernels.FINE, interval, np.inf))
    start = np.zeros((n, 5))
    if np.isfinite(interval).any():
        kernels.steady_starts(drug, events, interval, status, start)
    return Given(drug, status, events, start, interval)


def _absorbed(events: np.ndarray, bioavailability: np.ndarray, lag: np.ndarray) -> np.ndarray:
    """Doses by mouth as they reach the depot: their share, as events of their own, later by the lag."""
    n, m, _ = events.shape
    later = np.zeros_like(events)
    taken = events[:, :, kernels.ORAL]
    later[:, :, kernels.TIME] = np.where(taken > 0, events[:, :, kernels.TIME] + lag[:, None], np.inf)
    later[:, :, kernels.ORAL] = taken * bioavailability[:, None]
    both = np.concatenate([events, later], axis=1)
    both[:, :m, kernels.ORAL] = 0.0
    order = np.argsort(both[:, :, kernels.TIME], axis=1, kind="stable")
    # the rate goes on as the last event of before said
    speaks = np.maximum.accumulate(np.where(order < m, order, -1), axis=1)
    rate = np.take_along_axis(events[:, :, kernels.FLOW], np.maximum(speaks, 0), axis=1)
    both = np.take_along_axis(both, order[:, :, None], axis=1)
    both[:, :, kernels.FLOW] = np.where(speaks >= 0, rate, 0.0)
    used = max(int(np.isfinite(both[:, :, kernels.TIME]).sum(axis=1).max(initial=0)), 1)
    return np.ascontiguousarray(both[:, :used])


def _folded(events: np.ndarray, interval: np.ndarray) -> np.ndarray:
    """One interval's events with what earlier intervals still have running in it; others as they are.

    Events past the interval's end come that much later in a later one. The rate between two folded events is the sum,
    over intervals, of the rate at their middle: a middle is safe from rounding.
    """
    repeats = np.isfinite(interval)
    time, rate = events[:, :, kernels.TIME], events[:, :, kernels.FLOW]
    finite = np.isfinite(time)
    folded = np.concatenate([np.zeros((len(events), 1, 4)), events], axis=1)
    folded[:, 1:, kernels.TIME] = np.where(finite, np.fmod(np.where(finite, time, 0.0), interval[:, None]), np.inf)
    order = np.argsort(folded[:, :, kernels.TIME], axis=1, kind="stable")
    folded = np.take_along_axis(folded, order[:, :, None], axis=1)
    begins = np.where(np.isfinite(folded[:, :, kernels.TIME]), folded[:, :, kernels.TIME], 0.0)
    ends = np.minimum(np.append(folded[:, 1:, kernels.TIME], np.full((len(events), 1), np.inf), axis=1),
                      interval[:, None])  # fmt: skip
    middle = np.where(repeats[:, None], (begins + ends) / 2, 0.0)
    spans = np.where(repeats, np.where(finite, time, 0.0).max(axis=1, initial=0.0) / interval, 0.0)
    total = np.zeros_like(middle)
    for k in range(int(spans.max(initial=0.0)) + 1):
        at = middle + k * np.where(repeats, interval, 0.0)[:, None]
        last = (time[:, None, :] <= at[:, :, None]).sum(axis=2) - 1
        running = np.take_along_axis(rate, np.maximum(last, 0), axis=1)
        total += np.where(last >= 0, running, 0.0)
    folded[:, :, kernels.FLOW] = total
    unfolded = np.concatenate([events, np.full((len(events), 1, 4), [np.inf, 0.0, 0.0, 0.0])], axis=1)
    return np.where(repeats[:, None, None], folded, unfolded)


def _steps(grid: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Which step length each grid step has, and the lengths.

    k x every leaves steps that differ by rounding alone: they count as one, of their mean length, unless the grid
    times would then be missed.
    """
    steps = np.diff(grid)
    slack = 8 * np.spacing(np.abs(grid).max())
    order = np.argsort(steps, kind="stable")
    length_of = np.empty(steps.size, dtype=np.int64)
    length_of[order] = np.cumsum(np.diff(steps[order], prepend=steps[order[:1]]) > slack)
    lengths = np.bincount(length_of, weights=steps) / np.maximum(np.bincount(length_of), 1)
    met = grid[0] + np.cumsum(lengths[length_of], dtype=np.longdouble)
    if np.abs(met - grid[1:]).max(initial=0.0) > slack:
        lengths, length_of = np.unique(steps, return_inverse=True)
    return length_of.astype(np.int64), lengths
