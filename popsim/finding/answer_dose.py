"""What `popsim find dose` tells."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from covariates.units import to_unit
from popsim.finding.answer import (
    AGAINST_WRITTEN, Answer, Part, attained_text, by_group, fresh_heading, group_table, notes, quoted_group, share_text,
    wish_sentence,
)  # fmt: skip
from popsim.finding.counting import Counts, fresh, fresh_line
from popsim.finding.dose import DoseFound, label
from popsim.words import percent


def dose_answer(found: DoseFound, whys: list[str], confirmed: list[tuple[str, Counts]]) -> Answer:
    """`whys` and `confirmed` are what `dose.confirm` returns."""
    asked, counts = found.asked, found.counts
    model, fresh_counts = confirmed[0]
    names = [f"{name} ({why})" for name, why in zip(fresh_counts.names, whys, strict=True)]
    names[0] = fresh_counts.names[0]
    columns, rows = group_table(fresh_counts, names, "attained (%)", 0)
    parts = [
        Part("Answer", [*_sentences(found), *_confirmed(found, fresh_counts)]),
        Part("Along the doses: share attained, mean time below and above of all (%)", [], *_along(found)),
        Part(f"{fresh_heading(asked, fresh_counts)}: {AGAINST_WRITTEN}",
             [line for p, name in enumerate(fresh_counts.names)
              if (line := wish_sentence(asked, fresh_counts, p, f"With {name}"))], columns, rows),
        *(Part(f"The same under {other}", [], *group_table(of, names, "attained (%)", 0))
          for other, of in confirmed[1:]),
        Part("Note", notes(asked, counts)),
    ]
    leads = [_lead(found, place) for place in range(len(found.points))]
    confirm_table = [by_group(asked, of, [{"model": name, "what": why, "protocol": protocol} for why, protocol in
                                          zip(whys, of.names, strict=True)], 0) for name, of in confirmed]
    tables = {"along": by_group(asked, counts, leads), "confirm": pd.concat(confirm_table, ignore_index=True)}
    return Answer(asked, parts, tables,
                  _numbers(found))


def _lead(found: DoseFound, place: int) -> dict[str, Any]:
    """The values tried, as numbers in the unit of the range."""
    lead: dict[str, Any] = {"tried": label(found.points[place])}
    for number, (one, value) in enumerate(zip(found.varied, found.points[place], strict=True), 1):
        lead |= {f"what_{number}": one.place.text, f"value_{number}": to_unit(value.value, one.unit, one.kind),
                 f"unit_{number}": one.unit}
    return lead


def _sentences(found: DoseFound) -> list[str]:
    counts = found.counts
    share = counts.attained()[0]
    what = " and ".join(one.place.text for one in found.varied)
    lines = [f'Varied in "{found.protocol.name}": {what}, '
             f"{' and '.join(f'{one.values[0].text} to {one.values[-1].text}' for one in found.varied)}."]
    best = found.best_overall
    line = f"Best overall: {label(found.points[best])}: {attained_text(counts, best, 0)} attain"
    first, last = found.as_good
    if first < last:
        line += (f"; the dose that is truly best lies between {label(found.points[first])} and "
                 f"{label(found.points[last])} (95 %)")
    lines.append(f"{line}.{_at_the_edge(found, best)}")
    worst, place = found.worst(), found.best_worst
    group = _worst_group(counts, place)
    lines.append(f"Best for the worst group: {label(found.points[place])}: "
                 f"{attained_text(counts, place, group)} attain in {quoted_group(counts.groups[group])}, "
                 f"{percent(share[place, 0])} % of all.{_at_the_edge(found, place)}")
    return lines + _wishes(found, worst)


def _confirmed(found: DoseFound, fresh_counts: Counts) -> list[str]:
    """What became of the proposal in fresh patients: of the dose that meets the wishes, else of the nearest, else of
    the one that is best for the worst group."""
    place = next(one for one in (found.chosen, found.nearest, found.best_worst) if one is not None)
    p = fresh_counts.names.index(label(found.points[place]))
    group = _worst_group(fresh_counts, p)
    lines = [f"Confirmed in {fresh_line(found.asked.base, int(fresh_counts.n[0]))}: with {fresh_counts.names[p]} "
             f"{attained_text(fresh_counts, p, 0)} of all attain, {attained_text(fresh_counts, p, group)} in "
             f"{quoted_group(fresh_counts.groups[group])}."]
    return lines + ([wish_sentence(found.asked, fresh_counts, p, "There")] if found.held else [])


def _worst_group(counts: Counts, place: int) -> int:
    share = np.where(counts.n > 0, counts.attained()[0][place], np.inf)
    return int(np.argmin(share))


def _at_the_edge(found: DoseFound, place: int) -> str:
    edges = [one.place.text for one, value in zip(found.varied, found.points[place], strict=True)
             if value.text in (one.values[0].text, one.values[-1].text)]
    return f" It lies at the edge of what was tried ({', '.join(edges)}): widen the range." if edges else ""


def _wishes(found: DoseFound, worst: np.ndarray) -> list[str]:
    if not found.held:
        return []
    wished = "; ".join(one.wish.text for one in found.held)
    if found.chosen is None:
        near = found.nearest
        short = [f"{one.wish.text}: {share_text(one.share[near], one.low[near], one.high[near])} in "
                 f"{quoted_group(found.counts.groups[one.group[near]])}" for one in found.held if not one.met[near]]
        return [f"Wished: {wished}. No dose does; the nearest is {label(found.points[near])} "
                f"({'; '.join(short)})."]
    clear = np.flatnonzero(found.meets & np.all([one.clearly for one in found.held], axis=0))
    sure = "" if len(clear) else " None meets them beyond doubt: the intervals reach to the other side."
    if len(found.varied) == 1:
        parts = [f"from {label(found.points[one.first])} to {label(found.points[one.last])}"
                 + ("" if one.first > 0 and one.last < len(found.points) - 1 else " (the end of what was tried)")
                 for one in found.meeting]
        ranges = f"Met {' and '.join(parts)}"
        if len(clear):
            sure = f" Clearly met from {label(found.points[clear[0]])} to {label(found.points[clear[-1]])}."
    else:
        ranges = f"Met by {int(found.meets.sum())} of the {len(found.points)} combinations tried"
    return [f"Wished: {wished}. {ranges}; of these {label(found.points[found.chosen])} is best for the worst group "
            f"({percent(worst[found.chosen])} %).{sure}"]


def _along(found: DoseFound) -> tuple[list[str], list[list[str]]]:
    """A row for each dose of the grid, the refined ones left to the table file; two at once: the best ten."""
    counts, worst = found.counts, found.worst()
    if len(found.varied) == 1:
        texts = {value.text for value in found.varied[0].values}
        places = [place for place, point in enumerate(found.points) if point[0].text in texts]
        if len(places) > 25:
            places = places[::-(-len(places) // 25)]
    else:
        places = list(np.argsort(-worst, kind="stable")[:10])
    columns, rows = group_table(counts.taken(places), [label(found.points[place]) for place in places], "tried")
    below, above = counts.mean_share("below"), counts.mean_share("above")
    columns += ["time below", "time above"] + (["wishes"] if found.held else [])
    for place, row in zip(places, rows, strict=True):
        row += [percent(below[place, 0]), percent(above[place, 0])]
        row += [("met" if found.meets[place] else "no")] if found.held else []
    return columns, rows


def _numbers(found: DoseFound) -> dict[str, Any]:
    def said(place: int | None) -> str | None:
        return None if place is None else label(found.points[place])

    return {"searched": "dose", "protocol": found.protocol.name, "varied": [one.place.text for one in found.varied],
            "wishes": [one.wish.text for one in found.held], "tried": len(found.points),
            "best_overall": said(found.best_overall), "best_for_the_worst_group": said(found.best_worst),
            "best_overall_interval": [said(place) for place in found.as_good],
            "meeting": [[said(one.first), said(one.last)] for one in found.meeting],
            "chosen": said(found.chosen), "nearest": said(found.nearest), "fresh_seed": fresh(found.asked.base).seed}
