"""From the targets of a study file to Target records; collects every problem it meets."""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import replace

from covariates.problems import Problem, ProblemsError
from covariates.sheet import DrugModel, read_sheet, shipped_sheets
from covariates.units import Quantity, Range, parse_quantity, parse_range
from popsim.study_file import key_path
from popsim.study_records import SUMMARIES, Mic, ResponseCurve, Target, quantity_words
from popsim.study_sections import TargetSection

RULES = '"80 % of the time", "at any time", "always" or "at the end"'
AREA_UNIT = "mg.h/L"
STEADY = "steady state"


def resolve_targets(sections: list[TargetSection], models: tuple[DrugModel, ...], run_until_min: float,
                    attributes: dict[str, str], file: str, problems: list[Problem]) -> tuple[Target, ...]:
    """Targets of a study, whose patients have these attributes (name -> "number", "condition", "text" or "").

    A section with several minimum inhibitory concentrations becomes one target for each of them.
    """
    targets: list[Target] = []
    for index, section in enumerate(sections):
        def report(key: str, found: str, allowed: str, advice: str = "", index: int = index) -> None:
            parts = ("target", index, key) if len(sections) > 1 else ("target", key)
            problems.append(Problem(f"{file}: {key_path(*parts)}", found, allowed, advice))

        targets += _of_section(section, models, run_until_min, attributes, report)
    _check_names(targets, file, problems)
    return tuple(targets)


def _of_section(section: TargetSection, models: tuple[DrugModel, ...], run_until_min: float,
                attributes: dict[str, str], report: Callable) -> list[Target]:
    _check_models_have(section, models, report)
    mics = _mics(section, report)
    limits = _over_mic(section, report) if mics else _limits(section, report)
    window = _window(section, run_until_min, attributes, report)
    response = _response(section, report)
    rule = _rule(section, window, report)
    _check_keys(section, window, models, report)
    recovers_at = _recovers_at(section, report)
    if limits is None or window is None or rule is None:
        return []
    target = Target(
        name=section.name or _default_name(section, models, limits), quantity=section.quantity, low=limits.low,
        high=limits.high, unit=limits.unit, range_text=limits.text, start=window[0], end=window[1], rule=rule[0],
        share_needed=rule[1], rule_text=rule[2], per_day=section.per is not None, response=response,
        measured=section.levels == "measured", recovers_at=recovers_at,
        steady=section.during.strip() == STEADY)
    return [_at_mic(target, *mic, first=number == 0) for number, mic in enumerate(mics)] if mics else [target]


def _default_name(section: TargetSection, models: tuple[DrugModel, ...], limits: Range) -> str:
    over = " x MIC" if section.over_mic is not None else ""
    return f"{_effect_name(section, models)} {limits.text}{over}"


def _at_mic(target: Target, mic: Quantity, weight: float | None, first: bool) -> Target:
    """The same target against one MIC: its limits are multiples of it (an area's in hours)."""
    scale = mic.value * (60.0 if target.summary == "area_under_curve" else 1.0)
    return replace(target, name=f"{target.name}, MIC {mic.text}", low=target.low * scale, high=target.high * scale,
                   unit=AREA_UNIT if target.summary == "area_under_curve" else mic.unit,
                   range_text=f"{target.range_text} x MIC {mic.text}", mic=Mic(mic.value, target.name, weight, first))


def _mics(section: TargetSection, report: Callable) -> list[tuple[Quantity, float | None]]:
    """The MICs that a section asks for, ascending, each with its share of the isolates (None where not given)."""
    if section.isolates is not None and section.mic is not None:
        report("mic", "both mic and isolates", "one of them")
    if (section.isolates is None) != (section.isolates_source is None):
        report("isolates_source", "isolates without their source" if section.isolates else "a source without isolates",
               'isolates = { "1 mg/L" = 60 } with isolates_source = "where the numbers come from"')
    if section.isolates is not None:
        whole = sum(count for _, count in section.isolates)
        mics = [(mic, count / whole) for mic, count in section.isolates]
    else:
        mics = [(mic, None) for mic in section.mic or []]
    mics.sort(key=lambda mic: mic[0].value)
    values = [mic.value for mic, _ in mics]
    if 0 in values or len(set(values)) < len(values):
        report("mic" if section.isolates is None else "isolates", "a MIC of zero, or one given twice",
               "each MIC once, above zero")
    if (section.over_mic is not None) != bool(mics):
        report("over_mic", "over_mic without a MIC" if not mics else "a MIC without over_mic",
               'over_mic = ">= 1" (times MIC; hours for an area) beside mic = "2 mg/L", a list, or isolates')
    if mics and section.quantity in ("effect_site", "effect", "response"):
        report("mic", f'"{section.quantity}"',
               "a target in plasma: plasma, unbound_plasma, an area, peak, trough, average")
    return mics


