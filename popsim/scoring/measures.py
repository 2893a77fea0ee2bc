"""How well predictions meet measurements: the measures of Varvel and others 1992, and intervals by resampling people.

Source: Varvel, Donoho, Shafer 1992, J Pharmacokinet Biopharm 20:63-94 (definitions from memory).
"""

from __future__ import annotations

import numpy as np

from popsim.streams import uniforms

RESAMPLES = 1000
FEWEST_FOR_A_VERDICT = 6  # of 5 people all favouring one model, chance alone does so in 2/2^5 = 6 %: more than 5 %
MEASURES = ("mdpe_percent", "mdape_percent", "wobble_percent", "divergence_percent_per_h")


def prediction_errors(measured: np.ndarray, predicted: np.ndarray) -> np.ndarray:
    """Percentage prediction errors 100 (measured - predicted) / predicted, (m,); NaN where nothing is predicted.

    >>> prediction_errors(np.array([3.0, 1.0]), np.array([2.0, 2.0])).tolist()
    [50.0, -50.0]
    """
    with np.errstate(all="ignore"):
        return np.where(predicted > 0, 100.0 * (measured - predicted) / predicted, np.nan)


def performance(errors: np.ndarray, time_min: np.ndarray) -> dict[str, float]:
    """The four measures of one patient from percentage errors and their times, (k,) each; all NaN where k is 0.

    MDPE is the median error (bias), MDAPE the median absolute error (inaccuracy), wobble the median absolute
    deviation of the errors from MDPE, divergence the slope of the absolute errors on time in % per hour (least squares;
    NaN with fewer than two different times).

    >>> performance(np.array([-10.0, 0.0, 20.0]), np.array([0.0, 60.0, 120.0]))["divergence_percent_per_h"]
    5.0
    """
    if len(errors) == 0:
        return dict.fromkeys(MEASURES, np.nan)
    middle, size = float(np.median(errors)), np.abs(errors)
    hours = time_min / 60.0 - np.mean(time_min / 60.0)
    slope = float(hours @ size / (hours @ hours)) if np.ptp(time_min) > 0 else np.nan
    return dict(zip(MEASURES, (middle, float(np.median(size)), float(np.median(np.abs(errors - middle))), slope),
                    strict=True))


class Resampled:
    """The same resamples of people for every model and measure, from the seed alone."""

    def __init__(self, seed: int, people: int):
        self._luck = np.stack([uniforms(seed, "score resample", k)[:people] for k in range(RESAMPLES)])

    def _drawn(self, n: int) -> np.ndarray:
        return np.minimum((self._luck[:, :n] * n).astype(np.int64), n - 1)

    def median(self, values: np.ndarray) -> tuple[float, float, float]:
        """Median over people with its 95 % interval (percentiles of resampled medians); NaN values are left out."""
        values = values[np.isfinite(values)]
        if len(values) == 0:
            return np.nan, np.nan, np.nan
        medians = np.median(values[self._drawn(len(values))], axis=1)
        return (float(np.median(values)), *_limits(medians, len(values)))

    def share(self, hits: np.ndarray, of: np.ndarray) -> tuple[float, float, float]:
        """sum(hits) / sum(of) with its 95 % interval, people resampled with all their measurements."""
        hits, of = hits[of > 0], of[of > 0]
        if len(of) == 0:
            return np.nan, np.nan, np.nan
        drawn = self._drawn(len(of))
        shares = hits[drawn].sum(axis=1) / of[drawn].sum(axis=1)
        return (float(hits.sum() / of.sum()), *_limits(shares, len(of)))


def _limits(resampled: np.ndarray, people: int) -> tuple[float, float]:
    """No interval from one person alone."""
    low, high = np.percentile(resampled, [2.5, 97.5]) if people > 1 else (np.nan, np.nan)
    return float(low), float(high)


def verdict(low: float, high: float, people: int) -> str:
    """"b", "a" or "cannot tell", from the interval of MDAPE of b minus that of a in the same people."""
    if people < FEWEST_FOR_A_VERDICT or not (high < 0 or low > 0):
        return "cannot tell"
    return "b" if high < 0 else "a"
