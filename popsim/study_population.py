"""The [population] of a study file -> Population: where the patients come from, in internal units."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path

from covariates.catalogue import EQUATIONS
from covariates.formula import FUNCTIONS
from covariates.problems import Problem, ProblemsError
from covariates.sheet_section import Section
from covariates.units import parse_quantity, parse_range
from popsim.patients.ages import OLDEST_YEARS, YOUNGEST_YEARS
from popsim.patients.described import Described
from popsim.patients.listed import list_columns
from popsim.patients.population import LIMITED, SCALED, SURVEY_ATTRIBUTES, Population
from popsim.patients.possible import POSSIBLE, completed_names
from popsim.study_described import ATTRIBUTE_NAME, BODY, KINDS, read_described, share_of_women
from popsim.study_sections import PopulationSection
from popsim.study_values import shown

OWN_SOURCE = {"file": "list", "on_bad_row": "list", "units": "list", "described": "described", "together": "described",
              "lattice": "lattice", "each": "lattice", "age_mix": "survey"}  # fmt: skip
MOST_VALUES = 10_000  # on one axis of a lattice


def resolve_population(
    section: PopulationSection, path: Path, problems: list[Problem]
) -> tuple[Population, dict[str, str]]:
    """The population, and what each patient brings: attribute -> "number", "condition" or "text"; "" for a column
    that only the list itself can tell."""
    where = f"{path.name}: population"

    def say(key: str, found: str, allowed: str, advice: str = "") -> None:
        problems.append(Problem(f"{where}: {key}", found, allowed, advice))

    for key, source in OWN_SOURCE.items():
        if section.source != source and getattr(section, key) not in (None, {}):
            say(key, f'given with source = "{section.source}"', f'only with source = "{source}"')
    if section.female_share is not None and (section.source not in ("survey", "described") or section.sex):
        say(
            "female_share",
            "given with one sex only, or with people whose sex is given",
            'only with source = "survey" or "described", and without sex',
        )
    described = lattice = None
    if section.source == "described" and section.described:
        described = read_described(section, where, problems)
    if section.source == "lattice" and section.lattice:
        lattice = _lattice(section.lattice, f"{where}: lattice", problems)
    brought = _brought(section, described, lattice, path, problems)
    _check_set_and_scale(section, brought, say)
    population = Population(
        source=section.source,
        count=section.count,
        limits={name: (limit.low, limit.high) for name in LIMITED if (limit := getattr(section, name)) is not None},
        sex=section.sex,
        where=section.where,
        set=dict(section.set),
        scale=dict(section.scale),
        file=None if section.file is None else path.parent / section.file,
        on_bad_row=section.on_bad_row or "stop",
        units=dict(section.units),
        age_mix=_age_mix(section.age_mix, f"{where}: age_mix", problems),
        female_share=share_of_women(section) if section.source == "survey" else None,
        described=described,
        lattice=lattice or {},
        each=section.each or 1,
    )
    said = [problem.where for problem in problems]
    said += [
        f"{where}: {key}" for key, table in (("described", section.described), ("lattice", section.lattice)) if table
    ]
    problems.extend(
        replace(problem, where=full)
        for problem in population.problems()
        if (full := f"{path.name}: {problem.where}") and not any(place.startswith(full) for place in said)
    )
    return population, brought


def _brought(
    section: PopulationSection,
    described: Described | None,
    lattice: Mapping[str, tuple] | None,
    path: Path,
    problems: list[Problem],
) -> dict[str, str]:
    def kind(name: str, value: object = 0.0) -> str:
        return "text" if name == "sex" else "condition" if isinstance(value, bool) else "number"

    usual = {name: kind(name) for name in SURVEY_ATTRIBUTES}
    if described is not None:
        return {name: kind(name, True if name in described.switches else 0.0) for name in described.attributes()}
    if lattice is not None:
        return {
            name: kind(name, lattice[name][0] if name in lattice else 0.0) for name in completed_names(list(lattice))
        }
    if section.source != "list" or section.file is None:
        return usual
    try:
        columns = list_columns(path.parent / section.file)
    except ProblemsError as error:
        problems.extend(error.problems)
        return usual
    return {name: kind(name) if name == "sex" or name in POSSIBLE else "" for name in completed_names(sorted(columns))}


def _check_set_and_scale(section: PopulationSection, brought: Mapping[str, str], say) -> None:
    for name in section.set:
        if name in brought or name in EQUATIONS:
            say(
                "set",
                f'"{name}"',
                "an attribute that the patients do not bring themselves",
                "to narrow the population, give limits (age, weight, height, bmi, sex, where)",
            )
        elif not ATTRIBUTE_NAME.fullmatch(name) or name in (*FUNCTIONS, "true", "false", "patient", "label"):
            say("set", shown(name), "a name of letters, digits and _ that no function has, such as opioid")
    for name in section.scale:
        if name in SCALED and name not in brought:
            say("scale", f'"{name}", which these patients do not have', ", ".join(brought))


def _age_mix(mix: object, where: str, problems: list[Problem]) -> tuple[tuple[float, float, float], ...]:
    """Bands of age with their shares; "uniform" is one band."""
    if mix in (None, "adults"):
        return ()
    if mix == "uniform":
        return ((YOUNGEST_YEARS, OLDEST_YEARS, 1.0),)
    bands = []
    for text, share in mix.items():
        try:
            band = parse_range(text, "age", where)
            low, high = max(band.low, YOUNGEST_YEARS), min(band.high, OLDEST_YEARS)
            if low >= high or low > band.low > 0 or (high < band.high and band.high != float("inf")):
                allowed = f"ages of adults, {YOUNGEST_YEARS:g} to {OLDEST_YEARS:g} years"
                raise ProblemsError(Problem(where, f'"{text}"', allowed))
            bands.append((low, high, parse_quantity(share, ["percent"], f"{where}.{text}").value / 100))
        except ProblemsError as error:
            problems.extend(error.problems)
    bands.sort()
    if len(bands) == len(mix):
        if any(one[1] > other[0] for one, other in zip(bands, bands[1:])):
            problems.append(Problem(where, "bands that overlap", "each age in one band"))
        if abs(sum(share for *_, share in bands) - 1.0) > 1e-6:
            found = f"shares that add up to {100 * sum(share for *_, share in bands):g} %"
            problems.append(Problem(where, found, "100 % in all"))
    return tuple(bands)


def _lattice(table: Mapping[str, object], where: str, problems: list[Problem]) -> dict[str, tuple] | None:
    before, axes = len(problems), {}
    for name, values in table.items():
        if not ATTRIBUTE_NAME.fullmatch(name) or name in FUNCTIONS or (name in EQUATIONS and name not in KINDS):
            problems.append(Problem(where, shown(name), "sex, age, weight, height, bmi, or a name of its own"))
            continue
        try:
            axes[name] = _axis(name, values, f"{where}.{name}")
        except ProblemsError as error:
            problems.extend(error.problems)
    if set(BODY) <= axes.keys():
        problems.append(Problem(where, "weight, height and bmi", "two of them: the third follows"))
    return axes if len(problems) == before else None


def _axis(name: str, values: object, where: str) -> tuple:
    """The values of one axis: a list, one value, or a range with a step."""
    if isinstance(values, dict):
        return _checked(name, _steps(name, values, where), where)
    values = values if isinstance(values, list) else [values]
    if name == "sex":
        found = [value for value in values if value in ("female", "male")]
        if len(found) != len(values) or len(set(found)) != len(found):
            raise ProblemsError(Problem(where, ", ".join(map(shown, values)), '["female", "male"], or one of them'))
    elif all(isinstance(value, bool) for value in values):
        found = values
    else:
        parsed = (parse_quantity(value, [KINDS.get(name, "number")], where).value for value in values)
        found = _checked(name, tuple(parsed), where)
    if not 1 <= len(found) <= MOST_VALUES or len(set(found)) != len(found):
        raise ProblemsError(Problem(where, f"{len(found)} values", f"1 to {MOST_VALUES:,}, each once"))
    return tuple(found)


def _checked(name: str, values: tuple[float, ...], where: str) -> tuple[float, ...]:
    low, high, allowed, advice = POSSIBLE.get(name, (0.0, float("inf"), "", ""))
    for value in values:
        if not low <= value <= high:
            raise ProblemsError(Problem(where, f"{value:g}", allowed, advice))
    return values


def _steps(name: str, table: dict, where: str) -> tuple:
    entry = Section(table, where, [])
    kind = KINDS.get(name, "number")
    span, step = entry.range("range", kind), entry.quantity("step", kind)
    entry.close()
    if not entry.problems and (span is None or not step or not span.high < float("inf") or not span.low >= 0):
        entry.problems.append(
            Problem(where, shown(table), '{ range = "40 to 160 kg", step = "10 kg" }, or a list of values')
        )
    if entry.problems:
        raise ProblemsError(entry.problems)
    count = int((span.high - span.low) / step * (1 + 1e-12)) + 1
    if count > MOST_VALUES:
        raise ProblemsError(Problem(where, f"{count:,} values", f"at most {MOST_VALUES:,}", "a longer step"))
    return tuple(span.low + index * step for index in range(count))
