"""Asks popsim every claim of the evidence pages, and says what came of it."""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator
from dataclasses import dataclass

from covariates.problems import ProblemsError
from covariates.sheet import shipped_sheets
from popsim.evidence import bodies, mathematics, open_data, remifentanil, typical
from popsim.evidence.claims import Claim, read_claims

MODULES = {"bodies": bodies, "mathematics": mathematics, "open_data": open_data, "remifentanil": remifentanil,
           "typical": typical}
AGREES, KNOWN, DISAGREES = "agrees", "known", "DISAGREES"
STALE = "agrees now"  # a reason for disagreement stands there that no longer holds
NOT_SHIPPED, NOT_RUN = "not shipped", "not run"
UNSOUND = (DISAGREES, STALE)


@dataclass(frozen=True)
class Answer:
    """What popsim gave (NaN where nothing) and what that makes of the claim."""

    claim: Claim
    found: float
    status: str
    reason: str


def check_all(claims: Iterable[Claim] | None = None) -> Iterator[Answer]:
    """Every claim recomputed, in the order of the pages."""
    for claim in read_claims() if claims is None else claims:
        yield check(claim)


def check(claim: Claim) -> Answer:
    """One claim: asked as `ask` and `of` say, never from memory of an earlier run."""
    shipped = shipped_sheets()
    for model in (claim.of[word] for word in ("model", "other", "spread_from") if word in claim.of):
        if model not in shipped:
            return Answer(claim, math.nan, NOT_SHIPPED, f"there is no sheet {model} yet")
    module, _, function = claim.ask.partition(".")
    try:
        found = float(getattr(MODULES[module], function)(**claim.of))
    except ModuleNotFoundError as error:
        return Answer(claim, math.nan, NOT_RUN, f"pip install {error.name}")
    except ProblemsError as error:
        return Answer(claim, math.nan, DISAGREES, f"cannot be asked: {error.problems[0].found}")
    if claim.agrees(found):
        return Answer(claim, found, STALE if claim.disagrees else AGREES, claim.disagrees)
    return Answer(claim, found, KNOWN if claim.disagrees else DISAGREES, claim.disagrees)
