"""Where keys of a study file do not fit, the rest can still be checked for its meaning: all is said at once."""

from __future__ import annotations

import copy
from collections.abc import Iterable
from typing import Any

from covariates.problems import Problem

# What may stand in for a key that is required and does not fit; it only has to mean nothing to the other sections.
STAND_INS: dict[str, Any] = {"title": "?", "question": "?", "seed": 0, "where": "age >= 0", "quantity": "plasma",
                             "during": "0 min", "every": "1 d", "range": "1 to 2 mg/L"}
# Too much else hangs on these.
BEYOND_HELP = {("run", "until"), ("drug", "model"), ("population", "source"), ("population", "file")}


def without_faults(raw: dict[str, Any], locations: Iterable[tuple[str | int, ...]]) -> dict[str, Any] | None:
    """A copy of a study file with its faulty keys left out or stood in for; None where too much hangs on one."""
    mended = copy.deepcopy(raw)
    for number, location in enumerate(locations):
        names = [part for part in location if isinstance(part, str)]
        if len(location) < 2 and location[-1] not in STAND_INS or tuple(names) in BEYOND_HELP:
            return None
        if isinstance(location[-1], int):
            location = location[:-1]
        section = _section_at(mended, location[:-1])
        key = location[-1]
        if not isinstance(section, dict):
            return None
        section.pop(key, None)
        if key == "name":
            section[key] = f"?{number}"
        elif key in STAND_INS:
            section[key] = STAND_INS[key]
    return mended


def beside(problems: Iterable[Problem], faults: list[Problem]) -> list[Problem]:
    """The problems of meaning that no fault of shape can have caused: those in other sections."""
    spoilt = {fault.where.rpartition(": ")[0] for fault in faults if fault.where.count(": ") > 1}
    return [problem for problem in problems
            if not any(problem.where.startswith((f"{section}:", f"{section},")) for section in spoilt)]


def _section_at(raw: Any, location: tuple[str | int, ...]) -> Any:
    for part in location:
        try:
            raw = raw[part]
        except (KeyError, IndexError, TypeError):
            return None
    return raw
