"""What a search leaves: parts with sentences and tables, the same on the terminal and in the report."""

from __future__ import annotations

import textwrap
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pandas as pd

from covariates.sheet import DrugModel
from popsim.cautions import CAUTIONS
from popsim.estimate import no_headline
from popsim.finding.counting import Asked, Counts, fresh_line
from popsim.finding.holding import hold, share_of
from popsim.pictures.shown import Picture
from popsim.screen import WIDTH, wrapped
from popsim.tables import FEW_PATIENTS
from popsim.words import percent, points, target_line



@dataclass(frozen=True)
class Part:
    """One part of an answer: what was found in sentences, and a small table (text cells)."""

    heading: str
    sentences: list[str] = field(default_factory=list)
    columns: list[str] = field(default_factory=list)
    rows: list[list[str]] = field(default_factory=list)
    report_only: bool = False


@dataclass(frozen=True)
class Answer:
    """What a search found, ready to be written.

    tables    file name without ending -> table     texts  file name -> text
    numbers   what record.json keeps of the search, beside the study
    """

    asked: Asked
    parts: list[Part]
    tables: dict[str, pd.DataFrame]
    numbers: dict[str, Any]
    texts: dict[str, str] = field(default_factory=dict)
    pictures: list[Picture] = field(default_factory=list)


def share_text(share: float, low: float, high: float) -> str:
    """84.1 % (83.4 to 84.8 %)."""
    between = "" if np.isnan(low) else f" ({percent(low)} to {percent(high)} %)"
    return f"{percent(share)} %{between}"


def attained_text(counts: Counts, p: int, group: int) -> str:
    """The share attained under one protocol in one group, with its interval."""
    return share_text(*(values[p, group] for values in counts.attained()))


def short_share(share: float, low: float, high: float) -> str:
    return f"{percent(share)} ({percent(low)}-{percent(high)})"


AGAINST_WRITTEN = "share attained (%), difference to the protocol as written in points"


def quoted_group(name: str) -> str:
    return "all patients" if name == "all" else f'"{name}"'


def by_group(asked: Asked, counts: Counts, leads: Sequence[dict[str, Any]], against: int | None = None) -> pd.DataFrame:
    """One row per protocol and group: what attainment.csv has, mean dose, each wish's share, whether all are met.

    leads    first columns of each protocol
    against  place of the protocol whose attainment is subtracted, in the same patients; None for no difference
    """
    share, low, high = counts.attained()
    sides = {f"time_{name}": counts.mean_share(side)
             for name, side in (("below", "below"), ("in_range", "inside"), ("above", "above"))}
    failed, held = counts.total("failed"), hold(asked, counts)
    wishes = [share_of(wish, target, counts)[0] for wish, target in asked.wishes]
    rows = []
    for p, lead in enumerate(leads):
        for g, group in enumerate(counts.groups):
            row = lead | {"group": group, "patients": int(counts.n[g]), "failed": int(failed[p, g]),
                          "attained": share[p, g], "attained_low": low[p, g], "attained_high": high[p, g],
                          **{name: values[p, g] for name, values in sides.items()},
                          "mean_total_mg": counts.dose_mg[p, g]}
            if against is not None:
                row |= dict(zip(("difference", "difference_low", "difference_high"),
                                counts.difference(against, p, g), strict=True))
            row |= {f"wish_{number}": values[p, g] for number, values in enumerate(wishes, 1)}
            if held:
                row |= {"wishes_met": bool(all(one.met[p] for one in held)),
                        "wishes_clearly_met": bool(all(one.clearly[p] for one in held))}
            rows.append(row)
    return pd.DataFrame(rows)


def group_table(counts: Counts, names: Sequence[str], first: str, against: int | None = None) -> tuple[list, list]:
    """Columns and rows of text: a protocol a row, its attainment in each group, with differences to `against`."""
    shown = [g for g in range(len(counts.groups)) if counts.n[g] > 0]
    columns = [first, *(counts.groups[g] for g in shown)]
    share, failed = counts.attained()[0], counts.total("failed")
    rows = []
    for p, name in enumerate(names):
        cells = []
        for g in shown:
            if no_headline(int(failed[p, g]), int(counts.n[g])):
                cells.append("no headline")
            elif against is None or p == against:
                cells.append(percent(share[p, g]))
            else:
                cells.append(f"{percent(share[p, g])} ({points(counts.difference(against, p, g)[0])})")
        rows.append([name, *cells])
    return columns, rows


def wish_sentence(asked: Asked, counts: Counts, p: int, what: str) -> str:
    """Whether every wish holds under one protocol, and which ones do not."""
    held = hold(asked, counts)
    unmet = [one for one in held if not one.met[p]]
    if not held:
        return ""
    if not unmet:
        sure = all(one.clearly[p] for one in held)
        return f"{what}: every wish holds{', clearly' if sure else ', but not beyond doubt'}."
    said = [f'"{one.wish.text}": {share_text(one.share[p], one.low[p], one.high[p])} in '
            f"{quoted_group(counts.groups[one.group[p]])}" for one in unmet]
    return f"{what}: not met: {'; '.join(said)}."