def _over_mic(section: TargetSection, report: Callable) -> Range | None:
    given = [key for key in ("range", "low", "high") if getattr(section, key) is not None]
    if given:
        report(given[0], f"{given[0]} beside mic", 'the limits as multiples of the MIC: over_mic = ">= 1"')
        return None
    try:
        return parse_range(section.over_mic or "", "number")
    except ProblemsError as error:
        if section.over_mic is not None:
            problem = error.problems[0]
            report("over_mic", problem.found, problem.allowed, problem.advice)
        return None


def _response(section: TargetSection, report: Callable) -> ResponseCurve | None:
    given = {key: getattr(section, key) for key in ("half", "steepness", "follows")}
    if section.quantity != "response":
        for key, value in given.items():
            if value is not None:
                report(key, "given", 'only with quantity = "response"')
        return None
    for key, example in (("half", 'half = "3 ug/mL" (50 % respond)'), ("steepness", "steepness = 4"),
                         ("follows", 'follows = "effect_site" or "plasma"')):
        if given[key] is None:
            report(key, "missing", example)
    if None in given.values() or section.half.value == 0:
        if section.half is not None and section.half.value == 0:
            report("half", f'"{section.half.text}"', "above zero")
        return None
    return ResponseCurve(section.half.value, section.steepness, section.follows)


def _recovers_at(section: TargetSection, report: Callable) -> float | None:
    if section.recovers_at is None:
        return None
    if section.quantity not in ("plasma", "unbound_plasma", "effect_site", "effect"):
        report("recovers_at", f'beside "{section.quantity}"', "a course: plasma, unbound_plasma, effect_site, effect")
        return None
    kind = _kind(section)
    try:
        return parse_quantity(_as_text(section.recovers_at, kind), (kind,)).value
    except ProblemsError as error:
        problem = error.problems[0]
        report("recovers_at", problem.found, problem.allowed, problem.advice)
        return None


def _check_keys(section: TargetSection, window: tuple | None, models: tuple[DrugModel, ...], report: Callable) -> None:
    """Keys that only some quantities have, and windows that a quantity cannot do with."""
    word = section.quantity.removeprefix("unbound_")
    if section.recovers_at is not None and section.during.strip() == STEADY:
        report("recovers_at", "beside a steady state", "a window of the run: a steady regimen never stops")
    if section.per is not None and word != "area_under_curve":
        report("per", section.per, "only with an area under the curve")
    instant = window is not None and window[0] == window[1]
    if instant and word in ("area_under_curve", "average", "peak"):
        report("during", f'"{section.during}"', f'a window, such as "24 h to 48 h", for "{section.quantity}"')
    if window is not None and word == "trough" and window[1] == 0:
        report("during", f'"{section.during}"', "a time after 0: a trough is the value just before a dose")
    if section.levels == "measured":
        if not (word in ("peak", "trough") or (word == "plasma" and instant)):
            report("levels", '"measured"', "a level at one time: plasma at an instant, peak or trough")
        for model in models:
            if not {"proportional", "additive"} & set(model.measurement_error):
                report("levels", f'"measured", but {model.name} gives no measurement error', '"true"')


def _effect_name(section: TargetSection, models: tuple[DrugModel, ...]) -> str:
    if section.quantity == "effect" and models and models[0].effect is not None:
        return models[0].effect.name
    return quantity_words(section.quantity)


def _check_names(targets: list[Target], file: str, problems: list[Problem]) -> None:
    names = [target.name for target in targets]
    for name in sorted({name for name in names if names.count(name) > 1}):
        problems.append(Problem(f"{file}: target", f'two targets called "{name}"', "a name of its own for each target"))


