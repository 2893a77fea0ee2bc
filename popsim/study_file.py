"""The shape of a study file: which keys there are and how each value is written. Meaning is checked in study.py."""

from __future__ import annotations

import tomllib
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, StrictBool, ValidationError

from covariates.formula import Formula, compile_formula
from covariates.problems import Problem, ProblemsError, nearest
from covariates.units import Quantity, Range, allowed_kinds, parse_quantity, parse_range
from popsim.finding.wishes import Wish, parse_wishes
from popsim.study_salvage import without_faults

DOSE_AMOUNTS = ("mass", "mass_per_kg", "mass_per_m2")
DOSE_RATES = ("rate", "rate_per_kg", "rate_per_m2")
WHOLE_VIALS = "whole vials"
LARGEST, SMALLEST = 1e9, 1e-12  # of any quantity in its internal unit: beyond lie slips of the pen, and overflow
LONGEST_NAME, LONGEST_TEXT = 80, 400
MOST_ADMINISTRATIONS = 1000  # of one dose step
MOST_IN_PROTOCOL = 2000
MOST_MICS = 20


def _refuse(found: str, allowed: str, advice: str = "") -> ProblemsError:
    return ProblemsError(Problem("", found, allowed, advice))


def _parsed(parse: Callable[[Any], Any], kind: Any) -> Any:
    """A value of type `kind`, read by `parse`, which raises ProblemsError."""
    return Annotated[kind, BeforeValidator(parse)]


def _parse_plain(value: Any, kinds: tuple[str, ...]) -> Quantity:
    if isinstance(value, bool) or not isinstance(value, str | int | float):
        raise _refuse(shown(value), allowed_kinds(kinds))
    quantity = parse_quantity(value, kinds)
    if quantity.value != 0 and not SMALLEST <= quantity.value <= LARGEST:
        raise _refuse(f'"{quantity.text}"', "a plausible size", "check the number and its unit")
    return quantity


def _quantity(*kinds: str) -> Any:
    return _parsed(lambda value: _parse_plain(value, kinds), Quantity)


def _range(kind: str) -> Any:
    return _parsed(lambda value: parse_range(value if isinstance(value, str) else shown(value), kind), Range)


def _text(longest: int) -> Any:
    def parse(value: Any) -> str:
        if not isinstance(value, str):
            raise _refuse(shown(value), "text in double quotes")
        if not value.strip():
            raise _refuse("an empty text", "some text in double quotes")
        if len(value) > longest:
            raise _refuse(f"a text of {len(value)} characters", f"at most {longest}")
        if not value.isprintable():
            raise _refuse(shown(value), "text on one line, without control characters")
        return value.strip()

    return _parsed(parse, str)


def _whole(least: int, most: int, example: int) -> Any:
    def parse(value: Any) -> int:
        if isinstance(value, bool) or not isinstance(value, int) or not least <= value <= most:
            raise _refuse(shown(value), f"a whole number from {least:,} to {most:,}, such as {example}")
        return value

    return _parsed(parse, int)


def _number(least: float, most: float, example: float) -> Any:
    def parse(value: Any) -> float:
        if isinstance(value, bool) or not isinstance(value, int | float) or not least <= value <= most:
            raise _refuse(shown(value), f"a number from {least:g} to {most:g}, without quotes, such as {example:g}")
        return float(value)

    return _parsed(parse, float)


def _switch_or_number(value: Any) -> bool | float:
    if isinstance(value, bool):
        return value
    if not isinstance(value, int | float) or not abs(value) <= LARGEST:
        advice = "write it without quotes" if isinstance(value, str) else ""
        raise _refuse(shown(value), "true, false or a number", advice)
    return float(value)


def _age_mix(value: Any) -> str | dict[str, Any]:
    if not isinstance(value, dict) and value not in ("adults", "uniform"):
        raise _refuse(shown(value), '"adults", "uniform", or a section [population.age_mix]',
                      '"20 to 65 years" = "40 %" and so on, adding up to 100 %')
    return value


def _limit(value: Any) -> str | float:
    if isinstance(value, bool) or not isinstance(value, str | int | float):
        raise _refuse(shown(value), 'a limit, such as "2 ug/mL", or 40 for an effect')
    return value


def _rounding(value: Any) -> Quantity | str:
    return WHOLE_VIALS if value == WHOLE_VIALS else _parse_plain(value, ("mass", "rate", "volume", "flow"))


def _mics(value: Any) -> list[Quantity]:
    """One minimum inhibitory concentration, or a list of them."""
    if isinstance(value, list) and not 0 < len(value) <= MOST_MICS:
        raise _refuse(f"{len(value)} of them", f"1 to {MOST_MICS} concentrations")
    return [_parse_plain(one, ("concentration",)) for one in (value if isinstance(value, list) else [value])]


