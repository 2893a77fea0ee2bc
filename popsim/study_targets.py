"""From the targets of a study file to Target records; collects every problem it meets."""

from __future__ import annotations

import re
from collections.abc import Callable

from covariates.problems import Problem, ProblemsError
from covariates.sheet import DrugModel, read_sheet, shipped_sheets
from covariates.units import Range, parse_quantity, parse_range
from popsim.records import Target
from popsim.study_file import TargetSection, key_path

RULES = '"80 % of the time", "at any time", "always" or "at the end"'
QUANTITY_WORDS = {"plasma": "plasma", "effect_site": "effect site", "effect": "effect"}


def resolve_targets(sections: list[TargetSection], models: tuple[DrugModel, ...], run_until_min: float,
                    attributes: dict[str, str], file: str, problems: list[Problem]) -> tuple[Target, ...]:
    """Targets of a study, whose patients have these attributes (name -> "number", "condition", "text" or "")."""
    targets = []
    for index, section in enumerate(sections):
        def report(key: str, found: str, allowed: str, advice: str = "", index: int = index) -> None:
            parts = ("target", index, key) if len(sections) > 1 else ("target", key)
            problems.append(Problem(f"{file}: {key_path(*parts)}", found, allowed, advice))

        _check_models_have(section.quantity, models, report)
        limits = _limits(section, report)
        window = _window(section, run_until_min, attributes, report)
        rule = _rule(section, window, report)
        if limits is None or window is None or rule is None:
            continue
        name = section.name or f"{_effect_name(section, models)} {limits.text}"
        targets.append(Target(
            name=name, quantity=section.quantity, low=limits.low, high=limits.high, unit=limits.unit,
            range_text=limits.text, start=window[0], end=window[1], rule=rule[0], share_needed=rule[1],
            rule_text=section.attained_when or "at that time",
        ))
    _check_names(targets, file, problems)
    return tuple(targets)


def _effect_name(section: TargetSection, models: tuple[DrugModel, ...]) -> str:
    if section.quantity == "effect" and models and models[0].effect is not None:
        return models[0].effect.name
    return QUANTITY_WORDS[section.quantity]


def _check_names(targets: list[Target], file: str, problems: list[Problem]) -> None:
    names = [target.name for target in targets]
    for name in sorted({name for name in names if names.count(name) > 1}):
        problems.append(Problem(f"{file}: target", f'two targets called "{name}"', "a name of its own for each target"))


def _check_models_have(quantity: str, models: tuple[DrugModel, ...], report: Callable) -> None:
    for model in models:
        if quantity == "effect_site" and not model.has_effect_site:
            report("quantity", f'"effect_site", but {model.name} has no ke0', "a model with an effect site",
                   _models_with(model.drug, lambda other: other.has_effect_site))
        if quantity == "effect" and model.effect is None:
            report("quantity", f'"effect", but {model.name} describes no effect', "a model with an effect",
                   _models_with(model.drug, lambda other: other.effect is not None))


def _models_with(drug: str, has: Callable[[DrugModel], bool]) -> str:
    names = [name for name in shipped_sheets() if (model := read_sheet(name)).drug == drug and has(model)]
    return f"models of {drug} that have one: {', '.join(names)}" if names else f"no shipped model of {drug} has one"


def _limits(section: TargetSection, report: Callable) -> Range | None:
    kind = "number" if section.quantity == "effect" else "concentration"
    example = '"40 to 60"' if kind == "number" else '"2 to 4 ug/mL"'
    given = [key for key in ("range", "low", "high") if getattr(section, key) is not None]
    if not given or ("range" in given and len(given) > 1):
        report("range", "nothing" if not given else " and ".join(given), f"range = {example}, or low and/or high")
        return None
    try:
        if section.range is not None:
            return parse_range(section.range, kind)
        low = None if section.low is None else parse_quantity(_as_text(section.low, kind), (kind,))
        high = None if section.high is None else parse_quantity(_as_text(section.high, kind), (kind,))
    except ProblemsError as error:
        problem = error.problems[0]
        report(given[0], problem.found, problem.allowed, problem.advice)
        return None
    if low is not None and high is not None and low.value >= high.value:
        report("high", f"{high.text}, not above low ({low.text})", "low below high")
        return None
    text = f"{low.text} to {high.text}" if low and high else (f">= {low.text}" if low else f"<= {high.text}")
    return Range(low.value if low else float("-inf"), high.value if high else float("inf"), kind,
                 (low or high).unit, text)


def _as_text(value: object, kind: str) -> object:
    """An effect without unit may be written as a bare number."""
    return str(value) if kind == "number" and not isinstance(value, bool) else value


def _window(section: TargetSection, run_until_min: float, attributes: dict[str, str],
            report: Callable) -> tuple[float | str, float | str] | None:
    """Start and end in minutes; an end may name an attribute that ends in _min or _h."""
    text = section.during.strip()
    if text == "steady state":
        report("during", '"steady state"', 'a window such as "24 h to 48 h"',
               "this version of popsim does not have it yet")
        return None
    parts = re.split(r"\s+to\s+", text)
    if len(parts) > 2:
        report("during", f'"{text}"', 'a window "5 min to 60 min" or an instant "60 min"')
        return None
    named = [part for part in parts if re.fullmatch(r"[a-z][a-z0-9_]*_(min|h)", part)]
    for name in named:
        if attributes.get(name) not in ("number", ""):
            report("during", f'"{name}", which is no number that the patients have', "a numeric attribute",
                   f"give it under [population.set] or as a column of the list: {name} = 120")
            return None
    try:
        if not named and len(parts) == 2:
            span = parse_range(text, "time")
            values = [span.low, span.high]
        else:
            values = [part if part in named else parse_quantity(part, ("time",)).value for part in parts]
    except ProblemsError as error:
        problem = error.problems[0]
        report("during", problem.found, problem.allowed or '"5 min to 60 min"', problem.advice)
        return None
    for value in values:
        if not isinstance(value, str) and value > run_until_min:
            report("during", f'"{text}", past the run\'s end at {run_until_min:g} min',
                   "a window within [run] until", "lengthen [run] until")
            return None
    return (values[0], values[-1])


def _rule(section: TargetSection, window: tuple | None, report: Callable) -> tuple[str, float] | None:
    text = section.attained_when
    if text is None:
        if window is None:
            return None
        if window[0] == window[1]:
            return ("end", 1.0)
        report("attained_when", "missing", RULES)
        return None
    fixed = {"at any time": "any", "always": "always", "at the end": "end"}
    if text.strip() in fixed:
        return (fixed[text.strip()], 1.0)
    match = re.fullmatch(r"\s*(\d+(?:\.\d+)?)\s*%\s*of the time\s*", text)
    if match is None or not 0 < float(match[1]) <= 100:
        report("attained_when", f'"{text}"', RULES)
        return None
    return ("share", float(match[1]) / 100)
