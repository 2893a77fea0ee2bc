"""The one list of covariate equations: name -> function, unit, what it needs, whom it was fitted in, source."""

from __future__ import annotations

from collections.abc import Callable, Collection, Mapping
from dataclasses import dataclass, replace

import numpy as np

from covariates import body_size, kidney, maturation
from covariates.problems import Problem, ProblemsError, nearest

# What a patient may be given, and its unit. Postmenstrual age may be left out: it then follows from age.
ATTRIBUTES: dict[str, str] = {
    "sex": "",
    "age": "years",
    "weight": "kg",
    "height": "cm",
    "serum_creatinine": "mg/dL",
    "postmenstrual_age_weeks": "wk",
}


@dataclass(frozen=True)
class Equation:
    """One covariate equation.

    name      what sheets and studies call it: equation, weight and indexing
    function  numbers about a person in, the covariate out
    unit      of the covariate, UCUM spelling
    needs     pairs of the function's argument and the attribute or equation that fills it
    people    whom it was fitted in, and where it misleads
    source    where it was printed
    """

    name: str
    function: Callable[..., np.ndarray]
    unit: str
    needs: tuple[tuple[str, str], ...]
    people: str
    source: str


_WEIGHT = ("weight_kg", "weight")
_HEIGHT = ("height_cm", "height")
_SEX = ("sex", "sex")
_AGE = ("age_years", "age")
_CREATININE = ("serum_creatinine_mg_per_dl", "serum_creatinine")
_SIZE = (_WEIGHT, _HEIGHT)
_SIZE_AND_SEX = (_WEIGHT, _HEIGHT, _SEX)


def _cockcroft_gault(suffix: str, weight: str) -> Equation:
    return Equation(
        f"creatinine_clearance_cockcroft_gault_{suffix}",
        kidney.creatinine_clearance_cockcroft_gault,
        "mL/min",
        (("weight_kg", weight), _AGE, _CREATININE, _SEX),
        "249 adults, nearly all men, by 24 h urine and total weight; the factor for women was not fitted",
        "Cockcroft and Gault 1976, Nephron 16:31-41",
    )


_ALL = [
    Equation("bmi", body_size.bmi, "kg/m2", _SIZE, "anyone", "Quetelet's index; common practice"),
    Equation(
        "bmi_class_who",
        body_size.bmi_class_who,
        "",
        _SIZE,
        "adults",
        "World Health Organization 2000, Technical Report Series 894",
    ),
    Equation(
        "body_surface_area_mosteller",
        body_size.body_surface_area_mosteller,
        "m2",
        _SIZE,
        "children and adults",
        "Mosteller 1987, N Engl J Med 317:1098",
    ),
    Equation(
        "body_surface_area_du_bois",
        body_size.body_surface_area_du_bois,
        "m2",
        _SIZE,
        "nine people, none of today's sizes",
        "Du Bois and Du Bois 1916, Arch Intern Med 17:863-871",
    ),
    Equation(
        "lean_body_mass_james",
        body_size.lean_body_mass_james,
        "kg",
        _SIZE_AND_SEX,
        "adults; senseless above a mass index of 42.97 (men) or 36.15 kg/m2 (women)",
        "James 1976, Research on Obesity, HMSO, London",
    ),
    Equation(
        "lean_body_mass_janmahasatian",
        body_size.lean_body_mass_janmahasatian,
        "kg",
        _SIZE_AND_SEX,
        "adults with and without obesity",
        "Janmahasatian and others 2005, Clin Pharmacokinet 44:1051-1065",
    ),
    Equation(
        "lean_body_mass_boer",
        body_size.lean_body_mass_boer,
        "kg",
        _SIZE_AND_SEX,
        "adults",
        "Boer 1984, Am J Physiol 247:F632-F636",
    ),
    Equation(
        "lean_body_mass_hume",
        body_size.lean_body_mass_hume,
        "kg",
        _SIZE_AND_SEX,
        "adults",
        "Hume 1966, J Clin Pathol 19:389-391",
    ),
    Equation(
        "fat_free_mass_al_sallami",
        body_size.fat_free_mass_al_sallami,
        "kg",
        (_WEIGHT, _HEIGHT, _AGE, _SEX),
        "children from about 3 years, and young adults",
        "Al-Sallami and others 2015, Clin Pharmacokinet 54:1183-1192",
    ),
    Equation(
        "ideal_body_weight_devine",
        body_size.ideal_body_weight_devine,
        "kg",
        (_HEIGHT, _SEX),
        "adults of 60 inches and more; a rule of thumb, fitted to no one; negative below 97.2 cm (men) or "
        "102.2 cm (women)",
        "Devine 1974, Drug Intell Clin Pharm 8:650-655",
    ),
    Equation(
        "ideal_body_weight_robinson",
        body_size.ideal_body_weight_robinson,
        "kg",
        (_HEIGHT, _SEX),
        "adults of 60 inches and more",
        "Robinson and others 1983, Am J Hosp Pharm 40:1016-1019",
    ),
    Equation(
        "adjusted_body_weight",
        body_size.adjusted_body_weight,
        "kg",
        (_WEIGHT, ("ideal_body_weight_kg", "ideal_body_weight_devine")),
        "adults with obesity; a rule of thumb",
        "common practice; the fraction 0.4 seen in print for propofol",
    ),
    Equation(
        "predicted_normal_weight",
        body_size.predicted_normal_weight,
        "kg",
        _SIZE_AND_SEX,
        "adults; falls again at a mass index above 42.9 (men) or 36.2 kg/m2 (women)",
        "Duffull and others 2004, Clin Pharmacokinet 43:1167-1178",
    ),
    Equation(
        "pharmacokinetic_mass_shibutani",
        body_size.pharmacokinetic_mass_shibutani,
        "kg",
        (_WEIGHT,),
        "70 lean adults and 39 with obesity (mean 125 kg, 44 kg/m2); fentanyl only",
        "Shibutani and others 2004, Anesthesiology 101:603-613",
    ),
    Equation(
        "allometric_size",
        maturation.allometric_size,
        "",
        (_WEIGHT,),
        "anyone beyond infancy; in severe obesity total weight overstates it",
        "common practice",
    ),
    _cockcroft_gault("total", "weight"),
    _cockcroft_gault("ideal", "ideal_body_weight_devine"),
    _cockcroft_gault("adjusted", "adjusted_body_weight"),
    _cockcroft_gault("lean", "lean_body_mass_janmahasatian"),
    Equation(
        "creatinine_clearance_salazar_corcoran",
        kidney.creatinine_clearance_salazar_corcoran,
        "mL/min",
        (_WEIGHT, _HEIGHT, _AGE, _CREATININE, _SEX),
        "adults with obesity",
        "Salazar and Corcoran 1988, Am J Med 84:1053-1060",
    ),
    Equation(
        "egfr_ckd_epi_2021_per_1_73_m2",
        kidney.egfr_ckd_epi_2021_per_1_73_m2,
        "mL/min/{1.73_m2}",
        (_AGE, _CREATININE, _SEX),
        "adults; about 4 % too high in people who are not Black and 4 % too low in those who are",
        "Inker and others 2021, N Engl J Med 385:1737-1749",
    ),
    Equation(
        "egfr_ckd_epi_2021_absolute",
        kidney.egfr_ckd_epi_2021_absolute,
        "mL/min",
        (
            ("egfr_ml_per_min_per_1_73_m2", "egfr_ckd_epi_2021_per_1_73_m2"),
            ("body_surface_area_m2", "body_surface_area_du_bois"),
        ),
        "adults",
        "common practice",
    ),
    Equation(
        "postmenstrual_age_weeks",
        maturation.postmenstrual_age_weeks,
        "wk",
        (_AGE,),
        "anyone born at term",
        "common practice",
    ),
    Equation(
        "glomerular_filtration_rhodin_2009",
        maturation.glomerular_filtration_rhodin_2009,
        "mL/min",
        (_WEIGHT, ("postmenstrual_weeks", "postmenstrual_age_weeks")),
        "preterm newborns to young adults",
        "Rhodin and others 2009, Pediatr Nephrol 24:67-76",
    ),
]

