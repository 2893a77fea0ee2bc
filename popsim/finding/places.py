"""Which number of a protocol is varied, and protocols with another number there."""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace

import numpy as np

from covariates.problems import Problem, ProblemsError, nearest
from covariates.units import Quantity, parse_quantity, parse_range, show
from popsim.study_sections import DoseSection, FindSection, ProtocolSection, StudyFile, VarySection
from popsim.study_values import DOSE_AMOUNTS, DOSE_RATES

ALL_DOSES = "all doses"  # every amount and rate, and their caps and floors left as they are
KINDS = {"amount": DOSE_AMOUNTS, "rate": DOSE_RATES, "at_most": ("mass", "rate"), "at_least": ("mass", "rate"),
         "every": ("time",), "over": ("time",), "at": ("time",), "until": ("time",)}
BAND_KEYS = ("amount", "rate", "every", "at")
_PLACE = re.compile(r"dose (\d+)(?:, band (\d+))?: (\w+)")
FORM = '"dose 2: rate", "dose 1, band 3: amount" or "all doses"'
DEFAULT_STEPS = {1: 21, 2: 9}
MOST_TRIED = 2500  # combinations to begin with
DIGITS = 4


@dataclass(frozen=True)
class Place:
    """One number of a protocol: dose (from 0), band (from 0, or None) and key; or all its doses at once (key "")."""

    text: str
    dose: int
    band: int | None
    key: str
    kinds: tuple[str, ...]

    def put(self, protocol: ProtocolSection, value: Quantity) -> ProtocolSection:
        """The protocol with this value there; a percentage multiplies all doses."""
        if not self.key:
            return with_doses(protocol, lambda quantity: times(quantity, value.value / 100))
        doses = list(protocol.dose)
        step = doses[self.dose]
        if self.band is None:
            doses[self.dose] = step.model_copy(update={self.key: value})
        else:
            bands = list(step.band)
            bands[self.band] = bands[self.band].model_copy(update={self.key: value})
            doses[self.dose] = step.model_copy(update={"band": bands})
        return protocol.model_copy(update={"dose": doses})


@dataclass(frozen=True)
class Varied:
    """A place with the values to try, ascending, and the unit in which they are said."""

    place: Place
    values: tuple[Quantity, ...]
    unit: str
    kind: str

    def quantity(self, value: float) -> Quantity:
        """A value in the internal unit, cut to four digits so that what is tried is what is said."""
        text = show(value, self.unit, self.kind, DIGITS)
        return replace(parse_quantity(text, [self.kind]), text=text)

    def between(self, low: Quantity, high: Quantity, parts: int) -> list[Quantity]:
        """The values that cut the way from low to high into equal parts."""
        return [self.quantity(value) for value in np.linspace(low.value, high.value, parts + 1)[1:-1]]


def times(quantity: Quantity, factor: float) -> Quantity:
    value = quantity.value * factor
    return replace(quantity, value=value, text=show(value, quantity.unit, quantity.kind))


def with_doses(protocol: ProtocolSection, change: Callable[[Quantity], Quantity]) -> ProtocolSection:
    """The protocol with every amount and rate changed, in the steps and in their bands.

    Raises ProblemsError for a step that gives neither: it would silently stay as it is.
    """
    def changed(section):
        return section.model_copy(update={key: change(dose) for key in ("amount", "rate")
                                          if (dose := getattr(section, key)) is not None})

    unmoved = [number for number, step in enumerate(protocol.dose, 1)
               if all(one.amount is None and one.rate is None for one in (step, *step.band))]
    if unmoved:
        raise ProblemsError(Problem(f'protocol "{protocol.name}", dose {number}', "neither amount nor rate",
                                    "an amount or a rate, which a search can multiply") for number in unmoved)
    doses = [changed(step).model_copy(update={"band": [changed(band) for band in step.band]})
             for step in protocol.dose]
    return protocol.model_copy(update={"dose": doses})


def chosen_protocol(section: StudyFile, file: str) -> ProtocolSection:
    """The protocol that is varied: the one that [find] names, else the study's only one."""
    names = [protocol.name for protocol in section.protocol]
    wanted = section.find.protocol
    if wanted is None and len(names) > 1:
        raise ProblemsError(Problem(f"{file}: find: protocol", "missing", ", ".join(f'"{name}"' for name in names),
                                    "the study has several protocols: say which one to work on"))
    if wanted is not None and wanted not in names:
        raise ProblemsError(Problem(f"{file}: find: protocol", f'"{wanted}"', ", ".join(f'"{name}"' for name in names),
                                    nearest(wanted, names)))
    return section.protocol[names.index(wanted) if wanted else 0]