def _isolates(value: Any) -> list[tuple[Quantity, int]]:
    """How many isolates have which minimum inhibitory concentration."""
    form = 'numbers of isolates: { "0.5 mg/L" = 120, "1 mg/L" = 60 }'
    if not isinstance(value, dict) or not 0 < len(value) <= MOST_MICS:
        raise _refuse(shown(value), form)
    if any(isinstance(count, bool) or not isinstance(count, int) or not 0 < count <= 10**9 for count in value.values()):
        raise _refuse("a number of isolates that is not a whole number above zero", form)
    return [(_parse_plain(mic, ("concentration",)), count) for mic, count in value.items()]


def _condition(value: Any) -> Formula:
    if not isinstance(value, str):
        raise _refuse(shown(value), 'a condition as text, such as "age >= 65 and bmi < 30"')
    return compile_formula(value, "", "condition")


_correlation = _number(-0.9999, 0.9999, 0.4)
Time = _quantity("time")
Amount = _quantity(*DOSE_AMOUNTS)
Rate = _quantity(*DOSE_RATES)
PlainDose = _quantity("mass", "rate")
Condition = _parsed(_condition, Formula)
Name = _text(LONGEST_NAME)
Limit = _parsed(_limit, Any)


class Section(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True, arbitrary_types_allowed=True)


class PopulationSection(Section):
    source: Literal["survey", "list", "described", "lattice"]
    count: _whole(1, 100_000_000, 10000) | None = None
    age: _range("age") | None = None
    weight: _range("body_weight") | None = None
    height: _range("height") | None = None
    bmi: _range("body_mass_index") | None = None
    sex: Literal["female", "male"] | None = None
    where: Condition | None = None
    file: Name | None = None
    on_bad_row: Literal["stop", "skip"] | None = None
    units: dict[str, Name] = {}
    age_mix: _parsed(_age_mix, Any) | None = None
    female_share: _quantity("percent") | None = None
    described: dict[str, Any] = {}
    together: dict[str, _correlation] = {}
    lattice: dict[str, Any] = {}
    each: _whole(1, 1_000_000, 100) | None = None
    set: dict[str, _parsed(_switch_or_number, Any)] = {}
    scale: dict[str, _number(0.1, 10, 1.2)] = {}


class VariabilitySection(Section):
    between_subject: StrictBool = True
    scale: _number(0, 10, 1.3) = 1.0
    from_: Name | None = Field(default=None, alias="from")
    parameters: dict[str, Any] = {}


class GroupSection(Section):
    name: Name
    where: Condition


class DrugSection(Section):
    model: Name
    repeat_with: Annotated[list[Name], Field(max_length=20)] = []
    fraction_unbound: _number(0, 1, 0.2) | None = None
    fraction_unbound_source: _text(LONGEST_TEXT) | None = None


class BandSection(Section):
    where: Condition
    at: Time | None = None
    amount: Amount | None = None
    amount_for: _quantity("concentration") | None = None
    rate: Rate | None = None
    every: Time | None = None


class DoseSection(Section):
    at: Time | None = None
    amount: Amount | None = None
    amount_for: _quantity("concentration") | None = None
    volume: _quantity("volume_per_kg") | None = None
    volume_of: Name | None = None
    volume_is: Literal["V1", "Vss"] | None = None
    rate: Rate | None = None
    over: Time | None = None
    until: Time | None = None
    every: Time | None = None
    times: _whole(1, MOST_ADMINISTRATIONS, 3) | None = None
    by: Name | None = None
    at_most: PlainDose | None = None
    at_least: PlainDose | None = None
    round_to: _parsed(_rounding, Any) | None = None
    where: Condition | None = None
    route: Literal["iv", "oral"] = "iv"
    band: Annotated[list[BandSection], Field(max_length=100)] = []


class ProtocolSection(Section):
    name: Name
    by: Name | None = None
    strength: _quantity("concentration") | None = None
    vial: _quantity("volume") | None = None
    pump_at_most: _quantity("flow", "rate") | None = None
    impossible: Literal["warn", "error"] = "warn"
    no_dose: Literal["error", "allowed"] = "error"
    dose: Annotated[list[DoseSection], Field(min_length=1, max_length=100)]


class TargetSection(Section):
    name: Name | None = None
    quantity: Literal["plasma", "unbound_plasma", "effect_site", "effect", "response", "area_under_curve",
                      "unbound_area_under_curve", "peak", "unbound_peak", "trough", "unbound_trough", "average",
                      "unbound_average"]
    range: Name | None = None
    low: Limit | None = None
    high: Limit | None = None
    over_mic: Name | None = None
    mic: _parsed(_mics, Any) | None = None
    isolates: _parsed(_isolates, Any) | None = None
    isolates_source: _text(LONGEST_TEXT) | None = None
    per: Literal["24 h"] | None = None
    half: _quantity("concentration") | None = None
    steepness: _number(0.01, 100, 4) | None = None
    follows: Literal["plasma", "unbound_plasma", "effect_site"] | None = None
    levels: Literal["true", "measured"] = "true"
    recovers_at: Limit | None = None
    during: Name
    attained_when: Name | None = None


