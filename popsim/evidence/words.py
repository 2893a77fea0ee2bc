"""The evidence pages on the terminal (80 columns) and as JSON."""

from __future__ import annotations

import json
import math
import textwrap
from collections import Counter
from dataclasses import asdict

from popsim.evidence.check import AGREES, DISAGREES, KNOWN, NOT_RUN, NOT_SHIPPED, STALE, Answer
from popsim.evidence.claims import PAGES, Claim
from popsim.screen import wrapped

CLAIM_WIDTH = 35
SAID = {AGREES: "agree", KNOWN: "disagree for a known reason", DISAGREES: "DISAGREE", STALE: "agree now, against "
        "a reason on record", NOT_SHIPPED: "ask a sheet that is not shipped", NOT_RUN: "not run, a package is missing"}


def number(value: float) -> str:
    return "-" if math.isnan(value) else f"{value:.3g}" if abs(value) < 1e-3 else f"{value:.4g}"


def expected(claim: Claim) -> str:
    """"1.6 +-0.05", ">= 90"."""
    return f"{claim.sense} {claim.expected:g}" if claim.sense else f"{claim.expected:g} +-{claim.tolerance:.2g}"


def table(answers: list[Answer], sources: bool = False) -> str:
    """Page by page: claim, expected with its tolerance, what popsim gives, what that makes; reasons below."""
    lines = []
    for page, title in PAGES.items():
        own = [answer for answer in answers if answer.claim.page == page]
        if not own:
            continue
        lines += ["", title, "=" * len(title), f"{'claim':<{CLAIM_WIDTH}} {'expected':>17} {'popsim':>9}  verdict"]
        reasons: dict[str, int] = {}
        for answer in own:
            lines += _row(answer, reasons)
            if sources:
                lines += wrapped(f"{answer.claim.source}. Tolerance: {answer.claim.why}.", "      ")
        lines += [line for reason, k in reasons.items() for line in wrapped(reason, f"  {k}) ")]
    return "\n".join([*lines[1:], "", totals(answers)])


def _row(answer: Answer, reasons: dict[str, int]) -> list[str]:
    claim = answer.claim
    mark = f" {reasons.setdefault(answer.reason, len(reasons) + 1)})" if answer.reason else ""
    text = textwrap.wrap(f"{claim.claim} ({claim.unit})" if claim.unit else claim.claim, CLAIM_WIDTH,
                         subsequent_indent="  ")
    first = f"{text[0]:<{CLAIM_WIDTH}} {expected(claim):>17} {number(answer.found):>9}  {answer.status}{mark}"
    return [first, *text[1:]]


def totals(answers: list[Answer]) -> str:
    """"120 claims: 100 agree, 12 disagree for a known reason, ..."."""
    counts = Counter(answer.status for answer in answers)
    said = ", ".join(f"{counts[status]} {what}" for status, what in SAID.items() if counts[status])
    return "\n".join(wrapped(f"{len(answers)} claims: {said}"))


def as_json_text(answers: list[Answer]) -> str:
    """Everything of every claim for programs; NaN is null."""
    claims = [{**asdict(answer.claim), "found": None if math.isnan(answer.found) else answer.found,
               "status": answer.status, "reason": answer.reason} for answer in answers]
    return json.dumps({"counts": Counter(answer.status for answer in answers), "claims": claims}, indent=2,
                      ensure_ascii=False)