EQUATIONS: dict[str, Equation] = {equation.name: equation for equation in _ALL}


def compute(name: str, attributes: Mapping[str, np.ndarray]) -> np.ndarray:
    """The covariate of every patient; an attribute wins over an equation of the same name.

    Arguments:
        name: an attribute or an equation [text].
        attributes: name -> values [each in the unit of ATTRIBUTES or of the equation], scalar or (n,).
    Returns:
        the covariate [unit of the equation], scalar or (n,).
    Raises:
        ProblemsError: an unknown name, missing attributes (all at once), or impossible values.
    Source: the equations' own.

    >>> compute("adjusted_body_weight", {"sex": "male", "weight": 120.0, "height": 175.0}).round(2).item()
    90.28
    """
    missing = sorted(attributes_needed(name, attributes))
    if missing:
        raise ProblemsError(_missing(name, attribute, attributes) for attribute in missing)
    return _resolve(name, attributes)


def attributes_needed(name: str, given: Collection[str] = ()) -> frozenset[str]:
    """The attributes from which this one follows (itself if it is one), less those that are given.

    Arguments:
        name: an attribute or an equation [text].
        given: names that everyone has already [text]; what lies behind them is not needed either.
    Returns:
        names of attributes [text].
    Raises:
        ProblemsError: an unknown name.
    Source: the catalogue.

    >>> sorted(attributes_needed("creatinine_clearance_cockcroft_gault_adjusted"))
    ['age', 'height', 'serum_creatinine', 'sex', 'weight']
    """
    if name in given:
        return frozenset()
    if name in EQUATIONS:
        return frozenset().union(*(attributes_needed(source, given) for _, source in EQUATIONS[name].needs))
    if name in ATTRIBUTES:
        return frozenset({name})
    raise ProblemsError(_unknown(name, given))


def _resolve(name: str, attributes: Mapping[str, np.ndarray]) -> np.ndarray:
    if name in attributes:
        return np.asarray(attributes[name])[()]
    equation = EQUATIONS[name]
    arguments = {argument: _resolve(source, attributes) for argument, source in equation.needs}
    try:
        return equation.function(**arguments)
    except ProblemsError as error:
        sources = dict(equation.needs)
        raise ProblemsError(
            replace(problem, where=f"{name}: {sources.get(problem.where, problem.where)}")
            for problem in error.problems
        ) from None


def _missing(name: str, attribute: str, given: Collection[str]) -> Problem:
    unit = f" in {ATTRIBUTES[attribute]}" if ATTRIBUTES[attribute] else ""
    strangers = [word for word in given if word not in ATTRIBUTES and word not in EQUATIONS]
    misspelt = [word for word in strangers if nearest(word, [attribute])]
    advice = f'rename "{misspelt[0]}" to "{attribute}"' if misspelt else f"give every patient {attribute}{unit}"
    return Problem(name, f"no {attribute}", f"{name} needs {', '.join(sorted(attributes_needed(name)))}", advice)


def _unknown(name: str, given: Collection[str]) -> Problem:
    known = sorted({*ATTRIBUTES, *EQUATIONS, *given})
    fuller = [word for word in known if name and name in word]
    advice = f"say which: {', '.join(fuller)}" if fuller else nearest(name, known)
    return Problem(name, "an unknown attribute or covariate", ", ".join(known), advice)
