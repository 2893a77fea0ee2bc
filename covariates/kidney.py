"""Kidney function from serum creatinine, for people whose creatinine is steady.

The equations estimate different things: creatinine clearance (mL/min), or glomerular filtration per 1.73 m2 of body
surface. They are not interchangeable, so each name says equation, weight and indexing.
"""

from __future__ import annotations

import numpy as np

from covariates.checks import is_female, possible


def creatinine_clearance_cockcroft_gault(weight_kg, age_years, serum_creatinine_mg_per_dl, sex):
    """Creatinine clearance by Cockcroft and Gault, with whichever weight is given.

    Arguments:
        weight_kg: the chosen weight: total, ideal, adjusted or lean [kg], scalar or (n,).
        age_years: age [years], scalar or (n,).
        serum_creatinine_mg_per_dl: serum creatinine [mg/dL], scalar or (n,).
        sex: "female" or "male" [text], scalar or (n,).
    Returns:
        creatinine clearance [mL/min], same shape, not per 1.73 m2.
    Raises:
        ProblemsError: an impossible weight, age, creatinine or sex.
    Formula: (140 - AGE) W / (72 SCr), times 0.85 in women
    People: 249 adults, nearly all men, by 24 h urine and total weight; the factor for women was not fitted
        (from memory).
    Source: Cockcroft and Gault 1976, Nephron 16:31-41 (seen in print).

    >>> round(float(creatinine_clearance_cockcroft_gault(70, 65, 1.4, "male")), 2)
    52.08
    """
    weight, age, creatinine = possible(
        weight_kg=weight_kg, age_years=age_years, serum_creatinine_mg_per_dl=serum_creatinine_mg_per_dl
    )
    return (140.0 - age) * weight / (72.0 * creatinine) * np.where(is_female(sex), 0.85, 1.0)


def creatinine_clearance_salazar_corcoran(weight_kg, height_cm, age_years, serum_creatinine_mg_per_dl, sex):
    """Creatinine clearance in people with obesity by Salazar and Corcoran.

    Arguments:
        weight_kg: total body weight [kg], scalar or (n,).
        height_cm: height [cm], scalar or (n,).
        age_years: age [years], scalar or (n,).
        serum_creatinine_mg_per_dl: serum creatinine [mg/dL], scalar or (n,).
        sex: "female" or "male" [text], scalar or (n,).
    Returns:
        creatinine clearance [mL/min], same shape.
    Raises:
        ProblemsError: an impossible weight, height, age, creatinine or sex.
    Formula: male (137 - AGE) (0.285 W + 12.1 Hm^2) / (51 SCr); female (146 - AGE) (0.287 W + 9.74 Hm^2) / (60 SCr);
        Hm in metres
    People: adults with obesity.
    Source: Salazar and Corcoran 1988, Am J Med 84:1053-1060 (from memory).

    >>> round(float(creatinine_clearance_salazar_corcoran(120, 175, 50, 1.0, "male")), 2)
    121.55
    """
    weight, height, age, creatinine = possible(
        weight_kg=weight_kg,
        height_cm=height_cm,
        age_years=age_years,
        serum_creatinine_mg_per_dl=serum_creatinine_mg_per_dl,
    )
    height_squared = (height / 100.0) ** 2
    women = (146.0 - age) * (0.287 * weight + 9.74 * height_squared) / (60.0 * creatinine)
    men = (137.0 - age) * (0.285 * weight + 12.1 * height_squared) / (51.0 * creatinine)
    return np.where(is_female(sex), women, men)[()]


def egfr_ckd_epi_2021_per_1_73_m2(age_years, serum_creatinine_mg_per_dl, sex):
    """Estimated glomerular filtration rate by the race-free creatinine equation of 2021, per 1.73 m2.

    Arguments:
        age_years: age [years], scalar or (n,).
        serum_creatinine_mg_per_dl: standardised serum creatinine [mg/dL], scalar or (n,).
        sex: "female" or "male" [text], scalar or (n,).
    Returns:
        estimated glomerular filtration rate [mL/min/1.73 m2], same shape.
    Raises:
        ProblemsError: an impossible age, creatinine or sex.
    Formula: 142 min(SCr/k, 1)^a max(SCr/k, 1)^-1.200 0.9938^AGE, times 1.012 in women;
        k 0.7 and a -0.241 in women, k 0.9 and a -0.302 in men
    People: adults; about 4 % too high in people who are not Black and 4 % too low in those who are.
    Source: Inker and others 2021, N Engl J Med 385:1737-1749 (seen in print).

    >>> round(float(egfr_ckd_epi_2021_per_1_73_m2(50, 1.0, "male")), 2)
    91.69
    """
    age, creatinine = possible(age_years=age_years, serum_creatinine_mg_per_dl=serum_creatinine_mg_per_dl)
    female = is_female(sex)
    relative = creatinine / np.where(female, 0.7, 0.9)
    below = np.minimum(relative, 1.0) ** np.where(female, -0.241, -0.302)
    above = np.maximum(relative, 1.0) ** -1.200
    return 142.0 * below * above * 0.9938**age * np.where(female, 1.012, 1.0)


def egfr_ckd_epi_2021_absolute(egfr_ml_per_min_per_1_73_m2, body_surface_area_m2):
    """Estimated glomerular filtration rate of the person, no longer per 1.73 m2: the one that drug clearance follows.

    Arguments:
        egfr_ml_per_min_per_1_73_m2: the indexed rate [mL/min/1.73 m2], scalar or (n,).
        body_surface_area_m2: body surface area by Du Bois [m2], scalar or (n,).
    Returns:
        estimated glomerular filtration rate [mL/min], same shape.
    Raises:
        ProblemsError: an impossible rate or surface.
    Formula: eGFR BSA / 1.73
    People: adults.
    Source: common practice (from memory).

    >>> round(float(egfr_ckd_epi_2021_absolute(91.69, 2.324)), 2)
    123.17
    """
    indexed, area = possible(
        egfr_ml_per_min_per_1_73_m2=egfr_ml_per_min_per_1_73_m2, body_surface_area_m2=body_surface_area_m2
    )
    return indexed * area / 1.73