class CompareSection(Section):
    matters: _quantity("percent") | None = None
    reference: Name | None = None
    robustness: StrictBool = True


class RunSection(Section):
    until: Time
    every: Time


class VarySection(Section):
    what: _text(LONGEST_TEXT)
    over: Name
    steps: _whole(2, 400, 21) | None = None


class ReferenceSection(Section):
    sex: Literal["female", "male"]
    age: _quantity("age")
    weight: _quantity("body_weight")
    height: _quantity("height")


class FindTableSection(Section):
    what: _text(LONGEST_TEXT)
    by: Name
    bands: _whole(1, 12, 4)
    edges_to: _number(1e-3, 1e4, 5)
    doses: Name
    round_to: PlainDose


class FindMapSection(Section):
    across: Name = "weight"
    up: Name = "age"
    across_every: _number(1e-3, 1e4, 10) | None = None
    up_every: _number(1e-3, 1e4, 10) | None = None
    level: _quantity("percent") | None = None


class FindSection(Section):
    protocol: Name | None = None
    target: Name | None = None
    wish: Annotated[list[_parsed(parse_wishes, tuple[Wish, ...])], Field(max_length=20)] = []
    vary: Annotated[list[VarySection], Field(max_length=2)] = []
    reference: ReferenceSection | None = None
    sizes: Annotated[list[Name], Field(max_length=60)] = []
    table: FindTableSection | None = None
    map: FindMapSection = FindMapSection()


class StudyFile(Section):
    title: Name
    question: _text(LONGEST_TEXT)
    seed: _whole(0, 2**63 - 1, 20261201)
    population: PopulationSection
    variability: VariabilitySection = VariabilitySection()
    group: Annotated[list[GroupSection], Field(max_length=60)] = []
    drug: DrugSection
    protocol: Annotated[list[ProtocolSection], Field(min_length=1, max_length=100)]
    target: Annotated[list[TargetSection], Field(min_length=1, max_length=20)]
    compare: CompareSection = CompareSection()
    run: RunSection
    find: FindSection = FindSection()


def read_study_file(path: Path) -> tuple[StudyFile, list[Problem]]:
    """The study file as written, each value parsed, and every key that does not fit.

    Where keys do not fit, the file comes back without them if the rest still makes a study, so that its meaning can be
    checked too; else ProblemsError.
    """
    raw = _toml(path)
    if isinstance(raw.get("target"), dict):
        raw["target"] = [raw["target"]]
    try:
        return StudyFile.model_validate(raw), []
    except ValidationError as error:
        entries = error.errors()
    faults = [_problem(path.name, raw, entry) for entry in entries]
    mended = without_faults(raw, [entry["loc"] for entry in entries])
    try:
        if mended is not None:
            return StudyFile.model_validate(mended), faults
    except ValidationError:
        pass
    raise ProblemsError(faults)


def read_find(raw: dict[str, Any]) -> FindSection:
    """What the command line gives in place of a study's [find]; ProblemsError lists what does not fit."""
    try:
        return FindSection.model_validate(raw)
    except ValidationError as error:
        raise ProblemsError([_problem("command line", {"find": raw}, {**entry, "loc": ("find", *entry["loc"])})
                             for entry in error.errors()]) from None


def _toml(path: Path) -> dict[str, Any]:
    try:
        text = path.read_text(encoding="utf-8-sig")  # some editors put a mark before the first letter
    except FileNotFoundError:
        raise ProblemsError(Problem(str(path), "no such file", "the path of a study file",
                                    "popsim new study.toml writes one to start from")) from None
    except OSError as error:
        raise ProblemsError(Problem(str(path), f"cannot be read: {error.strerror}", "a study file")) from None
    except UnicodeDecodeError:
        raise ProblemsError(Problem(str(path), "not UTF-8 text", "a text file",
                                    "save it as UTF-8 in the editor")) from None
    try:
        return tomllib.loads(text)
    except (ValueError, RecursionError) as error:  # also numbers of thousands of digits, and endless nesting
        reason = "nested too deeply" if isinstance(error, RecursionError) else str(error).partition(";")[0]
        raise ProblemsError(Problem(path.name, f"not valid TOML: {reason}", 'lines such as key = "value"',
                                    "text and quantities stand in double quotes")) from None


