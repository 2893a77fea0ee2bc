"""Body size: mass index, surface area, lean, fat-free, ideal, adjusted, normal and pharmacokinetic mass.

Numbers about a person in, one number out, for scalars or whole arrays. Values outside the people an equation was
fitted in are computed, never clipped; only impossible input is refused. "Seen in print" means that the equation was
read in print, "from memory" that it was not; the citations themselves are from memory.
"""

from __future__ import annotations

import numpy as np

from covariates.checks import is_female, possible
from covariates.maturation import sigmoid_maturation

CM_PER_INCH = 2.54
BMI_CLASSES_WHO = ("underweight", "normal", "pre-obesity", "obesity I", "obesity II", "obesity III")
_CLASS_LIMITS = (18.5, 25.0, 30.0, 35.0, 40.0)


def bmi(weight_kg, height_cm):
    """Body mass index.

    Arguments:
        weight_kg: total body weight [kg], scalar or (n,).
        height_cm: height [cm], scalar or (n,).
    Returns:
        body mass index [kg/m2], same shape.
    Raises:
        ProblemsError: an impossible weight or height.
    Formula: W / (H/100)^2
    People: anyone.
    Source: Quetelet's index; common practice.

    >>> round(float(bmi(70, 170)), 2)
    24.22
    """
    weight, height = possible(weight_kg=weight_kg, height_cm=height_cm)
    return weight / (height / 100.0) ** 2


def bmi_class_who(weight_kg, height_cm):
    """The World Health Organization's class of body mass index, as a number.

    Arguments:
        weight_kg: total body weight [kg], scalar or (n,).
        height_cm: height [cm], scalar or (n,).
    Returns:
        class [number without unit], same shape: 0 underweight, 1 normal, 2 pre-obesity, 3, 4 and 5 obesity of class
        I, II and III; BMI_CLASSES_WHO has the words.
    Raises:
        ProblemsError: an impossible weight or height.
    Formula: how many of 18.5, 25, 30, 35 and 40 kg/m2 the body mass index reaches
    People: adults.
    Source: World Health Organization 2000, Technical Report Series 894 (from memory).

    >>> BMI_CLASSES_WHO[int(bmi_class_who(120, 175))]
    'obesity II'
    """
    return np.searchsorted(_CLASS_LIMITS, bmi(weight_kg, height_cm), side="right").astype(np.float64)[()]


def body_surface_area_mosteller(weight_kg, height_cm):
    """Body surface area by Mosteller's square root.

    Arguments:
        weight_kg: total body weight [kg], scalar or (n,).
        height_cm: height [cm], scalar or (n,).
    Returns:
        body surface area [m2], same shape.
    Raises:
        ProblemsError: an impossible weight or height.
    Formula: sqrt(W H / 3600)
    People: children and adults.
    Source: Mosteller 1987, N Engl J Med 317:1098 (from memory).

    >>> round(float(body_surface_area_mosteller(70, 170)), 3)
    1.818
    """
    weight, height = possible(weight_kg=weight_kg, height_cm=height_cm)
    return np.sqrt(weight * height / 3600.0)


def body_surface_area_du_bois(weight_kg, height_cm):
    """Body surface area by Du Bois and Du Bois.

    Arguments:
        weight_kg: total body weight [kg], scalar or (n,).
        height_cm: height [cm], scalar or (n,).
    Returns:
        body surface area [m2], same shape.
    Raises:
        ProblemsError: an impossible weight or height.
    Formula: 0.007184 W^0.425 H^0.725
    People: nine people, none of today's sizes (from memory).
    Source: Du Bois and Du Bois 1916, Arch Intern Med 17:863-871 (from memory).

    >>> round(float(body_surface_area_du_bois(70, 170)), 3)
    1.81
    """
    weight, height = possible(weight_kg=weight_kg, height_cm=height_cm)
    return 0.007184 * weight**0.425 * height**0.725


def lean_body_mass_james(weight_kg, height_cm, sex):
    """Lean body mass by James, which falls again in obesity: flags.py marks whom that reaches.

    Arguments:
        weight_kg: total body weight [kg], scalar or (n,).
        height_cm: height [cm], scalar or (n,).
        sex: "female" or "male" [text], scalar or (n,).
    Returns:
        lean body mass [kg], same shape; negative at an extreme mass index.
    Raises:
        ProblemsError: an impossible weight, height or sex.
    Formula: male 1.10 W - 128 (W/H)^2; female 1.07 W - 148 (W/H)^2. Some reprints carry 120 for men (from memory).
    People: adults; senseless above a mass index of 42.97 (men) or 36.15 kg/m2 (women).
    Source: James 1976, Research on Obesity, HMSO, London (seen in print).

    >>> round(float(lean_body_mass_james(70, 170, "male")), 2)
    55.3
    """
    weight, height = possible(weight_kg=weight_kg, height_cm=height_cm)
    slope, curvature = _by_sex(sex, female=1.07, male=1.10), _by_sex(sex, female=148.0, male=128.0)
    return slope * weight - curvature * (weight / height) ** 2


