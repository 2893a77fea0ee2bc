"""The claims of the evidence pages, as data: one CSV a page, one row a claim."""

from __future__ import annotations

import csv
import re
from collections.abc import Iterator
from dataclasses import dataclass
from importlib import resources

PAGES = {
    "remifentanil": "Remifentanil measured in 65 volunteers",
    "open_data": "Theophylline, indomethacin, cefamandole: solver and fits",
    "outcomes": "Published outcomes, asked of the shipped model sheets",
    "bodies": "Body size: measured lean mass, national percentiles",
    "mathematics": "Exact mathematics",
}
EXPECTED = re.compile(r"(<=|>=)?\s*([-+]?[0-9.]+(?:e[-+]?[0-9]+)?)")


@dataclass(frozen=True)
class Claim:
    """One claim.

    expected   the published number, or a limit: sense "" (within tolerance), "<=" or ">="
    why        why this tolerance
    ask, of    what popsim is asked, and of whom: the name of a function of check.py and its arguments
    disagrees  the reason, where popsim is known not to agree; empty elsewhere
    """

    page: str
    claim: str
    sense: str
    expected: float
    tolerance: float
    unit: str
    why: str
    source: str
    ask: str
    of: dict[str, str]
    disagrees: str

    def agrees(self, found: float) -> bool:
        """Whether what popsim gives meets the claim; NaN never does."""
        if self.sense == "<=":
            return found <= self.expected
        if self.sense == ">=":
            return found >= self.expected
        return abs(found - self.expected) <= self.tolerance


def read_claims() -> Iterator[Claim]:
    """Every claim, page by page."""
    for page in PAGES:
        text = (resources.files("popsim.evidence") / f"{page}.csv").read_text(encoding="utf-8")
        lines = [line for line in text.splitlines() if line and not line.startswith("#")]
        for row in csv.DictReader(lines, strict=True):
            sense, number = EXPECTED.fullmatch(row["expected"]).groups()
            yield Claim(page, row["claim"], sense or "", float(number), float(row["tolerance"] or 0), row["unit"],
                        row["why"], row["source"], row["ask"], arguments(row["of"]), row["disagrees"])


def arguments(text: str) -> dict[str, str]:
    """"model=x; age=40" gives {"model": "x", "age": "40"}."""
    parts = [part.partition("=") for part in text.split(";") if part.strip()]
    return {key.strip(): value.strip() for key, _, value in parts}
