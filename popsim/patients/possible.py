"""What can be true of a person: wide enough for anybody, tight enough to catch a wrong unit.

Source: common practice; the limits are ours.
"""

from __future__ import annotations

from collections.abc import Collection, Iterator, Mapping

import numpy as np

from covariates.maturation import WEEKS_AT_TERM, postmenstrual_age_weeks

# lowest, highest, in words, and what a number outside most likely is
POSSIBLE = {
    "age": (0.0, 120.0, "0 to 120 years", 'are these months or days? give years, or say units = { age = "months" }'),
    "weight": (0.3, 350.0, "0.3 to 350 kg", "are these pounds or grams? give kg"),
    "height": (25.0, 260.0, "25 to 260 cm", "are these metres, inches or millimetres? give cm"),
    "serum_creatinine": (
        0.05, 30.0, "0.05 to 30 mg/dL", 'are these umol/L? say so with units = { serum_creatinine = "umol/L" }',
    ),
    "bmi": (6.0, 110.0, "6 to 110 kg/m2", ""),
    "postmenstrual_age_weeks": (22.0, 6500.0, "22 to 6500 weeks", "weeks since the mother's last period began"),
    "gestational_age_weeks": (22.0, 44.0, "22 to 44 weeks", "weeks from the mother's last period to birth"),
}  # fmt: skip
# (years below, heaviest kg): nobody so young weighs more
HEAVIEST_CHILD = ((1.0, 25.0), (5.0, 80.0), (10.0, 180.0))
LIGHTEST_ADULT_KG, ADULT_YEARS = 20.0, 18.0

# attribute that follows from two others -> those two, and how
DERIVED = {
    "weight": ("bmi", "height", lambda bmi, height: bmi * (height / 100.0) ** 2),
    "height": ("weight", "bmi", lambda weight, bmi: 100.0 * np.sqrt(weight / bmi)),
    "bmi": ("weight", "height", lambda weight, height: weight / (height / 100.0) ** 2),
    "postmenstrual_age_weeks": (
        "gestational_age_weeks", "age", lambda birth, age: birth + postmenstrual_age_weeks(age) - WEEKS_AT_TERM,
    ),
}  # fmt: skip


def completed_names(names: Collection[str]) -> list[str]:
    """The names, and what follows from them."""
    derived = [name for name, (one, other, _) in DERIVED.items() if {one, other} <= set(names) and name not in names]
    return [*names, *derived]


def completed(people: Mapping[str, np.ndarray]) -> dict[str, np.ndarray]:
    """The attributes of people, and what follows from them: the third of weight, height and body mass index;
    postmenstrual age from gestational age at birth and age since."""
    found = dict(people)
    for name in completed_names(list(people))[len(people) :]:
        one, other, equation = DERIVED[name]
        found[name] = equation(people[one], people[other])
    return found


def contradictions(people: Mapping[str, np.ndarray]) -> Iterator[tuple[np.ndarray, tuple[str, ...], str]]:
    """Pairs of attributes, each possible, that cannot be true together: (n,) bool, the attributes, what is allowed."""
    if {"weight", "height"} <= people.keys():
        low, high, allowed, _ = POSSIBLE["bmi"]
        with np.errstate(divide="ignore", invalid="ignore"):
            bmi = people["weight"] / (people["height"] / 100.0) ** 2
        yield (bmi < low) | (bmi > high), ("weight", "height"), f"a body mass index of {allowed}"
    if {"weight", "age"} <= people.keys():
        age, weight = people["age"], people["weight"]
        for years, heaviest in HEAVIEST_CHILD:
            yield (
                (age < years) & (weight > heaviest),
                ("weight", "age"),
                f"at most {heaviest:g} kg below {years:g} years",
            )
        light = (age >= ADULT_YEARS) & (weight < LIGHTEST_ADULT_KG)
        yield light, ("weight", "age"), f"at least {LIGHTEST_ADULT_KG:g} kg from {ADULT_YEARS:g} years"
    if {"postmenstrual_age_weeks", "age"} <= people.keys():
        at_birth = people["postmenstrual_age_weeks"] - (
            postmenstrual_age_weeks(np.nan_to_num(np.clip(people["age"], *POSSIBLE["age"][:2]))) - WEEKS_AT_TERM
        )
        low, high, allowed, _ = POSSIBLE["gestational_age_weeks"]
        slack = 0.5 + 0.02 * np.abs(people["age"]) * 52.143  # ages in completed years or months say no more
        wrong = (at_birth < low - slack) | (at_birth > high + slack)
        yield wrong, ("postmenstrual_age_weeks", "age"), f"an age at birth of {allowed} after the last period"


def impossible(people: Mapping[str, np.ndarray]) -> np.ndarray:
    """(n,) bool: who cannot be true, each attribute alone or two together; a number that is not known cannot."""
    wrong = np.zeros(len(next(iter(people.values()))), dtype=bool)
    for name, (low, high, *_) in POSSIBLE.items():
        if name in people:
            wrong |= ~((people[name] >= low) & (people[name] <= high))
    for marked, *_ in contradictions(people):
        wrong |= marked
    return wrong
