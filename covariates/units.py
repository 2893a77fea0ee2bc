"""The closed set of units, with exact factors. "/kg" is a kind of its own: mg/kg is never a plain number.

Quantities are text with a unit ("1.5 mg/kg", "6 mg/kg/h", "90 s"). They are resolved once, where a file is read, into
mg, L and min (mg/L = ug/mL); ages stay in years, body weights in kg, heights in cm, serum creatinine in mg/dL,
percentages in percent. Spellings are those of UCUM, the Unified Code for Units of Measure, with the everyday forms
("mcg", "hours", "ml") beside them.
The arithmetic is rational, so "0.1 g" is 100 mg and "6 mg/h" is 0.1 mg/min, each correctly rounded.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterable
from dataclasses import dataclass
from fractions import Fraction

from covariates.problems import Problem, ProblemsError, nearest


@dataclass(frozen=True)
class Kind:
    """What a quantity is: `words` for messages, `internal` unit of its values, an `example` as a user writes it."""

    words: str
    internal: str
    example: str


@dataclass(frozen=True)
class Unit:
    """One unit of the closed set: a value in it times `factor` is the value in the kind's internal unit."""

    kind: str
    name: str
    factor: Fraction


@dataclass(frozen=True)
class Quantity:
    """A parsed quantity: `value` in the internal unit of `kind`, `unit` as the user meant it, `text` as written."""

    value: float
    kind: str
    unit: str
    text: str


@dataclass(frozen=True)
class Range:
    """A parsed range: `low` < `high` in the internal unit of `kind`; -inf or inf where that side is open."""

    low: float
    high: float
    kind: str
    unit: str
    text: str


KINDS: dict[str, Kind] = {
    "time": Kind("a time", "min", "5 min"),
    "mass": Kind("an amount", "mg", "200 mg"),
    "volume": Kind("a volume", "L", "50 mL"),
    "concentration": Kind("a concentration", "mg/L", "3 ug/mL"),
    "volume_per_kg": Kind("a volume per kg", "L/kg", "0.7 L/kg"),
    "mass_per_kg": Kind("an amount per kg", "mg/kg", "1.5 mg/kg"),
    "mass_per_m2": Kind("an amount per m2", "mg/m2", "50 mg/m2"),
    "rate": Kind("a rate", "mg/min", "600 ug/h"),
    "rate_per_kg": Kind("a rate per kg", "mg/kg/min", "6 mg/kg/h"),
    "rate_per_m2": Kind("a rate per m2", "mg/m2/min", "20 mg/m2/h"),
    "flow": Kind("a volume per time", "L/min", "5 L/h"),
    "per_time": Kind("a rate constant", "1/min", "0.456 1/min"),
    "area": Kind("an area under the curve", "mg.min/L", "400 mg.h/L"),
    "age": Kind("an age", "years", "65 years"),
    "postmenstrual_age": Kind("a postmenstrual age", "wk", "40 wk"),
    "body_weight": Kind("a body weight", "kg", "70 kg"),
    "height": Kind("a height", "cm", "170 cm"),
    "body_mass_index": Kind("a body mass index", "kg/m2", "30 kg/m2"),
    "creatinine": Kind("a serum creatinine", "mg/dL", "1.2 mg/dL"),
    "percent": Kind("a percentage", "%", "80 %"),
    "number": Kind("a number without unit", "", "40"),
}

_MASS = {"ng": Fraction(1, 10**6), "ug": Fraction(1, 1000), "mg": Fraction(1), "g": Fraction(1000)}
_VOLUME = {"uL": Fraction(1, 10**6), "mL": Fraction(1, 1000), "dL": Fraction(1, 10), "L": Fraction(1)}
_TIME = {"s": Fraction(1, 60), "min": Fraction(1), "h": Fraction(60), "d": Fraction(1440), "wk": Fraction(10080)}
_SIZES = ("kg", "m2")
_UMOL_PER_L_IN_1_MG_PER_DL = Fraction(8842, 100)  # creatinine, molar mass 113.12 g/mol


def _per(upper: dict[str, Fraction], lower: dict[str, Fraction]) -> dict[str, Fraction]:
    return {f"{a}/{b}": x / y for a, x in upper.items() for b, y in lower.items()}


def _per_size(upper: dict[str, Fraction], size: str) -> dict[str, Fraction]:
    return {f"{a}/{size}": x for a, x in upper.items()}