def lean_body_mass_janmahasatian(weight_kg, height_cm, sex):
    """Lean body mass by Janmahasatian and others, which keeps rising with weight.

    Arguments:
        weight_kg: total body weight [kg], scalar or (n,).
        height_cm: height [cm], scalar or (n,).
        sex: "female" or "male" [text], scalar or (n,).
    Returns:
        lean body mass [kg], same shape.
    Raises:
        ProblemsError: an impossible weight, height or sex.
    Formula: male 9270 W / (6680 + 216 BMI); female 9270 W / (8780 + 244 BMI)
    People: adults with and without obesity.
    Source: Janmahasatian and others 2005, Clin Pharmacokinet 44:1051-1065 (seen in print).

    >>> round(float(lean_body_mass_janmahasatian(70, 170, "male")), 2)
    54.48
    """
    mass_index = bmi(weight_kg, height_cm)
    constant = _by_sex(sex, female=8780.0, male=6680.0)
    return 9270.0 * np.asarray(weight_kg, np.float64) / (constant + _by_sex(sex, female=244.0, male=216.0) * mass_index)


def lean_body_mass_boer(weight_kg, height_cm, sex):
    """Lean body mass by Boer.

    Arguments:
        weight_kg: total body weight [kg], scalar or (n,).
        height_cm: height [cm], scalar or (n,).
        sex: "female" or "male" [text], scalar or (n,).
    Returns:
        lean body mass [kg], same shape; negative in the very small.
    Raises:
        ProblemsError: an impossible weight, height or sex.
    Formula: male 0.407 W + 0.267 H - 19.2; female 0.252 W + 0.473 H - 48.3
    People: adults.
    Source: Boer 1984, Am J Physiol 247:F632-F636 (seen in print).

    >>> round(float(lean_body_mass_boer(70, 170, "male")), 2)
    54.68
    """
    weight, height = possible(weight_kg=weight_kg, height_cm=height_cm)
    female = is_female(sex)
    return np.where(female, 0.252 * weight + 0.473 * height - 48.3, 0.407 * weight + 0.267 * height - 19.2)[()]


def lean_body_mass_hume(weight_kg, height_cm, sex):
    """Lean body mass by Hume.

    Arguments:
        weight_kg: total body weight [kg], scalar or (n,).
        height_cm: height [cm], scalar or (n,).
        sex: "female" or "male" [text], scalar or (n,).
    Returns:
        lean body mass [kg], same shape; negative in the very small.
    Raises:
        ProblemsError: an impossible weight, height or sex.
    Formula: male 0.32810 W + 0.33929 H - 29.5336; female 0.29569 W + 0.41813 H - 43.2933
    People: adults.
    Source: Hume 1966, J Clin Pathol 19:389-391 (seen in print).

    >>> round(float(lean_body_mass_hume(70, 170, "male")), 2)
    51.11
    """
    weight, height = possible(weight_kg=weight_kg, height_cm=height_cm)
    women = 0.29569 * weight + 0.41813 * height - 43.2933
    men = 0.32810 * weight + 0.33929 * height - 29.5336
    return np.where(is_female(sex), women, men)[()]


def fat_free_mass_al_sallami(weight_kg, height_cm, age_years, sex):
    """Fat-free mass from childhood on: Janmahasatian's equation times a maturation by age.

    Arguments:
        weight_kg: total body weight [kg], scalar or (n,).
        height_cm: height [cm], scalar or (n,).
        age_years: age [years], scalar or (n,).
        sex: "female" or "male" [text], scalar or (n,).
    Returns:
        fat-free mass [kg], same shape.
    Raises:
        ProblemsError: an impossible weight, height, age or sex.
    Formula: male (0.88 + 0.12 / (1 + (AGE/13.4)^-12.7)) J; female (1.11 - 0.11 / (1 + (AGE/7.1)^-1.1)) J;
        J = Janmahasatian's lean body mass
    People: children from about 3 years, and young adults (from memory).
    Source: Al-Sallami and others 2015, Clin Pharmacokinet 54:1183-1192 (paper seen; coefficients from memory).

    >>> round(float(fat_free_mass_al_sallami(70, 170, 35, "male")), 3)
    54.475
    """
    adult = lean_body_mass_janmahasatian(weight_kg, height_cm, sex)
    (age,) = possible(age_years=age_years)
    women = 1.11 - 0.11 * sigmoid_maturation(age, 7.1, 1.1)
    men = 0.88 + 0.12 * sigmoid_maturation(age, 13.4, 12.7)
    return np.where(is_female(sex), women, men) * adult


