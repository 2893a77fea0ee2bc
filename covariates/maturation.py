"""Maturation with postmenstrual age (time since the mother's last period began), ageing, allometry."""

from __future__ import annotations

import numpy as np

from covariates.checks import possible

WEEKS_PER_YEAR = 52.143  # 365 days / 7, as printed in the papers that use it
WEEKS_AT_TERM = 40.0


def postmenstrual_age_weeks(age_years):
    """Postmenstrual age of someone born at term.

    Arguments:
        age_years: age since birth [years], scalar or (n,).
    Returns:
        postmenstrual age [weeks], same shape; too old for those born early.
    Raises:
        ProblemsError: an impossible age.
    Formula: 52.143 AGE + 40
    People: anyone born at term.
    Source: common practice (40 weeks at term).

    >>> round(float(postmenstrual_age_weeks(1)), 3)
    92.143
    """
    (age,) = possible(age_years=age_years)
    return WEEKS_PER_YEAR * age + WEEKS_AT_TERM


def sigmoid_maturation(value, half, slope):
    """The matured share, from 0 to 1, on a sigmoid curve.

    Arguments:
        value: how far someone has come, such as postmenstrual age [any unit], scalar or (n,), 0 or more.
        half: where the share is one half [unit of value], scalar or (n,), above 0.
        slope: steepness [number without unit], scalar or (n,), above 0.
    Returns:
        matured share [fraction], same shape.
    Raises:
        ValueError: a negative, NaN or infinite value; half or slope not above 0.
    Formula: v^slope / (v^slope + half^slope)
    People: those of the paper that printed half and slope.
    Source: Hill's equation; common practice.

    >>> round(float(sigmoid_maturation(60, 47.7, 3.4)), 4)
    0.6857
    """
    value, half, slope = (np.asarray(given, dtype=np.float64) for given in (value, half, slope))
    if not np.all(np.isfinite(value) & (value >= 0)):
        raise ValueError("value must be finite and not negative")
    if not np.all(np.isfinite(half) & (half > 0) & np.isfinite(slope) & (slope > 0)):
        raise ValueError("half and slope must be finite and above 0")
    with np.errstate(divide="ignore", over="ignore"):  # a share of exactly 0 at value 0
        return 1.0 / (1.0 + (half / value) ** slope)


def glomerular_filtration_rhodin_2009(weight_kg, postmenstrual_weeks):
    """Glomerular filtration rate from preterm birth to adult life, with healthy kidneys.

    Arguments:
        weight_kg: total body weight [kg], scalar or (n,).
        postmenstrual_weeks: postmenstrual age [weeks], scalar or (n,).
    Returns:
        glomerular filtration rate [mL/min], same shape.
    Raises:
        ProblemsError: an impossible weight or age.
    Formula: 121.2 (W/70)^0.75 PMA^3.4 / (PMA^3.4 + 47.7^3.4)
    People: preterm newborns to young adults (from memory); it knows of no decline with age.
    Source: Rhodin and others 2009, Pediatr Nephrol 24:67-76 (from memory).

    >>> round(float(glomerular_filtration_rhodin_2009(3.5, 40)), 2)
    4.55
    """
    weight, weeks = possible(weight_kg=weight_kg, postmenstrual_weeks=postmenstrual_weeks)
    return 121.2 * (weight / 70.0) ** 0.75 * sigmoid_maturation(weeks, 47.7, 3.4)


def exponential_ageing(age_years, change_per_year, reference_years):
    """The factor by which a parameter changes with age, a constant share each year.

    Arguments:
        age_years: age [years], scalar or (n,).
        change_per_year: change of the logarithm each year [1/year], negative for a decline, scalar or (n,).
        reference_years: age at which the factor is 1 [years], scalar or (n,).
    Returns:
        factor [number without unit], same shape, always above 0.
    Raises:
        ProblemsError: an impossible age.
    Formula: exp(change (AGE - reference))
    People: those of the paper that printed the change.
    Source: common practice.

    >>> round(float(exponential_ageing(75, -0.0156, 35)), 3)
    0.536
    """
    age, reference = possible(age_years=age_years, reference_years=reference_years)
    return np.exp(np.asarray(change_per_year, dtype=np.float64) * (age - reference))


def linear_ageing(age_years, change_per_year, reference_years):
    """The factor by which a parameter changes with age, the same amount each year.

    Arguments:
        age_years: age [years], scalar or (n,).
        change_per_year: change of the factor each year [1/year], negative for a decline, scalar or (n,).
        reference_years: age at which the factor is 1 [years], scalar or (n,).
    Returns:
        factor [number without unit], same shape; 0 and less from a certain age on, never clipped.
    Raises:
        ProblemsError: an impossible age.
    Formula: 1 + change (AGE - reference)
    People: those of the paper that printed the change.
    Source: common practice.

    >>> round(float(linear_ageing(75, -0.00678, 43)), 3)
    0.783
    """
    age, reference = possible(age_years=age_years, reference_years=reference_years)
    return 1.0 + np.asarray(change_per_year, dtype=np.float64) * (age - reference)


def allometric_size(weight_kg, exponent=0.75):
    """How large a clearance is for that weight, relative to an adult of 70 kg.

    Arguments:
        weight_kg: total body weight [kg], scalar or (n,).
        exponent: of the power [number without unit], 0.75 for clearances, scalar or (n,).
    Returns:
        relative size [number without unit], same shape.
    Raises:
        ProblemsError: an impossible weight, or an exponent that is not above 0.
    Formula: (W / 70)^exponent, exponent 0.75 in the catalogue
    People: anyone beyond infancy; in severe obesity total weight overstates it.
    Source: common practice (from memory).

    >>> round(float(allometric_size(120)), 3)
    1.498
    """
    weight, power = possible(weight_kg=weight_kg, exponent=exponent)
    return (weight / 70.0) ** power
