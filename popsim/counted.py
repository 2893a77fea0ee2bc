"""Values as keys that can be counted, by significant digits or in tenths: memory does not grow with patients."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from covariates.problems import Problem, ProblemsError

QUANTILES = {"p05": 0.05, "p25": 0.25, "p50": 0.5, "p75": 0.75, "p95": 0.95}  # of the tables
DIGITS = 4  # doses are counted to four significant digits
LOWEST_DECADE, DECADES = -9, 18
KEY_COUNT = 1 + DECADES * 9 * 10 ** (DIGITS - 1)
MEASURE_DIGITS = 3  # times and values of each patient are counted to three
MEASURE_KEYS = 2 + DECADES * 9 * 10 ** (MEASURE_DIGITS - 1)
HIGHEST = 9.999 * 10.0 ** (LOWEST_DECADE + DECADES - 1)
TENTHS = 10_000  # sizes are counted in tenths from 0 to 1000; a bin below and one above hold the rest
TENTHS_KEYS = TENTHS + 3


def count_by_group(counts: np.ndarray, keys: np.ndarray, members: np.ndarray) -> None:
    """Count each patient's key in every group (rows of `counts`) that they belong to."""
    for group, row in enumerate(counts):
        row += np.bincount(keys[members[:, group] > 0], minlength=row.size)


def measure_keys(values: np.ndarray) -> np.ndarray:
    """Each value rounded to three significant digits, as an index: 0 for zero (and all under 1e-9), then ascending;
    the last for what never happens (inf) or lies beyond 1e9. NaN is given an index that means nothing."""
    never = values >= HIGHEST
    known = np.where(np.isnan(values) | never | (values < 10.0**LOWEST_DECADE), 0.0, values)
    return np.where(never, MEASURE_KEYS - 1, _keys(known, MEASURE_DIGITS))


def decimal_keys(values: np.ndarray) -> np.ndarray:
    """Each value rounded to four significant digits, as an index: 0 for zero, then ascending.

    Raises ProblemsError for a dose that cannot be counted: not a number, below zero, or outside 1e-9 to 1e9.
    """
    within = (values >= 10.0**LOWEST_DECADE) & (values < HIGHEST)
    if not (within | (values == 0)).all():
        wrong = values[~(within | (values == 0))][0]
        raise ProblemsError(Problem("doses", f"a total of {wrong:g} mg, or mg/kg, in a patient",
                                    f"0, or {10.0**LOWEST_DECADE:g} to {HIGHEST:g}", "check the units of the doses"))
    return _keys(values, DIGITS)


def _keys(values: np.ndarray, digits: int) -> np.ndarray:
    positive = values > 0
    safe = np.where(positive, values, 1.0)
    decade = np.floor(np.log10(safe)).astype(np.int64)
    mantissa = np.rint(safe / 10.0 ** (decade - digits + 1)).astype(np.int64)
    carried = mantissa >= 10**digits  # 9999.7 rounds up into the next decade
    decade, mantissa = np.where(carried, decade + 1, decade), np.where(carried, 10 ** (digits - 1), mantissa)
    short = mantissa < 10 ** (digits - 1)  # log10 may round up just below a power of ten
    mantissa = np.where(short, 10 ** (digits - 1), mantissa)
    keys = 1 + (decade - LOWEST_DECADE) * _mantissas(digits) + mantissa - 10 ** (digits - 1)
    return np.where(positive, keys, 0)


def _mantissas(digits: int) -> int:
    return 9 * 10 ** (digits - 1)


def decimal_value(key: int, digits: int = DIGITS) -> float:
    """The value of a key: 600.0 for the key of 600.04 to four digits."""
    if key == 0:
        return 0.0
    decade, mantissa = divmod(key - 1, _mantissas(digits))
    return float(f"{mantissa + 10 ** (digits - 1)}e{decade + LOWEST_DECADE - digits + 1}")


def measure_value(key: int) -> float:
    """The value of a key of `measure_keys`: inf for what never happens."""
    return float("inf") if key == MEASURE_KEYS - 1 else decimal_value(key, MEASURE_DIGITS)


def tenths_keys(values: np.ndarray) -> np.ndarray:
    """Each value rounded to a tenth, as an index: 0 for all below 0, the last for all above 1000."""
    return np.clip(np.rint(values * 10) + 1, 0, TENTHS_KEYS - 1).astype(np.int64)


def tenths_value(key: int) -> float:
    """The value of a key of `tenths_keys`; below and above are infinite."""
    return float("-inf") if key == 0 else float("inf") if key == TENTHS_KEYS - 1 else (key - 1) / 10


def key_of_rank(counts: np.ndarray, rank: float) -> int:
    """The key of the value of this rank, from 1 for the smallest; ranks beyond either end are brought to it."""
    until = np.cumsum(counts)
    return int(np.searchsorted(until, min(max(int(np.ceil(rank - 1e-9)), 1), int(until[-1]))))


def decimal_quantile(counts: np.ndarray, share: float) -> float:
    """Smallest counted value with at least `share` of the counts at or below it; NaN without counts."""
    return _quantile(counts, share, decimal_value)


def tenths_quantile(counts: np.ndarray, share: float) -> float:
    """The same of counts in tenths."""
    return _quantile(counts, share, tenths_value)


def _quantile(counts: np.ndarray, share: float, value: Callable[[int], float]) -> float:
    total = int(counts.sum())
    return float("nan") if total == 0 else value(key_of_rank(counts, share * total))
