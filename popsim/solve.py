"""The solver's door: checks shapes, calls the compiled kernels, words their status codes.

Everything is in mg, L, min. What a patient's numbers can spoil becomes a status code of that patient and never
touches another; a wrong shape is a programming error (ValueError).
"""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping, Sequence
from typing import TypeVar

import numpy as np

from popsim import kernels
from popsim.records import Disposition, Timeline, WindowCourse

Record = TypeVar("Record", Disposition, Timeline)

STATUS: dict[int, str] = {
    kernels.FINE: "computed",
    kernels.NOT_POSITIVE: "a volume or elimination clearance that is not positive, or a negative flow or ke0",
    kernels.NOT_FINITE: "a parameter that is missing or not a finite number",
    kernels.OUT_OF_REACH: "volumes and clearances too far apart to compute with",
    kernels.BAD_EVENT: "a dose or rate that is negative or not a number, or doses out of order of time",
    kernels.BAD_WINDOW: "a window without finite start and end, or one that ends before it starts",
    kernels.BAD_LIMITS: "a range without limits, or whose lower limit lies above the upper",
    kernels.NO_EFFECT_SITE: "no effect site in this model (ke0 is zero)",
}

COURSES = {"plasma": kernels.PLASMA, "effect_site": kernels.EFFECT_SITE}
BIN_COUNT = kernels.BIN_COUNT
OPTIONAL = {"V2": 1.0, "Q2": 0.0, "V3": 1.0, "Q3": 0.0, "ke0": 0.0}  # what stands in for a part the model lacks


def code_is_kept() -> bool:
    """Whether compiled code is kept on disk; if not (read-only install and home), every process compiles anew."""
    return kernels.CACHED


def rows_of(record: Record, rows: slice | np.ndarray) -> Record:
    """The same record (Disposition, Timeline) for some of its patients."""
    return dataclasses.replace(record, **{f.name: getattr(record, f.name)[rows] for f in dataclasses.fields(record)})


def disposition(parameters: Mapping[str, np.ndarray]) -> Disposition:
    """Hybrid rates and weights of each patient from V1 (L), CL (L/min) and, where the model has them, V2 and Q2,
    V3 and Q3, ke0 (1/min); each an (n,) array.

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
        for name in ("V1", "CL", "V2", "Q2", "V3", "Q3", "ke0")
    ]
    rates, weights = np.empty((*n, 3)), np.empty((*n, 3))
    status = np.empty(n, dtype=np.int64)
    kernels.disposition(*columns, rates, weights, status)
    ke0 = np.where(status == kernels.FINE, columns[-1], 0.0)
    return Disposition(rates=rates, weights=weights, ke0=ke0, status=status)


def courses_on_grid(
    disposition: Disposition, timeline: Timeline, grid_min: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Plasma and effect-site concentration (n, T), mg/L, of each patient at each of T ascending times, just after
    doses at that time. Rows of patients with a status, or with a bad timeline, are NaN; the effect site is 0 where
    ke0 is 0. Raises ValueError for a grid that is empty, not finite or not ascending, or unequal shapes.
    """
    grid = np.ascontiguousarray(grid_min, dtype=np.float64)
    if grid.ndim != 1 or grid.size == 0 or not np.isfinite(grid).all() or (np.diff(grid) <= 0).any():
        raise ValueError("the grid is not a line of finite, ascending times")
    events, status = _events(disposition, timeline)
    plasma = np.empty((len(disposition), grid.size))
    effect_site = np.empty_like(plasma)
    kernels.courses(disposition.rates, disposition.weights, disposition.ke0, status, *events, grid, *_steps(grid),
                    plasma, effect_site)  # fmt: skip
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
    events, status = _events(disposition, timeline)
    n = (len(disposition),)
    low, high = _array("low", low, n), _array("high", high, n)
    start, end = _array("start_min", start_min, n), _array("end_min", end_min, n)
    shares, extremes, touched = np.empty((*n, 3)), np.empty((*n, 5)), np.empty(n, dtype=np.bool_)
    kernels.windows(
        COURSES[which], disposition.rates, disposition.weights, disposition.ke0, *events, low, high, start, end,
        status, shares, extremes, touched,
    )  # fmt: skip
    below, inside, above = shares.T.copy()
    lowest, highest, at_end, first_inside, last_above = extremes.T.copy()
    return WindowCourse(below, inside, above, touched, lowest, highest, at_end, status, first_inside, last_above)


def area_under_curve(
    disposition: Disposition, timeline: Timeline, start_min: np.ndarray, end_min: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Area under the plasma course from start to end, mg/L min, in closed form, and status; each (n,).

    Example: over all time a dose leaves dose / CL. Raises ValueError for unequal shapes.
    """
    events, status = _events(disposition, timeline)
    n = (len(disposition),)
    area = np.empty(n)
    start, end = _array("start_min", start_min, n), _array("end_min", end_min, n)
    kernels.areas(disposition.rates, disposition.weights, disposition.ke0, *events, start, end, status, area)
    return area, status


def tally_on_grid(
    values: np.ndarray,
    low: np.ndarray,
    high: np.ndarray,
    members: np.ndarray,
    counts: np.ndarray,
    bins: np.ndarray,
) -> None:
    """Add values (n, T) to integer counts and bins, whatever the order of patients and blocks.

    low, high  (n,) closed range      members  (n, G) bool, who belongs to which group
    counts     (G, T, 3) int64, below, in, above; added to
    bins       (G, T, BIN_COUNT) int32 or int64; added to
    NaN values are passed over. Raises ValueError for limits that are NaN, or unequal shapes.
    """
    values = np.ascontiguousarray(values, dtype=np.float64)
    n, times = values.shape
    low, high = _array("low", low, (n,)), _array("high", high, (n,))
    groups = members.shape[1]
    expected = {"members": (members, (n, groups)), "counts": (counts, (groups, times, 3)),
                "bins": (bins, (groups, times, BIN_COUNT))}  # fmt: skip
    for name, (array, shape) in expected.items():
        if array.shape != shape:
            raise ValueError(f"{name} has shape {array.shape}, not {shape}")
    if members.dtype != np.bool_ or counts.dtype != np.int64 or bins.dtype not in (np.int32, np.int64):
        raise ValueError("members must be bool, counts int64, bins int32 or int64")
    if np.isnan(low).any() or np.isnan(high).any():
        raise ValueError("a limit is not a number")
    kernels.tally(values, values.view(np.int64), low, high, members, counts, bins)


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


def _events(disposition: Disposition, timeline: Timeline) -> tuple[tuple[np.ndarray, ...], np.ndarray]:
    """The timeline's arrays, and the patients' status with that of their timelines."""
    shape = (len(disposition), *np.shape(timeline.time_min)[1:])
    if len(shape) != 2:
        raise ValueError(f"time_min has shape {np.shape(timeline.time_min)}, not (n, m)")
    names = ("time_min", "bolus_mg", "rate_mg_per_min")
    events = tuple(_array(name, getattr(timeline, name), shape) for name in names)
    status = disposition.status.copy()
    kernels.check_events(*events, status)
    return events, status


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
