"""[population.described] and [population.together] of a study file -> Described."""

from __future__ import annotations

import re
from collections.abc import Collection, Mapping

from covariates.catalogue import EQUATIONS
from covariates.formula import FUNCTIONS
from covariates.problems import Problem, nearest
from covariates.sheet_section import Section
from popsim.patients.described import Described, Marginal, fit_marginal
from popsim.patients.possible import ADULT_YEARS, POSSIBLE
from popsim.study_sections import PopulationSection

ATTRIBUTE_NAME = re.compile(r"[A-Za-z][A-Za-z0-9_]{0,79}")
KINDS = {"age": "age", "weight": "body_weight", "height": "height", "bmi": "body_mass_index",
         "serum_creatinine": "creatinine", "postmenstrual_age_weeks": "postmenstrual_age",
         "gestational_age_weeks": "postmenstrual_age"}  # fmt: skip
BODY = ("weight", "height", "bmi")
SHAPES = {"normal": 1.0, "lognormal": 0.0, "box-cox": None}
NORMAL_BY_DEFAULT = ("age", "height", "gestational_age_weeks", "postmenstrual_age_weeks")
EXAMPLE = '{ mean = "64 years", sd = "11 years", range = "18 to 95 years" }'


def read_described(section: PopulationSection, where: str, problems: list[Problem]) -> Described | None:
    """The described population; None where problems were noted. `where` names the file and its [population]."""
    before = len(problems)
    table = Section(section.described, f"{where}: described", problems)
    numbers, switches = _attributes(table)
    share = {"female": 1.0, "male": 0.0}.get(section.sex, share_of_women(section))
    if share is None or not 0 <= share <= 1:
        found = "missing" if share is None else f"{100 * share:g} %"
        problems.append(Problem(f"{where}: female_share", found, 'the share of women, such as female_share = "45 %"'))
    if len(problems) == before:
        _check_body(numbers, table)
        correlations = _correlations(section.together, numbers, f"{where}: together", problems)
        described = Described(share, numbers, switches, correlations)
        _check_children(described, where, problems)
    if len(problems) > before:
        return None
    try:
        described.factor
    except ValueError as error:
        taken = ", ".join(f"{one} with {other} {value:g}" for (one, other), value in described.from_survey().items())
        problems.append(
            Problem(
                f"{where}: together",
                str(error),
                "correlations that can hold together",
                f"beside those given stand those of US adults: {taken}" if taken else "",
            )
        )
        return None
    return described if _people_are_possible(described, where, problems) else None


def _attributes(table: Section) -> tuple[dict[str, tuple[Marginal | None, Marginal | None]], dict[str, float]]:
    """Numbers with their distributions in women and in men, and switches with the share for whom they hold."""
    numbers, switches = {}, {}
    for name, entry in table.entries(EXAMPLE):
        if (
            not ATTRIBUTE_NAME.fullmatch(name)
            or name in (*FUNCTIONS, "sex", "true", "false", "patient", "label")
            or (name in EQUATIONS and name not in KINDS)
        ):
            advice = "female_share gives the share of women" if name == "sex" else ""
            table.problem(name, "no name for an attribute", "age, weight, height, or a name of its own", advice)
        elif "share" in entry.table:
            share = entry.quantity("share", "percent")
            if share is not None and share > 100:
                entry.problem("share", f"{share:g} %", "0 % to 100 %")
            switches[name] = (share or 0.0) / 100
            entry.close()
        elif {"female", "male"} & entry.table.keys():
            women, men = (_marginal(name, entry.section(sex, needed=True)) for sex in ("female", "male"))
            entry.close()
            numbers[name] = women, men
        else:
            together = _marginal(name, entry)
            numbers[name] = together, together
    return numbers, switches


