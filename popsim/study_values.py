"""How the values of a study file are written: one parser a kind, each saying what it wants when it is refused."""

from __future__ import annotations

from collections.abc import Callable
from typing import Annotated, Any

from pydantic import BeforeValidator

from covariates.formula import Formula, compile_formula
from covariates.problems import Problem, ProblemsError
from covariates.units import Quantity, Range, allowed_kinds, parse_quantity, parse_range

DOSE_AMOUNTS = ("mass", "mass_per_kg", "mass_per_m2")
DOSE_RATES = ("rate", "rate_per_kg", "rate_per_m2")
WHOLE_VIALS = "whole vials"
LARGEST, SMALLEST = 1e9, 1e-12  # of any quantity in its internal unit: beyond lie slips of the pen, and overflow
LONGEST_NAME, LONGEST_TEXT = 80, 400
MOST_ADMINISTRATIONS = 1000  # of one dose step
MOST_IN_PROTOCOL = 2000
MOST_MICS = 20


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


def _refuse(found: str, allowed: str, advice: str = "") -> ProblemsError:
    return ProblemsError(Problem("", found, allowed, advice))


def parsed(parse: Callable[[Any], Any], kind: Any) -> Any:
    """A value of type `kind`, read by `parse`, which raises ProblemsError."""
    return Annotated[kind, BeforeValidator(parse)]


def _parse_plain(value: Any, kinds: tuple[str, ...]) -> Quantity:
    if isinstance(value, bool) or not isinstance(value, str | int | float):
        raise _refuse(shown(value), allowed_kinds(kinds))
    quantity = parse_quantity(value, kinds)
    if quantity.value != 0 and not SMALLEST <= quantity.value <= LARGEST:
        raise _refuse(f'"{quantity.text}"', "a plausible size", "check the number and its unit")
    return quantity


def a_quantity(*kinds: str) -> Any:
    return parsed(lambda value: _parse_plain(value, kinds), Quantity)


def a_range(kind: str) -> Any:
    return parsed(lambda value: parse_range(value if isinstance(value, str) else shown(value), kind), Range)


def a_text(longest: int) -> Any:
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

    return parsed(parse, str)


def a_whole_number(least: int, most: int, example: int) -> Any:
    def parse(value: Any) -> int:
        if isinstance(value, bool) or not isinstance(value, int) or not least <= value <= most:
            raise _refuse(shown(value), f"a whole number from {least:,} to {most:,}, such as {example}")
        return value

    return parsed(parse, int)


def a_number(least: float, most: float, example: float) -> Any:
    def parse(value: Any) -> float:
        if isinstance(value, bool) or not isinstance(value, int | float) or not least <= value <= most:
            raise _refuse(shown(value), f"a number from {least:g} to {most:g}, without quotes, such as {example:g}")
        return float(value)

    return parsed(parse, float)


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


Correlation = a_number(-0.9999, 0.9999, 0.4)
Time = a_quantity("time")
Amount = a_quantity(*DOSE_AMOUNTS)
Rate = a_quantity(*DOSE_RATES)
PlainDose = a_quantity("mass", "rate")
Condition = parsed(_condition, Formula)
Name = a_text(LONGEST_NAME)
Limit = parsed(_limit, Any)
SwitchOrNumber = parsed(_switch_or_number, Any)
AgeMix = parsed(_age_mix, Any)
Rounding = parsed(_rounding, Any)
Mics = parsed(_mics, Any)
Isolates = parsed(_isolates, Any)
