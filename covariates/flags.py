"""Where a covariate equation misleads: conditions on a person, computed and counted, never a reason to clip a value."""

from __future__ import annotations

from collections.abc import Callable, Collection
from dataclasses import dataclass

import numpy as np

from covariates.catalogue import EQUATIONS, attributes_needed
from covariates.formula import Formula, compile_formula


@dataclass(frozen=True)
class Flag:
    """One way in which an equation misleads: `words` that follow "people who are", and whom they are true of."""

    words: str
    condition: Formula


def _flag(words: str, condition: str) -> Flag:
    return Flag(words, compile_formula(condition, words, "condition"))


# The largest lean body mass of James, slope W - curvature (W/H)^2, lies at a mass index of 10^4 slope / (2 curvature):
# 42.97 kg/m2 in men and 36.15 in women. That of the predicted normal weight likewise.
_JAMES = _flag(
    "so heavy that this lean body mass falls as weight rises",
    'bmi > 10000 * (1.07 / (2 * 148) if sex == "female" else 1.10 / (2 * 128))',
)
_NORMAL = _flag(
    "so heavy that this normal weight falls as weight rises",
    'bmi > (1.75 / (2 * 0.0242) if sex == "female" else 1.57 / (2 * 0.0183))',
)
_CHILD = _flag("under 18 years, while the equation is for adults", "age < 18")
_SHORT = _flag("shorter than 60 inches (152.4 cm), where the line is only continued", "height < 152.4")

FLAGS: dict[str, tuple[Flag, ...]] = {
    "bmi_class_who": (_CHILD,),
    "lean_body_mass_james": (_JAMES, _CHILD),
    "lean_body_mass_janmahasatian": (_CHILD,),
    "lean_body_mass_boer": (_CHILD,),
    "lean_body_mass_hume": (_CHILD,),
    "fat_free_mass_al_sallami": (_flag("under 3 years, younger than it was fitted for", "age < 3"),),
    "ideal_body_weight_devine": (_SHORT, _CHILD),
    "ideal_body_weight_robinson": (_SHORT, _CHILD),
    "adjusted_body_weight": (
        _flag("lighter than their ideal weight, so that it lies above total weight",
              "weight < ideal_body_weight_devine"),
    ),
    "predicted_normal_weight": (_NORMAL, _CHILD),
    "pharmacokinetic_mass_shibutani": (
        _flag("outside the 52 to 200 kg of its table", "weight < 52 or weight > 200"),
    ),
    "creatinine_clearance_salazar_corcoran": (
        _flag("not obese, while it is for people with obesity", "bmi < 30"), _CHILD,
    ),
    "egfr_ckd_epi_2021_per_1_73_m2": (_CHILD,),
    # Rhodin and others 2009 went up to 31 years (from memory)
    "glomerular_filtration_rhodin_2009": (_flag("over 31 years, older than it was fitted for", "age > 31"),),
} | {
    name: (_CHILD,) for name in EQUATIONS if name.startswith("creatinine_clearance_cockcroft_gault")
}  # fmt: skip


def equations_behind(name: str) -> list[str]:
    """The equations from which a covariate follows, itself last; empty for an attribute or an unknown name.

    >>> equations_behind("creatinine_clearance_cockcroft_gault_ideal")
    ['ideal_body_weight_devine', 'creatinine_clearance_cockcroft_gault_ideal']
    """
    if name not in EQUATIONS:
        return []
    behind = [found for _, source in EQUATIONS[name].needs for found in equations_behind(source)]
    return list(dict.fromkeys([*behind, name]))


def flags_of(
    name: str, lookup: Callable[[str], np.ndarray], given: Collection[str]
) -> dict[tuple[str, str], np.ndarray]:
    """Whom a covariate misleads in, by itself or by an equation behind it: (equation, words of the flag) -> bool (n,).

    name    an attribute or an equation
    lookup  name -> values of these people, (n,), each in its own unit
    given   attributes that these people have; a flag that needs another is left out

    Raises ProblemsError for impossible values, as the equations do.
    """
    found = {}
    for equation in equations_behind(name):
        if equation in given:  # the people brought their own value
            continue
        for flag in FLAGS.get(equation, ()):
            if not any(attributes_needed(used, given) for used in flag.condition.names):
                found[equation, flag.words] = flag.condition.evaluate(lookup)
    return found