def read_vary(find: FindSection, protocol: ProtocolSection, file: str) -> tuple[Varied, ...]:
    """What [[find.vary]] asks for; ProblemsError lists all that does not fit."""
    if not find.vary:
        raise ProblemsError(Problem(f"{file}: find: vary", "missing", "what to vary, and over which range",
                                    '[[find.vary]] with what = "dose 1: rate" and over = "2 to 12 mg/kg/h", or '
                                    '--vary "dose 1: rate" --over "2 to 12 mg/kg/h"'))
    problems: list[Problem] = []
    varied = [_read_one(vary, number, len(find.vary), protocol, file, problems)
              for number, vary in enumerate(find.vary)]
    if problems:
        raise ProblemsError(problems)
    tried = math.prod(len(one.values) for one in varied)
    if tried > MOST_TRIED:
        raise ProblemsError(Problem(f"{file}: find, vary 2: steps", f"{tried:,} combinations",
                                    f"at most {MOST_TRIED:,}",
                                    "fewer steps: the search looks closer by itself where it matters"))
    if len({one.place for one in varied}) < len(varied):
        raise ProblemsError(Problem(f"{file}: find, vary 2: what", f'"{varied[1].place.text}" twice', "two places"))
    return tuple(varied)


def _read_one(vary: VarySection, number: int, of: int, protocol: ProtocolSection, file: str,
              problems: list[Problem]) -> Varied | None:
    where = f"{file}: find, vary {number + 1}"
    try:
        place = read_place(vary.what, protocol, f"{where}: what")
        now = _value_there(place, protocol)
        kinds = (now.kind,) if now is not None else place.kinds
        if now is not None and place.key == "every":
            kinds = ("time",)
        over = range_of(vary.over, kinds, f"{where}: over")
    except ProblemsError as error:
        problems.extend(error.problems)
        return None
    values = np.linspace(over.low, over.high, vary.steps or DEFAULT_STEPS[of])
    blank = Varied(place, (), over.unit, over.kind)
    said = {quantity.text: quantity for quantity in map(blank.quantity, values)}
    if len(said) < 2:
        problems.append(Problem(f"{where}: over", f'"{vary.over}"', f"two ends that differ within {DIGITS} digits"))
    return replace(blank, values=tuple(said.values()))


def range_of(text: str, kinds: Iterable[str], where: str):
    """A range with two finite ends, of the first kind that fits."""
    kinds, first = list(kinds), None
    for kind in kinds:
        try:
            over = parse_range(text, kind, where)
        except ProblemsError as error:
            first = first or error
            continue
        if not np.isfinite([over.low, over.high]).all() or over.low <= 0:
            raise ProblemsError(Problem(where, f'"{text}"', "a range with two ends, both above zero"))
        return over
    raise first


def read_place(text: str, protocol: ProtocolSection, where: str) -> Place:
    """The place that a text such as "dose 2: rate" names in a protocol; ProblemsError where there is none."""
    text = " ".join(text.split())
    if text == ALL_DOSES:
        return Place(text, 0, None, "", ("percent",))
    found = _PLACE.fullmatch(text)
    if found is None:
        raise ProblemsError(Problem(where, f'"{text}"', FORM, nearest(text, [ALL_DOSES])))
    dose, band, key = int(found[1]), None if found[2] is None else int(found[2]), found[3]
    _check_number(dose, len(protocol.dose), f'doses in "{protocol.name}"', where)
    step = protocol.dose[dose - 1]
    if band is not None:
        _check_number(band, len(step.band), f"bands in dose {dose}", where)
    keys = BAND_KEYS if band is not None else tuple(KINDS)
    if key not in keys:
        raise ProblemsError(Problem(where, f'"{key}"', ", ".join(keys), nearest(key, keys)))
    place = Place(text, dose - 1, None if band is None else band - 1, key, KINDS[key])
    if _value_there(place, protocol) is None and key not in ("at_most", "at_least"):
        raise ProblemsError(Problem(where, f'"{text}", which "{protocol.name}" does not have',
                                    "a number that the protocol gives", f"it has {_has(step, band)}"))
    return place


def _check_number(number: int, most: int, of_what: str, where: str) -> None:
    if not 1 <= number <= most:
        raise ProblemsError(Problem(where, f"number {number}", f"1 to {most}: there are {most} {of_what}" if most
                                    else f"there are no {of_what}"))


def _value_there(place: Place, protocol: ProtocolSection) -> Quantity | None:
    if not place.key:
        return None
    step = protocol.dose[place.dose]
    return getattr(step if place.band is None else step.band[place.band], place.key)


def _has(step: DoseSection, band: int | None) -> str:
    section = step if band is None else step.band[band - 1]
    keys = [key for key in KINDS if getattr(section, key, None) is not None]
    bands = [f"{len(step.band)} bands"] if step.band and band is None else []
    return ", ".join(keys + bands) or "none"
