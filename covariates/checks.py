"""The one check of what the covariate equations are given: impossible input is refused, unusual input is computed."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from covariates.problems import Problem, ProblemsError


@dataclass(frozen=True)
class _Limit:
    """Which numbers are possible; the bounds are set where only a wrong unit or a slip can lie beyond them."""

    allowed: str
    zero_is_possible: bool = False
    at_least: float = 0.0
    below_that: str = ""
    at_most: float = np.inf
    above_that: str = ""


_ABOVE_ZERO = _Limit("a finite number above 0")
_LIMITS = {
    "height_cm": _Limit("25 or more, in cm", at_least=25.0, below_that="height looks like metres; give cm"),
    # Cockcroft and Gault's clearance turns negative at 140 years, Salazar and Corcoran's at 137.
    "age_years": _Limit("0 to 130, in years", zero_is_possible=True, at_most=130.0,
                        above_that="age looks like months or days; give years"),
    # Common practice: above 40 mg/dL is all but unheard of, and few adults have less than 40 umol/L.
    "serum_creatinine_mg_per_dl": _Limit("above 0 and up to 40, in mg/dL", at_most=40.0,
                                         above_that="creatinine looks like umol/L; divide by 88.42 to give mg/dL"),
}


def possible(**arguments) -> tuple[np.ndarray, ...]:
    """The arguments as float64 arrays in the order given, all of them possible.

    Arguments:
        arguments: name with unit = number [in the unit of its name], scalar or (n,).
    Returns:
        one float64 array each [as given], 0-d for a scalar.
    Raises:
        ProblemsError: NaN, infinite, 0 or negative (age may be 0), or beyond the limits above; one for each argument.
    Source: the limits are common practice and stand beside each number.

    >>> possible(weight_kg=70)
    (array(70.),)
    """
    values = {name: np.asarray(given, dtype=np.float64) for name, given in arguments.items()}
    problems = [problem for name, value in values.items() if (problem := _impossible(name, value))]
    if problems:
        raise ProblemsError(problems)
    return tuple(values.values())


def is_female(sex) -> np.ndarray:
    """Which of these people are women.

    Arguments:
        sex: "female" or "male" [text], scalar or (n,).
    Returns:
        bool array [true, false] of the same shape.
    Raises:
        ProblemsError: any other text.
    Source: the two words of the study file.

    >>> is_female(["female", "male"])
    array([ True, False])
    """
    sex = np.asarray(sex)
    if sex.dtype.kind not in "UOT":
        raise ProblemsError(_sex_problem(sex.ravel(), np.ones(sex.size, dtype=bool)))
    female = np.asarray(sex == "female", dtype=bool)
    wrong = ~(female | (sex == "male"))
    if np.any(wrong):
        raise ProblemsError(_sex_problem(sex.ravel(), np.ravel(wrong)))
    return female


def _impossible(name: str, value: np.ndarray) -> Problem | None:
    limit = _LIMITS.get(name, _ABOVE_ZERO)
    flat = value.ravel()
    positive = flat >= 0 if limit.zero_is_possible else flat > 0
    wrong = ~(positive & (flat >= limit.at_least) & (flat <= limit.at_most) & np.isfinite(flat))
    if not wrong.any():
        return None
    first = flat[wrong][0]
    advice = "remove or correct it"
    if 0 < first < limit.at_least:
        advice = limit.below_that
    elif limit.at_most < first < np.inf:
        advice = limit.above_that
    return Problem(name, _found(flat, wrong), limit.allowed, advice)


def _sex_problem(flat: np.ndarray, wrong: np.ndarray) -> Problem:
    return Problem("sex", _found(flat, wrong), '"female" or "male"', "write the word out, in small letters")


def _found(flat: np.ndarray, wrong: np.ndarray) -> str:
    """The first wrong value, and in an array how many there are and where it stands (1, 2, ...)."""
    first = flat[wrong][0]
    shown = f'"{first}"' if isinstance(first, str) else f"{first:g}" if isinstance(first, float) else str(first)
    if flat.size == 1:
        return shown
    return f"{shown} at position {int(np.argmax(wrong)) + 1} ({int(wrong.sum())} of {flat.size} values)"