def _check_models_have(section: TargetSection, models: tuple[DrugModel, ...], report: Callable) -> None:
    quantity = section.follows if section.quantity == "response" and section.follows else section.quantity
    for model in models:
        _check_fluid(quantity, model, report)
        if quantity == "effect_site" and not model.has_effect_site:
            report("quantity", f'"effect_site", but {model.name} has no ke0', "a model with an effect site",
                   _models_with(model.drug, lambda other: other.has_effect_site))
        if quantity == "effect" and model.effect is None:
            report("quantity", f'"effect", but {model.name} describes no effect', "a model with an effect",
                   _models_with(model.drug, lambda other: other.effect is not None))


def _check_fluid(quantity: str, model: DrugModel, report: Callable) -> None:
    """Unbound levels need a fraction unbound, which is never applied to what was measured unbound already."""
    fluid = model.measured_in.get("fluid")
    if quantity.startswith("unbound_"):
        if fluid == "whole blood":
            report("quantity", f'"{quantity}", but {model.name} was built on whole blood', "a model built on plasma")
        elif fluid == "total plasma" and "fraction_unbound" not in model.measured_in:
            report("quantity", f'"{quantity}", but {model.name} gives no fraction unbound',
                   "a fraction unbound with its source",
                   'under [drug]: fraction_unbound = 0.2 and fraction_unbound_source = "..."')
    elif fluid == "unbound plasma" and quantity not in ("effect_site", "effect", "response"):
        report("quantity", f'"{quantity}", but {model.name} was built on unbound concentrations',
               f'"unbound_{quantity}"')


def _models_with(drug: str, has: Callable[[DrugModel], bool]) -> str:
    names = [name for name in shipped_sheets() if (model := read_sheet(name)).drug == drug and has(model)]
    return f"models of {drug} that have one: {', '.join(names)}" if names else f"no shipped model of {drug} has one"


def _limits(section: TargetSection, report: Callable) -> Range | None:
    kind = _kind(section)
    example = {"number": '"40 to 60"', "area": '"400 to 600 mg.h/L"',
               "percent": '">= 90 %"'}.get(kind, '"2 to 4 ug/mL"')
    given = [key for key in ("range", "low", "high") if getattr(section, key) is not None]
    if not given or ("range" in given and len(given) > 1):
        report("range", "nothing" if not given else " and ".join(given), f"range = {example}, or low and/or high")
        return None
    try:
        if section.range is not None:
            return _as_share(parse_range(section.range, kind))
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
    return _as_share(Range(low.value if low else float("-inf"), high.value if high else float("inf"), kind,
                           (low or high).unit, text))


def _kind(section: TargetSection) -> str:
    """What kind of quantity a target's limits are."""
    if section.quantity.endswith("area_under_curve"):
        return "area"
    return {"effect": "number", "response": "percent"}.get(section.quantity, "concentration")


def _as_share(limits: Range) -> Range:
    """A range of percentages as probabilities."""
    return replace(limits, low=limits.low / 100, high=limits.high / 100) if limits.kind == "percent" else limits


def _as_text(value: object, kind: str) -> object:
    """An effect without unit may be written as a bare number."""
    return str(value) if kind == "number" and not isinstance(value, bool) else value


def _window(section: TargetSection, run_until_min: float, attributes: dict[str, str],
            report: Callable) -> tuple[float | str, float | str] | None:
    """Start and end in minutes; an end may name an attribute that ends in _min or _h."""
    text = section.during.strip()
    if text == STEADY:
        return (0.0, float("inf"))
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


def _rule(section: TargetSection, window: tuple | None, report: Callable) -> tuple[str, float, str] | None:
    """How the target is attained, with the share needed and the words for it; a single value has only one way."""
    text = section.attained_when
    if section.quantity.removeprefix("unbound_") in SUMMARIES:
        if text is not None:
            report("attained_when", f'"{text}"', f'nothing, for "{section.quantity}": one value in range or not')
            return None
        return ("end", 1.0, "")
    if text is None:
        if window is None:
            return None
        if window[0] == window[1]:
            return ("end", 1.0, "at that time")
        report("attained_when", "missing", RULES)
        return None
    fixed = {"at any time": "any", "always": "always", "at the end": "end"}
    if text.strip() in fixed:
        return (fixed[text.strip()], 1.0, text)
    match = re.fullmatch(r"\s*(\d+(?:\.\d+)?)\s*%\s*of the time\s*", text)
    if match is None or not 0 < float(match[1]) <= 100:
        report("attained_when", f'"{text}"', RULES)
        return None
    return ("share", float(match[1]) / 100, text)