def key_path(*parts: str | int) -> str:
    """The way to a key in words: key_path("protocol", 0, "dose", 1, "amount") is "protocol 1, dose 2: amount"."""
    words: list[str] = []
    for part in parts:
        if isinstance(part, int):
            words[-1] = f"{words[-1]} {part + 1}"
        else:
            words.append(part)
    return words[0] if len(words) == 1 else ", ".join(words[:-1]) + ": " + words[-1]


def _problem(file: str, raw: dict, entry: dict) -> Problem:
    """One fault in our words; a target that stands alone is not numbered."""
    location = list(entry["loc"])
    if location[0] == "target" and len(location) > 1 and len(raw["target"]) == 1:
        del location[1]
    where = f"{file}: {key_path(*location)}"
    key, kind, given = location[-1], entry["type"], entry["input"]
    if kind == "extra_forbidden":
        known = _known_keys(location[:-1])
        return Problem(where, f'unknown key "{key}"', ", ".join(known), nearest(key, known))
    if kind == "missing":
        return Problem(where, "missing", _EXAMPLES.get(key, "this key is required"))
    if kind == "value_error":
        inner = entry["ctx"]["error"].problems[0]
        return Problem(where, inner.found, inner.allowed, inner.advice)
    if kind == "literal_error":
        allowed = entry["ctx"]["expected"].replace("'", '"')
        words = [word.strip(' "') for word in allowed.replace(" or ", ",").split(",")]
        return Problem(where, shown(given), allowed, nearest(str(given), words))
    if kind in ("too_short", "too_long"):
        bound = "at least 1" if kind == "too_short" else f"at most {entry['ctx']['max_length']}"
        return Problem(where, f"{len(given)} of them", bound, _EXAMPLES.get(key, ""))
    return Problem(where, shown(given), _FORMS.get(kind) or _section_form(location))


_FORMS = {"bool_type": "true or false, without quotes"}


def _section_form(location: list[str | int]) -> str:
    """How the section is written that stands here as something else."""
    words = [part for part in location if isinstance(part, str)]
    if words[-1] == "repeat_with":
        return 'a list of names: ["propofol_schnider_1998"]'
    if words[-1] in ("group", "protocol", "dose", "band", "target", "vary"):
        return f"a section that begins with [[{'.'.join(words)}]]"
    return f"a section that begins with [{'.'.join(words)}]"


_EXAMPLES = {
    "title": 'title = "..."', "question": 'question = "Which protocol ...?"', "seed": "seed = 20261201",
    "until": 'until = "90 min"', "every": 'every = "30 s"', "during": 'during = "5 min to 60 min"',
    "model": 'model = "propofol_eleveld_2018"', "source": 'source = "survey", "list", "described" or "lattice"',
    "population": "a [population] section", "drug": "a [drug] section", "run": "a [run] section",
    "what": 'what = "dose 1: rate"', "over": 'over = "2 to 12 mg/kg/h"', "bands": "bands = 4",
    "edges_to": "edges_to = 5",
    "doses": 'doses = "100 to 900 mg/h"', "round_to": 'round_to = "50 mg/h"', "by": 'by = "weight"',
    "protocol": "at least one [[protocol]]", "target": "a [target] section", "dose": "at least one [[protocol.dose]]",
}


def _known_keys(location: list[str | int]) -> list[str]:
    model: Any = StudyFile
    for part in location:
        if isinstance(part, str):
            model = _SECTIONS.get(part, model)
    return [info.alias or key for key, info in model.model_fields.items()]


_SECTIONS = {"population": PopulationSection, "variability": VariabilitySection, "group": GroupSection,
             "drug": DrugSection, "protocol": ProtocolSection, "dose": DoseSection, "band": BandSection,
             "target": TargetSection, "compare": CompareSection, "run": RunSection, "find": FindSection,
             "vary": VarySection, "reference": ReferenceSection, "table": FindTableSection, "map": FindMapSection}


def shown(value: Any) -> str:
    """A value of the file as it may stand in a message, on one line and not too long."""
    if isinstance(value, str):
        text = '"' + "".join(sign if sign.isprintable() else "?" for sign in value[:LONGEST_TEXT]) + '"'
    elif isinstance(value, dict):
        text = "a section in single brackets, [...]"
    elif isinstance(value, list):
        text = "a list, or a section in double brackets, [[...]]"
    else:
        text = str(value).lower()
    return text if len(text) <= 120 else text[:117] + "..."


def read_dose(words: dict[str, Any], where: str) -> DoseSection:
    """One dose step from its words, such as {"at": "0 min", "amount": "200 mg"}; `where` says where they stand.

    Raises ProblemsError with all its faults, each at "where, column KEY".
    """
    try:
        return DoseSection.model_validate(words)
    except ValidationError as error:
        raise ProblemsError(replace(_problem("", words, entry), where=f"{where}, column {entry['loc'][-1]}")
                            for entry in error.errors()) from None
