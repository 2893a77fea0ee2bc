"""Shares with their simulation intervals.

The intervals tell how far the luck of drawing patients moves a number, and nothing about the model.
"""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np

Z95 = 1.959963984540054  # the 97.5 % point of the standard normal distribution
MOST_FAILED_PERCENT = 1


def no_headline(failed: np.ndarray | int, patients: np.ndarray | int) -> np.ndarray | bool:
    """Whether too many of a group failed or went without a dose to conclude anything: 11 of 1,000, not 10."""
    return failed * 100 > patients * MOST_FAILED_PERCENT


def wilson(successes: np.ndarray | int, n: np.ndarray | int) -> tuple[np.ndarray, np.ndarray]:
    """95 % Wilson score interval of a share, (low, high); NaN where n is 0.

    Source: Wilson 1927, J Am Stat Assoc 22:209-12.
    81 of 263 gives 0.2553 to 0.3662 (Newcombe 1998, Stat Med 17:857-72).
    """
    successes, n = np.asarray(successes, dtype=np.float64), np.asarray(n, dtype=np.float64)
    with np.errstate(all="ignore"):
        share = successes / n
        centre = (share + Z95**2 / (2 * n)) / (1 + Z95**2 / n)
        half = Z95 * np.sqrt(share * (1 - share) / n + Z95**2 / (4 * n**2)) / (1 + Z95**2 / n)
    # none or all: the limit is exactly 0 or 1, which rounding would miss
    low = np.where(successes == 0, 0.0, centre - half)
    high = np.where(successes == n, 1.0, centre + half)
    return np.where(n > 0, low, np.nan), np.where(n > 0, high, np.nan)


def mean_error(mean: np.ndarray | float, mean_square: np.ndarray | float, n: np.ndarray | int) -> np.ndarray | float:
    """Monte Carlo standard error of a mean from the means of x and of x squared; NaN under two patients.

    The sample SD over the root of n: 0.5 and 0.5 (ten ones in twenty) gives 0.1147.
    """
    with np.errstate(all="ignore"):
        variance = np.maximum(mean_square - np.square(mean), 0.0) / (np.asarray(n, dtype=np.float64) - 1)
        return np.where(np.asarray(n) > 1, np.sqrt(variance), np.nan)[()]


def quantile_ranks(share: float, n: int) -> tuple[float, float, float]:
    """Ranks (1 = smallest of n) of a quantile and of its 95 % interval from order statistics; they may lie beyond.

    The number of values below the true quantile is binomial; taken as normal. Source: Conover 1999, Practical
    Nonparametric Statistics, 3.2. The median of 100 lies at rank 50, its interval at 40.2 to 60.8.
    """
    half = Z95 * np.sqrt(n * share * (1 - share))
    return n * share, n * share - half, n * share + half + 1


def quantile_error(quantile: Callable[[float], float], share: float, n: int) -> float:
    """Monte Carlo standard error of a quantile of n patients, from `quantile`, which gives it at any share.

    Half the distance between the quantiles at share -+ root(share (1 - share) / n), one SD of the share to either side.
    NaN where one of them lies beyond the patients: the 5 % quantile needs 19. To the digits that are counted.
    Source: Woodruff 1952, J Am Stat Assoc 47:635-46 (from memory). The median of 100 values spread evenly over 0 to 1:
    0.05.
    """
    low, high = shares_beside(share, n)
    return (quantile(high) - quantile(low)) / 2 if 0 <= low and high <= 1 else math.nan


def shares_beside(share: float, n: int) -> tuple[float, float]:
    """A share less and plus the SD of n patients' share below its quantile; (-inf, inf) for nobody."""
    half = math.sqrt(share * (1 - share) / n) if n else math.inf
    return share - half, share + half


def paired_difference(both: int, only_a: int, only_b: int, neither: int) -> tuple[float, float, float]:
    """Difference b - a of two shares in the same people, with its 95 % interval: (difference, low, high).

    Source: Newcombe 1998, Stat Med 17:2635-50, method 10 (score intervals, with the continuity-corrected correlation).
    """
    n = both + only_a + only_b + neither
    if n == 0:
        return float("nan"), float("nan"), float("nan")
    share_a, share_b = (both + only_a) / n, (both + only_b) / n
    low_a, high_a = (float(limit) for limit in wilson(both + only_a, n))
    low_b, high_b = (float(limit) for limit in wilson(both + only_b, n))
    correlation = _paired_correlation(both, only_a, only_b, neither, n)
    difference = (only_b - only_a) / n
    down = _joined(share_b - low_b, high_a - share_a, correlation)
    up = _joined(high_b - share_b, share_a - low_a, correlation)
    return difference, difference - down, difference + up


def _paired_correlation(both: int, only_a: int, only_b: int, neither: int, n: int) -> float:
    margins = (both + only_a) * (only_b + neither) * (both + only_b) * (only_a + neither)
    if margins == 0:
        return 0.0
    product = both * neither - only_a * only_b
    if product > 0:
        product = max(product - n / 2, 0)
    return float(product / np.sqrt(float(margins)))


def _joined(one: float, other: float, correlation: float) -> float:
    return float(np.sqrt(max(one**2 - 2 * correlation * one * other + other**2, 0.0)))


def unpaired_difference(successes_a: int, n_a: int, successes_b: int, n_b: int) -> tuple[float, float, float]:
    """Difference b - a of the shares of two separate groups, with its 95 % interval: (difference, low, high).

    Source: Newcombe 1998, Stat Med 17:873-90, method 10 (score intervals).
    """
    if n_a == 0 or n_b == 0:
        return float("nan"), float("nan"), float("nan")
    share_a, share_b = successes_a / n_a, successes_b / n_b
    low_a, high_a = (float(limit) for limit in wilson(successes_a, n_a))
    low_b, high_b = (float(limit) for limit in wilson(successes_b, n_b))
    difference = share_b - share_a
    return (difference, difference - _joined(share_b - low_b, high_a - share_a, 0.0),
            difference + _joined(high_b - share_b, share_a - low_a, 0.0))


def verdict(difference_low: float, difference_high: float, matters: float | None) -> str:
    """"better", "too small to matter" or "not clear"; empty when the study names no difference that matters.

    Better: the whole interval lies beyond the smallest difference that would change a decision, on either side (the
    sign tells which of the two is the better one). Too small to matter: the whole interval lies within it.
    With 5 percentage points that matter, 0.068 to 0.092 is better and 0.043 to 0.067 is not clear.
    """
    if matters is None or not np.isfinite(difference_low):
        return ""
    if difference_low >= matters or difference_high <= -matters:
        return "better"
    if difference_low > -matters and difference_high < matters:
        return "too small to matter"
    return "not clear"