def ideal_body_weight_devine(height_cm, sex):
    """Ideal body weight by Devine.

    Arguments:
        height_cm: height [cm], scalar or (n,).
        sex: "female" or "male" [text], scalar or (n,).
    Returns:
        ideal body weight [kg], same shape; below 60 inches (152.4 cm) the line is continued as it is.
    Raises:
        ProblemsError: an impossible height or sex.
    Formula: male 50, female 45.5, and 2.3 kg for each inch over 60
    People: adults of 60 inches and more; a rule of thumb, fitted to no one; negative below 97.2 cm (men) or
        102.2 cm (women).
    Source: Devine 1974, Drug Intell Clin Pharm 8:650-655 (seen in print).

    >>> round(float(ideal_body_weight_devine(170, "male")), 2)
    65.94
    """
    return _by_sex(sex, female=45.5, male=50.0) + 2.3 * _inches_over_60(height_cm)


def ideal_body_weight_robinson(height_cm, sex):
    """Ideal body weight by Robinson and others.

    Arguments:
        height_cm: height [cm], scalar or (n,).
        sex: "female" or "male" [text], scalar or (n,).
    Returns:
        ideal body weight [kg], same shape; below 60 inches (152.4 cm) the line is continued as it is.
    Raises:
        ProblemsError: an impossible height or sex.
    Formula: male 52 + 1.9, female 49 + 1.7 kg for each inch over 60
    People: adults of 60 inches and more.
    Source: Robinson and others 1983, Am J Hosp Pharm 40:1016-1019 (from memory).

    >>> round(float(ideal_body_weight_robinson(170, "male")), 2)
    65.17
    """
    return _by_sex(sex, female=49.0, male=52.0) + _by_sex(sex, female=1.7, male=1.9) * _inches_over_60(height_cm)


def adjusted_body_weight(weight_kg, ideal_body_weight_kg, excess_fraction=0.4):
    """Ideal weight and a fraction of what is above it, two fifths unless given.

    Arguments:
        weight_kg: total body weight [kg], scalar or (n,).
        ideal_body_weight_kg: ideal body weight by Devine [kg], scalar or (n,).
        excess_fraction: part of the excess over ideal weight that counts [fraction], scalar or (n,).
    Returns:
        adjusted body weight [kg], same shape; above total weight in those who weigh less than their ideal.
    Raises:
        ProblemsError: an impossible weight, an ideal weight or a fraction that is not above 0.
    Formula: I + fraction (W - I), fraction 0.4 in the catalogue
    People: adults with obesity; a rule of thumb.
    Source: common practice; the fraction 0.4 seen in print for propofol (0.3 to 0.4 in use).

    >>> round(float(adjusted_body_weight(120, ideal_body_weight_devine(175, "male"))), 2)
    90.28
    """
    weight, ideal, fraction = possible(
        weight_kg=weight_kg, ideal_body_weight_kg=ideal_body_weight_kg, excess_fraction=excess_fraction
    )
    return ideal + fraction * (weight - ideal)


def predicted_normal_weight(weight_kg, height_cm, sex):
    """What a person with obesity would weigh with a normal share of fat.

    Arguments:
        weight_kg: total body weight [kg], scalar or (n,).
        height_cm: height [cm], scalar or (n,).
        sex: "female" or "male" [text], scalar or (n,).
    Returns:
        predicted normal weight [kg], same shape.
    Raises:
        ProblemsError: an impossible weight, height or sex.
    Formula: male 1.57 W - 0.0183 BMI W - 10.5; female 1.75 W - 0.0242 BMI W - 12.6
    People: adults; falls again at a mass index above 42.9 (men) or 36.2 kg/m2 (women).
    Source: Duffull and others 2004, Clin Pharmacokinet 43:1167-1178 (from memory).

    >>> round(float(predicted_normal_weight(120, 175, "male")), 2)
    91.85
    """
    mass_index = bmi(weight_kg, height_cm)
    weight = np.asarray(weight_kg, np.float64)
    women = 1.75 * weight - 0.0242 * mass_index * weight - 12.6
    men = 1.57 * weight - 0.0183 * mass_index * weight - 10.5
    return np.where(is_female(sex), women, men)[()]


def pharmacokinetic_mass_shibutani(weight_kg):
    """The weight by which fentanyl doses scale in people with and without obesity.

    Arguments:
        weight_kg: total body weight [kg], scalar or (n,).
    Returns:
        pharmacokinetic mass [kg], same shape; 112 at most.
    Raises:
        ProblemsError: an impossible weight.
    Formula: 52 / (1 + (196.4 exp(-0.025 W) - 53.66) / 100)
    People: 70 lean adults and 39 with obesity (mean 125 kg, 44 kg/m2); fentanyl only.
    Source: Shibutani and others 2004, Anesthesiology 101:603-613 (formula from memory; it returns the eight pairs
        of the paper's table, which were seen in print).

    >>> round(float(pharmacokinetic_mass_shibutani(140)))
    99
    """
    (weight,) = possible(weight_kg=weight_kg)
    return 52.0 / (1.0 + (196.4 * np.exp(-0.025 * weight) - 53.66) / 100.0)


def _by_sex(sex, female: float, male: float) -> np.ndarray:
    return np.where(is_female(sex), female, male)


def _inches_over_60(height_cm):
    (height,) = possible(height_cm=height_cm)
    return height / CM_PER_INCH - 60.0