UNITS: dict[str, dict[str, Fraction]] = {
    "time": _TIME,
    "mass": _MASS,
    "volume": _VOLUME,
    "concentration": _per(_MASS, _VOLUME),
    "volume_per_kg": _per_size(_VOLUME, "kg"),
    "mass_per_kg": _per_size(_MASS, "kg"),
    "mass_per_m2": _per_size(_MASS, "m2"),
    "rate": _per(_MASS, _TIME),
    "rate_per_kg": _per(_per_size(_MASS, "kg"), _TIME),
    "rate_per_m2": _per(_per_size(_MASS, "m2"), _TIME),
    "flow": _per(_VOLUME, _TIME),
    "per_time": _per({"1": Fraction(1)}, _TIME),
    "area": _per({f"{a}.{t}": x * y for a, x in _MASS.items() for t, y in _TIME.items()}, _VOLUME),
    "age": {"years": Fraction(1), "months": Fraction(1, 12), "wk": Fraction(28, 1461), "d": Fraction(4, 1461)},
    "postmenstrual_age": {"wk": Fraction(1), "d": Fraction(1, 7)},
    "body_weight": {"kg": Fraction(1), "g": Fraction(1, 1000)},
    "height": {"cm": Fraction(1), "m": Fraction(100)},
    "body_mass_index": {"kg/m2": Fraction(1)},
    "creatinine": {"mg/dL": Fraction(1), "umol/L": 1 / _UMOL_PER_L_IN_1_MG_PER_DL},
    "percent": {"%": Fraction(1)},
    "number": {"": Fraction(1)},
}

_EVERYDAY = {
    "mcg": "ug", "ul": "uL", "ml": "mL", "dl": "dL", "l": "L",
    "sec": "s", "second": "s", "seconds": "s", "mins": "min", "minute": "min", "minutes": "min",
    "hr": "h", "hrs": "h", "hour": "h", "hours": "h", "day": "d", "days": "d", "week": "wk", "weeks": "wk",
    "mo": "months", "month": "months", "a": "years", "yr": "years", "yrs": "years", "year": "years",
    "m^2": "m2",
}  # fmt: skip
# micro sign, Greek mu, superscript two, middle dot
_SIGNS = {"\u00b5": "u", "\u03bc": "u", "\u00b2": "2", "\u00b7": ".", "*": "."}
_NUMBER = re.compile(
    r"\s*([+-]?(?:(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:e[+-]?[0-9]{1,3})?|nan|inf(?:inity)?))(?![0-9.])\s*(.*)",
    re.IGNORECASE,
)
_LONGEST_TEXT = 100


def normal_unit(text: str) -> str:
    """The one spelling of a unit: "mcg/kg/hour" gives "ug/kg/h", "mg*h/L" gives "mg.h/L", "/min" gives "1/min"."""
    for sign, plain in _SIGNS.items():
        text = text.replace(sign, plain)
    parts = [[word.strip() for word in part.split(".")] for part in text.split("/")]
    upper, *lower = [[_EVERYDAY.get(word, word) for word in words] for words in parts]
    upper = sorted(upper, key=lambda word: word in _TIME)
    lower = sorted([".".join(words) for words in lower], key=lambda word: word not in _SIZES)
    return "/".join([".".join(upper) or ("1" if lower else ""), *lower])


def allowed_kinds(kinds: Iterable[str]) -> str:
    """The kinds in words with an example each: 'a time, such as "5 min"'."""
    return " or ".join(f'{KINDS[kind].words}, such as "{KINDS[kind].example}"' for kind in kinds)


def parse_unit(text: str, kinds: Iterable[str], where: str = "", shown: str = "") -> Unit:
    """The unit that `text` names, among `kinds`; `shown` is the whole quantity for the message.

    Raises ProblemsError where the unit is unknown (with the nearest one) or of another kind (said in words).
    """
    kinds, shown = tuple(kinds), shown or text
    name = normal_unit(text)
    for kind in kinds:
        if name in UNITS[kind]:
            return Unit(kind, name, UNITS[kind][name])
    others = [kind for kind in UNITS if name in UNITS[kind]]
    if others:
        raise ProblemsError(Problem(where, f'"{shown}" is {KINDS[others[0]].words}', allowed_kinds(kinds)))
    known = [unit for kind in kinds for unit in UNITS[kind] if unit]
    same_but_case = [unit for unit in known if unit.lower() == name.lower()]
    advice = f'did you mean "{same_but_case[0]}"?' if same_but_case else nearest(name, known)
    raise ProblemsError(Problem(where, f'unknown unit "{text}" in "{shown}"', allowed_kinds(kinds), advice))


def _split(shown: str, kinds: tuple[str, ...], where: str) -> tuple[Fraction, str, str]:
    """Number, its text and the unit's text; refuses what is no finite number of zero or more."""
    match = _NUMBER.fullmatch(shown.strip()) if len(shown) <= _LONGEST_TEXT else None
    if match is None or match[2].startswith(","):
        decimal = "write numbers with a decimal point and no commas" if match else ""
        raise ProblemsError(Problem(where, f'"{shown[:_LONGEST_TEXT]}"', allowed_kinds(kinds), decimal))
    number = match[1]
    if not math.isfinite(float(number)):
        raise ProblemsError(Problem(where, f'"{shown}" is not finite', "a finite number, zero or more"))
    if float(number) < 0:
        raise ProblemsError(Problem(where, f'"{shown}" is negative', "a finite number, zero or more"))
    return Fraction(number), number, match[2]


