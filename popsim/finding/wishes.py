"""What a study wishes of a dose, in plain words: "at least 90 % attained in every group"."""

from __future__ import annotations

import re
from dataclasses import dataclass

from covariates.problems import Problem, ProblemsError

EVERY, EVERYONE = "every group", "all"
FORM = ('such as "at least 90 % attained in every group", "at most 5 % ever above 8 ug/mL", '
        '"at most 10 % of the time above in \'over 75\'"')
_WISH = re.compile(
    r"(?P<side>at least|at most)\s+(?P<percent>[0-9]+(?:\.[0-9]+)?)\s*%\s+"
    r"(?:(?P<attained>attained)"
    r"|ever\s+(?P<ever>above|below)\s+(?P<limit>.+?)(?:\s+(?P<course>in plasma|at the effect site))?"
    r"|of the time\s+(?P<time>below|in range|above))"
    r"(?:\s+(?:in\s+(?P<every>every group)|among\s+all|in\s+[\"'](?P<group>[^\"']+)[\"']))?"
)
_BETWEEN = re.compile(r"\s*(?:,|,?\s+and)\s+(?=at least |at most )")
COURSES = {"in plasma": "plasma", "at the effect site": "effect_site"}
SHARES = {"below": "below", "in range": "inside", "above": "above"}


@dataclass(frozen=True)
class Wish:
    """One wish.

    text      as the study says it
    at_least  whether the share may not fall short of `share`; else it may not exceed it
    share     0 to 1
    ever      "above" or "below" where patients count who are ever beyond `limit` in the target's window; else ""
    limit     as written; `course` says which course where it is not the target's own
    time      "below", "inside" or "above" where the mean share of the window counts; else "" (patients count)
    group     a group's name, "all", or "every group"
    """

    text: str
    at_least: bool
    share: float
    ever: str
    limit: str
    course: str
    time: str
    group: str


def parse_wishes(text: object) -> tuple[Wish, ...]:
    """The wishes of one text, joined by "and" or a comma. Raises ProblemsError for anything else.

    >>> [wish.share for wish in parse_wishes("at least 90 % attained and at most 5 % ever above 8 ug/mL")]
    [0.9, 0.05]
    """
    if not isinstance(text, str):
        raise ProblemsError(Problem("", str(text)[:100], f"a wish as text, {FORM}"))
    return tuple(_parse_one(part.strip(), text) for part in _BETWEEN.split(text.strip()))


def _parse_one(part: str, whole: str) -> Wish:
    found = _WISH.fullmatch(part)
    if found is None or not found["percent"] or float(found["percent"]) > 100:
        shown = f'"{part}"' if part == whole.strip() else f'"{part}" in "{whole.strip()}"'
        raise ProblemsError(Problem("", shown, f"a wish {FORM}"))
    group = EVERY if found["every"] else found["group"] or EVERYONE
    return Wish(
        text=re.sub(r"\s+", " ", part),
        at_least=found["side"] == "at least",
        share=float(found["percent"]) / 100,
        ever=found["ever"] or "",
        limit=found["limit"] or "",
        course=COURSES.get(found["course"] or "", ""),
        time=SHARES.get(found["time"] or "", ""),
        group=group,
    )
