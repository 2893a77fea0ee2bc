"""What `popsim find table` tells: the ward card, and what each step of simplicity costs."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from covariates.units import to_unit
from popsim.cautions import CAUTIONS
from popsim.finding.answer import (
    AGAINST_WRITTEN, Answer, Part, by_group, fresh_heading, group_table, notes, quoted_group, wish_sentence,
)  # fmt: skip
from popsim.finding.counting import Counts, fresh
from popsim.finding.dose import worst_of
from popsim.finding.table import TableFound, WardTable, with_table
from popsim.ward_card import step_as_written
from popsim.words import clock, percent, points, unit_of


def table_answer(found: TableFound) -> Answer:
    asked, counts = found.asked, found.fresh[0][1]
    rules = ["as written", *(table.name for table in found.tables)]
    columns, rows = group_table(counts, rules, "rule", 0)
    parts = [
        Part("Answer", _sentences(found, counts)),
        *(Part(f"Ward card: {table.name}", _beside(found), *_card(found, table)) for table in found.tables),
        Part(f"{fresh_heading(asked, counts)}: {AGAINST_WRITTEN}",
             [line for p, rule in enumerate(rules) if (line := wish_sentence(asked, counts, p, rule.capitalize()))],
             columns, rows),
        Part("What each step of simplicity costs: attainment against the rule before it (points), fresh patients", [],
             *_steps(counts, rules)),
        *(Part(f"The same under {model}", [], *group_table(of, rules, "rule", 0)) for model, of in found.fresh[1:]),
        Part("Note", [f"In the patients on whom the tables were tuned {', '.join(_tuned(found))} of all attained.",
                      *notes(asked, counts)]),
    ]
    cost = pd.concat([by_group(asked, of, [{"model": model, "rule": rule} for rule in rules], 0)
                      for model, of in found.fresh], ignore_index=True)
    return Answer(asked, parts, {"simplicity": cost, "ward_card": card_frame(found)}, _numbers(found),
                  {"ward_card.txt": card_text(found, found.tables[0])})


def band_text(by: str, low: float, high: float) -> str:
    """"under 60 kg", "60 to under 80 kg", "80 kg and over"; "everyone" without limits."""
    unit = f" {unit_of(by)}" if unit_of(by) else ""
    if np.isinf(low) and np.isinf(high):
        return "everyone"
    if np.isinf(low):
        return f"under {high:g}{unit}"
    return f"{low:g}{unit} and over" if np.isinf(high) else f"{low:g} to under {high:g}{unit}"


def _volume(found: TableFound, dose) -> float:
    """mL, or mL/h for a rate; NaN without a strength."""
    strength = found.asked.study([found.protocol]).protocols[0].strength_mg_per_ml
    if strength is None:
        return float("nan")
    return float(f"{dose.value / strength * (60 if dose.kind == 'rate' else 1):.12g}")  # 12, not 11.999999999999998


def _volume_text(found: TableFound, dose) -> str:
    volume = _volume(found, dose)
    return "" if np.isnan(volume) else f"{volume:.4g} {'mL/h' if dose.kind == 'rate' else 'mL'}"


def _card(found: TableFound, table: WardTable) -> tuple[list[str], list[list[str]]]:
    return [found.by.replace("_", " "), "dose", "volume"], [
        [band_text(found.by, low, high), dose.text, _volume_text(found, dose)]
        for (low, high), dose in zip(table.limits(), table.doses, strict=True)]


def _beside(found: TableFound) -> list[str]:
    """The doses of the protocol that the table leaves as they are."""
    protocol = found.asked.study([found.protocol]).protocols[0]
    return [f"Dose {step.number} stays as written: at {clock(step.variants[0].at_min)}, {step_as_written(step)}."
            for step in protocol.steps if step.number != found.place.dose + 1]


def card_frame(found: TableFound) -> pd.DataFrame:
    """One row per table and band; a limit is empty where the band is open; volume in mL, or mL/h for a rate."""
    rows = []
    for table in found.tables:
        for (low, high), dose in zip(table.limits(), table.doses, strict=True):
            rows.append({"table": table.name, "by": found.by, "from": low if np.isfinite(low) else np.nan,
                         "below": high if np.isfinite(high) else np.nan, "by_unit": unit_of(found.by),
                         "dose": to_unit(dose.value, dose.unit, dose.kind), "dose_unit": dose.unit,
                         "volume": _volume(found, dose), "volume_unit": "mL/h" if dose.kind == "rate" else "mL"})
    return pd.DataFrame(rows)


def card_text(found: TableFound, table: WardTable) -> str:
    """The card to print."""
    columns, rows = _card(found, table)
    width = [max(len(row[k]) for row in [columns, *rows]) for k in range(3)]
    strength = found.asked.study([found.protocol]).protocols[0].strength_mg_per_ml
    step = found.asked.study([with_table(found.protocol, found.place, found.by, table)]).protocols[0].steps[
        found.place.dose]
    when = f"at {clock(step.variants[0].at_min)}"
    if step.until_min or step.over_min:
        when += f", until {clock(step.until_min)}" if step.until_min else f", over {clock(step.over_min)}"
    lines = [found.asked.base.title, f'{found.place.text} of "{found.protocol.name}", {when}'
             + (f"; {strength:g} mg/mL" if strength else ""), ""]
    lines += ["  ".join(f"{cell:<{size}}" for cell, size in zip(row, width, strict=True)).rstrip()
              for row in [columns, *rows]]
    return "\n".join([*lines, "", *_beside(found), *CAUTIONS]) + "\n"


def _sentences(found: TableFound, counts: Counts) -> list[str]:
    share, worst = counts.attained()[0], worst_of(counts)
    lines = []
    for p, table in enumerate(found.tables, 1):
        difference = counts.difference(0, p, 0)
        shown = [g for g in range(len(counts.groups)) if counts.n[g] > 0]
        lost = min(shown, key=lambda g, p=p: counts.difference(0, p, g)[0])
        lines.append(
            f"{table.name.capitalize()}: {percent(share[p, 0])} % of all attain, {percent(worst[p])} % in the worst "
            f"group; against the protocol as written {points(difference[0])} points ({points(difference[1])} to "
            f"{points(difference[2])}) of all, {points(counts.difference(0, p, lost)[0])} in "
            f"{quoted_group(counts.groups[lost])}, where it gains least or loses most.")
    return lines


def _steps(counts: Counts, rules: list[str]) -> tuple[list[str], list[list[str]]]:
    shown = [g for g in range(len(counts.groups)) if counts.n[g] > 0]
    rows = []
    for p in range(2, len(rules)):
        cells = []
        for g in shown:
            difference, low, high = counts.difference(p - 1, p, g)
            cells.append(f"{points(difference)} ({points(low)} to {points(high)})")
        rows.append([f"{rules[p - 1]} to {rules[p]}", *cells])
    return ["step", *(counts.groups[g] for g in shown)], rows


def _tuned(found: TableFound) -> list[str]:
    return [f"{percent(shares[0])} % with {table.name}"
            for table, shares in zip(found.tables, found.tuned, strict=True)]


def _numbers(found: TableFound) -> dict[str, Any]:
    return {"searched": "table", "protocol": found.protocol.name, "what": found.place.text, "by": found.by,
            "tables": [[{"band": band_text(found.by, *limits), "dose": dose.text}
                        for limits, dose in zip(table.limits(), table.doses, strict=True)] for table in found.tables],
            "wishes": [wish.text for wish, _ in found.asked.wishes], "fresh_seed": fresh(found.asked.base).seed}