def notes(asked: Asked, counts: Counts) -> list[str]:
    """What a reader must know beside the numbers."""
    study = asked.base
    model = study.models[0]
    lines = [f"Model: {model.name}. Target: {target_line(asked.target)}.",
             "Intervals (95 %) show the luck of drawing patients; they say nothing about the model's error."]
    lines += list(study.warnings) + _outside(model, counts)
    lines += [f"Every patient's {name.replace('_', ' ')} is multiplied by {factor:g}."
              for name, factor in study.population.scale.items()]
    few = [counts.groups[g] for g in range(len(counts.groups)) if 0 < counts.n[g] < FEW_PATIENTS]
    lines += [f"Fewer than {FEW_PATIENTS} patients in: {', '.join(few)}."] if few else []
    empty = [counts.groups[g] for g in range(len(counts.groups)) if counts.n[g] == 0]
    lines += [f"No patients in: {', '.join(empty)}."] if empty else []
    most = int(counts.total("failed")[:, 0].max())
    lines += [f"Up to {most} patients failed or went without a dose: counted as not attained."] if most else []
    if model.spread_note and study.variability.between_subject:
        lines.append(f"{model.name}: {model.spread_note}")
    return lines


def _outside(model: DrugModel, counts: Counts) -> list[str]:
    """Who lies beyond the people that the model was built on."""
    shown = [g for g in range(len(counts.groups)) if counts.n[g] > 0]
    if np.isnan(counts.outside).any():
        lines = [f"Who lies outside the people of {model.name} is not known: the sheet gives no ranges."]
    else:
        shares = ", ".join(f"{counts.groups[g]} {percent(counts.outside[g] / counts.n[g])} %" for g in shown)
        lines = [f"Outside the people that {model.name} was built on: {shares}."]
    longest = counts.too_long[:, 0].max() / counts.n[0]
    if longest > 0:
        lines.append(f"Infused longer than the {model.built_on.longest_infusion_min:g} min studied: up to "
                     f"{percent(longest)} % of patients.")
    return lines


def fresh_heading(asked: Asked, counts: Counts) -> str:
    return f"In {fresh_line(asked.base, int(counts.n[0]))}, on whom nothing was tuned"


def terminal_text(answer: Answer, bold: bool = False) -> str:
    """The answer on 80 columns."""
    def heading(text: str) -> list[str]:
        return [f"\033[1m{line}\033[0m" if bold else line for line in wrapped(text)]

    study = answer.asked.base
    lines = [*heading(study.title), *wrapped(study.question)]
    for part in answer.parts:
        if part.report_only:
            continue
        lines += ["", *heading(part.heading)]
        lines += [line for sentence in part.sentences for line in wrapped(sentence, "- ")]
        lines += _text_table(part)
    lines += ["", *heading("Caution"), *(line for caution in CAUTIONS for line in wrapped(caution, "- "))]
    return "\n".join(line.rstrip() for line in lines)


def _text_table(part: Part) -> list[str]:
    """Rows under wrapped headings; a table that is too wide is cut into several, each with the first column."""
    if not part.rows:
        return []
    first = min(max(len(row[0]) for row in [part.columns, *part.rows]), 32)
    widths = [max(7, *(len(word) for word in part.columns[k].split()), *(len(row[k]) for row in part.rows))
              for k in range(1, len(part.columns))]
    lines, start = [], 0
    while start < len(widths):
        end, used = start, first
        while end < len(widths) and (end == start or used + 2 + widths[end] <= WIDTH):
            used += 2 + widths[end]
            end += 1
        lines += _block(part, first, widths, start, end)
        start = end
    return lines


def _block(part: Part, first: int, widths: list[int], start: int, end: int) -> list[str]:
    heads = [textwrap.wrap(part.columns[k + 1], widths[k]) or [""] for k in range(start, end)]
    depth = max(len(head) for head in heads)
    lines = []
    for level in range(depth):
        cells = [(head[level - depth + len(head)] if level >= depth - len(head) else "") for head in heads]
        lead = part.columns[0] if level == depth - 1 else ""
        lines.append(_line(lead, first, cells, widths[start:end]))
    for row in part.rows:
        lead, *more = textwrap.wrap(row[0], first, subsequent_indent="  ") or [""]
        lines.append(_line(lead, first, row[start + 1:end + 1], widths[start:end]))
        lines += more
    return lines


def _line(lead: str, first: int, cells: Sequence[str], widths: Sequence[int]) -> str:
    return f"{lead:<{first}}" + "".join(f"  {cell:>{width}}" for cell, width in zip(cells, widths, strict=True))


