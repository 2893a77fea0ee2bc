"""Sigmoid effect of an effect-site concentration, and back. Effects move one way with concentration."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from covariates.sheet import DrugModel


def effect_at(model: DrugModel, values: Mapping[str, np.ndarray], concentration: np.ndarray) -> np.ndarray:
    """Effect at a concentration in mg/L, (n,) or (n, times); parameters in `values` are (n,).

    effect = baseline + (at_infinity - baseline) r / (1 + r), r = (concentration / half)^steepness, with another
    steepness above `half` where the model has one. Source: the Hill equation (Hill 1910) as the model's paper has it.
    At `half` the effect lies midway: baseline 93 and 0 at infinity give 46.5.
    """
    column = (slice(None), None) if concentration.ndim == 2 else slice(None)
    baseline, at_infinity, half, below, above = (array[column] for array in effect_curve(model, values))
    with np.errstate(all="ignore"):
        ratio = concentration / half
        r = ratio ** np.where(ratio > 1, above, below)
        share = np.where(np.isinf(r), 1.0, r / (1 + r))
        return baseline + (at_infinity - baseline) * share


def concentration_at(model: DrugModel, values: Mapping[str, np.ndarray], effect: float) -> np.ndarray:
    """Concentration in mg/L that brings each patient to `effect`, (n,).

    -1 where even no drug lies past it, inf where no concentration reaches it.
    """
    baseline, at_infinity, half, below, above = effect_curve(model, values)
    with np.errstate(all="ignore"):
        share = (effect - baseline) / (at_infinity - baseline)
        ratio = share / (1 - share)
        concentration = half * ratio ** (1 / np.where(ratio > 1, above, below))
    concentration = np.where(share >= 1, np.inf, concentration)
    return np.where(share < 0, -1.0, concentration)


def falls(model: DrugModel, values: Mapping[str, np.ndarray]) -> np.ndarray:
    """(n,) bool: whether more drug lowers the effect, as with BIS."""
    baseline, at_infinity, *_ = effect_curve(model, values)
    return at_infinity < baseline


def effect_curve(model: DrugModel, values: Mapping[str, np.ndarray]) -> tuple[np.ndarray, ...]:
    """Baseline, effect at infinity, concentration of half the effect, steepness below and above it; (n,) each."""
    effect = model.effect
    assert effect is not None
    above = effect.steepness_above or effect.steepness
    return tuple(values[name] for name in (effect.baseline, effect.at_infinity, effect.half, effect.steepness, above))