def _marginal(name: str, entry: Section) -> Marginal | None:
    """The distribution that one entry describes; None where it noted problems."""
    before, kind = len(entry.problems), KINDS.get(name, "number")
    figures = {key: entry.quantity(key, kind) for key in ("mean", "sd", "median", "p05", "p95")}
    quartiles, limits = entry.range("quartiles", kind), entry.range("range", kind)
    chosen = entry.text("distribution", among=SHAPES)
    entry.close()
    if quartiles is not None:
        figures |= {"p25": quartiles.low, "p75": quartiles.high}
    figures = {key: value for key, value in figures.items() if value is not None}
    given = figures.keys()
    if len(entry.problems) == before and not (
        given == {"mean", "sd"} or ("median" in given and not {"mean", "sd"} & given and 2 <= len(given) <= 3)
    ):
        entry.problems.append(
            Problem(
                entry.where,
                ", ".join(given) or "no figures",
                "mean and sd, or median with quartiles, p05 or p95",
                EXAMPLE,
            )
        )
    for key, value in figures.items():
        if not 0 < value < float("inf"):
            entry.problem(key, f"{value:g}", "a number above 0")
    shape = SHAPES[chosen] if chosen else _usual_shape(name, given)
    if shape is None and len(figures) == 2:
        entry.problem("distribution", "box-cox with two figures", "three figures, such as median and quartiles")
    low, high = POSSIBLE[name][:2] if name in POSSIBLE else (0.0, float("inf"))
    if limits is not None:
        if limits.low > high or (limits.high < low) or 0 <= limits.low < low or high < limits.high < float("inf"):
            entry.problem("range", f'"{limits.text}"', f"within {low:g} to {high:g}")
        low, high = max(low, limits.low), min(high, limits.high)
    if len(entry.problems) > before:
        return None
    try:
        return fit_marginal(figures, low, high, shape)
    except ValueError as error:
        entry.problems.append(
            Problem(
                entry.where,
                str(error),
                "figures that hold together",
                "another distribution, another range, or check the figures and their units",
            )
        )
        return None


def _usual_shape(name: str, given: Collection[str]) -> float | None:
    if len(given) == 3:
        return None
    return 1.0 if name in NORMAL_BY_DEFAULT else 0.0


def _check_body(numbers: Mapping[str, tuple[Marginal, Marginal]], table: Section) -> None:
    body = [name for name in BODY if name in numbers]
    if len(body) == 3:
        table.problem(
            "bmi", "described beside weight and height, from which it follows", "two of weight, height and bmi"
        )
    if len({numbers[name][0] is numbers[name][1] for name in body}) > 1:
        table.problem(
            body[0],
            f"{' and '.join(body)}, one for each sex and one for both together",
            "both for each sex, or both together",
        )


def _correlations(
    together: Mapping[str, float], numbers: Mapping[str, object], where: str, problems: list[Problem]
) -> dict[tuple[str, str], float]:
    correlations: dict[tuple[str, str], float] = {}
    for key, value in together.items():
        pair = tuple(part.strip() for part in key.split(","))
        unknown = [name for name in pair if name not in numbers]
        if len(pair) != 2 or pair[0] == pair[1] or unknown:
            problems.append(
                Problem(
                    where,
                    f'"{key}"',
                    'two described numbers: "weight, height" = 0.4',
                    nearest(unknown[0], numbers) if unknown else "",
                )
            )
        elif {frozenset(pair)} & {frozenset(other) for other in correlations}:
            problems.append(Problem(where, f'"{key}" twice', "each pair once"))
        else:
            correlations[pair] = value
    return correlations


def _check_children(described: Described, where: str, problems: list[Problem]) -> None:
    """In children age and size go together so closely that it cannot be left to a default."""
    given = {frozenset(pair) for pair in described.correlations}
    for pair in (("age", "weight"), ("age", "height"), ("weight", "height")):
        if not described.adults and set(pair) <= described.numbers.keys() and frozenset(pair) not in given:
            problems.append(
                Problem(
                    f"{where}: together",
                    f"no correlation of {' and '.join(pair)}, and there may be children",
                    f'"{", ".join(pair)}" = 0.9 or what it is',
                    f"for adults: a range of age that begins at {ADULT_YEARS:g} years or later",
                )
            )


def _people_are_possible(described: Described, where: str, problems: list[Problem]) -> bool:
    """Whether the figures, each possible, give people who are."""
    possible = described.candidates(0, 0)["possible"].mean()
    if possible >= 0.9:
        return True
    found = f"{100 * (1 - possible):.0f} % of people so described cannot be true (weight, height and age together)"
    problems.append(
        Problem(f"{where}: described", found, "at most 10 %", "check the figures, their units and correlations")
    )
    return False


def share_of_women(section: PopulationSection) -> float | None:
    """The share of women that a study gives, 0 to 1."""
    return None if section.female_share is None else section.female_share.value / 100
