"""What follows from a model's parameters in one person: half-lives, volume at steady state, time to peak, time to half.

numpy alone and one person at a time: it answers at once, where the solver of `solve.py` would first be compiled.
Everything is in mg, L, min. Source of the mathematics: the mammillary model, from memory; its flow matrix, weighted by
the square roots of the volumes, is symmetric, so its rates are real and found without loss.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping

import numpy as np

PAIRS = (("V2", "Q2"), ("V3", "Q3"))
LONGEST_MIN = 1e7


class Disposition:
    """One person's compartments.

    volumes  (k,) L, the central one first
    filling  (k - 1,) 1/min, rate constants at which the others fill towards plasma that is held constant
    rates    (k,) 1/min, ascending: those of the exponentials of which plasma is a sum
    """

    def __init__(self, parameters: Mapping[str, float]):
        pairs = [(parameters[volume], parameters[flow]) for volume, flow in PAIRS if volume in parameters]
        self.volumes = np.array([parameters["V1"], *(volume for volume, _ in pairs)])
        flows = np.array([parameters["CL"], *(flow for _, flow in pairs)])
        matrix = np.zeros((len(self.volumes), len(self.volumes)))
        matrix[0, 0] = flows.sum() / self.volumes[0]
        for i, flow in enumerate(flows[1:], start=1):
            matrix[i, i] = flow / self.volumes[i]
            matrix[0, i] = matrix[i, 0] = -flow / np.sqrt(self.volumes[0] * self.volumes[i])
        self.filling = np.diag(matrix)[1:]
        self.rates, self._modes = np.linalg.eigh(matrix)

    def plasma_weights(self, concentrations: np.ndarray) -> np.ndarray:
        """Plasma from these concentrations (k,) on, no further doses: the sum over i of weights[i] exp(-rates[i] t)."""
        scale = np.sqrt(self.volumes)
        return self._modes[0] / scale[0] * (self._modes.T @ (scale * concentrations))

    def after_bolus(self) -> np.ndarray:
        """Weights (k,) of plasma after 1 mg into the central compartment."""
        return self.plasma_weights(np.eye(len(self.volumes))[0] / self.volumes[0])


def half_lives(disposition: Disposition) -> np.ndarray:
    """Half-lives (k,) of the phases, min, shortest first."""
    return np.log(2.0) / disposition.rates[::-1]


def steady_state_volume(disposition: Disposition) -> float:
    """L."""
    return float(disposition.volumes.sum())


def time_to_peak(disposition: Disposition, rate: float) -> float:
    """Minutes from a bolus to the peak of an effect site with this rate constant (ke0).

    Or from an oral dose, after its lag, to the peak in plasma, with `rate` as the rate constant of absorption (ka):
    both courses are the same convolution. Its slope is zero once only, where the bolus course equals the delayed one.
    """
    weights, rates = disposition.after_bolus(), disposition.rates

    def still_rising(minutes: float) -> bool:
        gap = np.abs(rates - rate) * minutes
        with np.errstate(invalid="ignore"):
            mean = np.where(gap == 0.0, 1.0, -np.expm1(-gap) / gap)  # equal rates are no special case
        delayed = rate * minutes * np.exp(-np.minimum(rates, rate) * minutes) * mean
        return float(weights @ np.exp(-rates * minutes)) > float(weights @ delayed)

    return _last_time(still_rising)


def time_to_half(disposition: Disposition, infused_min: float, held: bool) -> float:
    """Context-sensitive half-time: minutes from the stop of an infusion until plasma is half of what it was.

    held  True: plasma was held constant before the stop; False: the rate was constant
    """
    if held:
        filling = -np.expm1(-disposition.filling * infused_min)
        weights = disposition.plasma_weights(np.concatenate([[1.0], filling]))
    else:
        weights = disposition.after_bolus() / disposition.rates * -np.expm1(-disposition.rates * infused_min)
    start = weights.sum()
    return _last_time(lambda minutes: weights @ np.exp(-disposition.rates * minutes) > start / 2)


def _last_time(holds: Callable[[float], bool]) -> float:
    """The time until which a condition holds that starts out true and changes once; inf beyond LONGEST_MIN."""
    low, high = 0.0, 1.0
    while holds(high):
        low, high = high, 2.0 * high
        if high > LONGEST_MIN:
            return np.inf
    while high - low > 1e-10 * high:
        middle = (low + high) / 2
        low, high = (middle, high) if holds(middle) else (low, middle)
    return (low + high) / 2