def _with_a_unit(number: str, kind: str) -> str:
    """What to write: the usual unit first, and the others of a short list, since any may be meant."""
    usual = KINDS[kind].example.partition(" ")[2]
    others = [unit for unit in UNITS[kind] if unit != usual]
    if not 0 < len(others) < 5:
        return f'write "{number} {usual}" if {usual} is what you mean'
    return "write " + " or ".join(f'"{number} {unit}"' for unit in (usual, *others)) + ", whichever you mean"


def parse_quantity(text: object, kinds: Iterable[str], where: str = "") -> Quantity:
    """A number with its unit, in the internal unit of the first of `kinds` that has this unit.

    text   what the file holds: text such as "6 mg/kg/h"; a bare number only where "number" is among `kinds`
    kinds  names of KINDS that are allowed, the usual one first
    where  file and key, for the message

    Raises ProblemsError: bare number, unknown unit, wrong kind, negative or not finite.

    >>> parse_quantity("6 mg/kg/h", ["rate", "rate_per_kg"]).value
    0.1
    """
    kinds = tuple(kinds)
    if isinstance(text, bool) or not isinstance(text, (str, int, float)):
        raise ProblemsError(Problem(where, f"{text!r:.100}", allowed_kinds(kinds)))
    shown = str(text)
    number, number_text, unit_text = _split(shown, kinds, where)
    if not unit_text and "number" not in kinds:
        raise ProblemsError(Problem(where, f'"{shown}" has no unit', allowed_kinds(kinds),
                                    _with_a_unit(number_text, kinds[0])))
    unit = parse_unit(unit_text, kinds, where, shown)
    try:
        value = float(number * unit.factor)
    except OverflowError:
        raise ProblemsError(Problem(where, f'"{shown}" is not finite', "a finite number, zero or more")) from None
    return Quantity(value, unit.kind, unit.name, shown)


def parse_range(text: object, kind: str, where: str = "") -> Range:
    """A range of one kind: "5 min to 60 min", "5 to 60 min", ">= 65 years", "<= 8 ug/mL"; "40 to 60" for "number".

    The open side is -inf or inf; "> 65 years" is taken as ">= 65 years". Raises ProblemsError as `parse_quantity`
    does, and where the lower end is not below the upper end.

    >>> parse_range("5 min to 1 h", "time").high
    60.0
    """
    example = KINDS[kind].example
    number, _, unit = example.partition(" ")
    both_ends = f"{number} to {2 * float(number):g} {unit}".strip()
    form = f'a range, such as "{both_ends}" or ">= {example}"'
    if not isinstance(text, str):
        raise ProblemsError(Problem(where, f"{text!r:.100}", form))
    one_sided = re.fullmatch(r"\s*(>=|<=|>|<)(.*)", text, re.DOTALL)
    if one_sided:
        bound = parse_quantity(one_sided[2].strip(), [kind], where)
        low, high = (bound.value, math.inf) if one_sided[1].startswith(">") else (-math.inf, bound.value)
        return Range(low, high, kind, bound.unit, text)
    ends = re.split(r"\s+to\s+", text.strip())
    if len(ends) != 2:
        raise ProblemsError(Problem(where, f'"{text[:_LONGEST_TEXT]}"', form))
    upper = parse_quantity(ends[1], [kind], where)
    only_number = _NUMBER.fullmatch(ends[0]) is not None and not _NUMBER.fullmatch(ends[0])[2]
    lower = parse_quantity(f"{ends[0]} {upper.unit}" if only_number else ends[0], [kind], where)
    if lower.value >= upper.value:
        raise ProblemsError(Problem(where, f'"{text}"', "a lower end below the upper end"))
    return Range(lower.value, upper.value, kind, upper.unit, text)


def to_unit(value: float, unit: str, kind: str) -> float:
    """A value from the internal unit of `kind` into `unit`: to_unit(0.1, "mg/kg/h", "rate_per_kg") gives 6.0.

    Raises ProblemsError for a unit that the kind does not have. NaN and inf pass through.
    """
    factor = parse_unit(unit, [kind]).factor
    return float(Fraction(value) / factor) if math.isfinite(value) else float(value)


def show(value: float, unit: str, kind: str, digits: int = 4) -> str:
    """An internal value in the user's unit, to `digits` significant digits, whole digits always kept.

    >>> show(0.1, "mg/kg/h", "rate_per_kg")
    '6 mg/kg/h'
    """
    name = parse_unit(unit, [kind]).name
    number = to_unit(value, unit, kind)
    if math.isfinite(number) and number != 0:
        decimals = max(0, digits - 1 - math.floor(math.log10(abs(number))))
        text = f"{number:.{decimals}f}"
        text = text.rstrip("0").rstrip(".") if "." in text else text
    else:
        text = "0" if number == 0 else str(number)
    return f"{text} {name}".strip()
