"""What `popsim find size` tells."""

from __future__ import annotations

import numpy as np

from popsim.finding.answer import (
    AGAINST_WRITTEN, Answer, Part, attained_text, by_group, fresh_heading, group_table, notes, quoted_group,
    short_share,
)  # fmt: skip
from popsim.finding.counting import Counts, fresh
from popsim.finding.size import AGE_CLASSES, BMI_CLASSES, FEWEST, FIXED, PRACTICAL, SizeFound
from popsim.words import percent, points, sides_line, size_words


def size_answer(found: SizeFound, confirmed: Counts) -> Answer:
    asked, counts = found.asked, found.counts
    names = [said(name) for name in found.measures]
    classes = [g for g, name in enumerate(counts.groups) if name in BMI_CLASSES | AGE_CLASSES and counts.n[g]]
    parts = [
        Part("Answer", _sentences(found)),
        Part("Measures by rank (flatness over BMI classes and ages, then the worst class or group)", [
            "Every measure gives the reference adult the same dose; another level may suit another measure better "
            "(popsim find dose). Spans: largest minus smallest attainment over the classes. Classes of fewer than "
            f"{FEWEST} patients do not count. Ward: what a ward can work out."], *_ranking(found, names)),
        Part("Where each measure leaves people under and over", [_sides(found)], *_misses(found, names, classes)),
        Part("Share attained (%) by class", [], *group_table(counts, names, "dosed by"), report_only=True),
        Part(f"{fresh_heading(asked, confirmed)}: {AGAINST_WRITTEN}", [],
             *group_table(confirmed, [said(name) for name in confirmed.names], "dosed by", 0)),
        Part("Note", notes(asked, counts)),
    ]
    leads = [{"rank": rank, "measure": name, "doses": found.doses[rank - 1], "practical": name in PRACTICAL,
              "flatness": found.flatness[rank - 1], "worst": found.worst[rank - 1],
              "worst_group": counts.groups[found.worst_group[rank - 1]]}
             for rank, name in enumerate(found.measures, 1)]
    table = by_group(asked, counts, leads, 0)
    table["turned_over"] = found.turned_over.ravel()
    fresh_table = by_group(asked, confirmed, [{"measure": name} for name in confirmed.names], 0)
    return Answer(asked, parts, {"sizes": table, "confirm": fresh_table},
                  {"searched": "size", "protocol": found.protocol.name, "ranked": found.measures,
                   "practical": [found.measures[place] for place in found.practical],
                   "fresh_seed": fresh(asked.base).seed})


def said(name: str) -> str:
    """A measure in words."""
    return "fixed, the same for everyone" if name == FIXED else size_words(name)


def _first(name: str) -> str:
    """A measure at the start of a sentence."""
    return said(name)[0].upper() + said(name)[1:]


def _sentences(found: SizeFound) -> list[str]:
    counts = found.counts

    def told(place: int) -> str:
        group = found.worst_group[place]
        return (f"{said(found.measures[place])} ({found.doses[place]}): "
                f"{attained_text(counts, place, 0)} of all attain; over the classes of body mass index and age "
                f"attainment moves by {points(found.flatness[place])[1:]} points, and is lowest in "
                f"{quoted_group(counts.groups[group])} with {attained_text(counts, place, group)}")

    lines = [f"Flattest: by {told(0)}."]
    practical = found.practical
    if practical and practical[0] != 0:
        lines.append(f"Of what a ward can use (total, ideal, adjusted, lean, fixed): by {told(practical[0])}.")
    if "weight" in found.measures and 0 != (place := found.measures.index("weight")):
        difference = counts.difference(place, 0, 0)
        lines.append(f"Total body weight ranks {place + 1} of {len(found.measures)}: {told(place)}. In the same "
                     f"patients {said(found.measures[0])} differs by {points(difference[0])} points "
                     f"({points(difference[1])} to {points(difference[2])}).")
    for name, (many, falls) in found.left_out.items():
        lines.append(f"{_first(name)} is left out: it cannot dose {many:,} patients (zero, negative or "
                     f"unknown). {_turned(counts, falls)}".rstrip())
    lines += [f"{_first(name)}: {_turned(counts, falls)}"
              for name, falls in zip(found.measures, found.turned_over, strict=True) if falls[0] > 0]
    return lines


def _turned(counts: Counts, falls: np.ndarray) -> str:
    """Where a measure falls while weight rises."""
    if falls[0] == 0:
        return ""
    most = int(np.argmax(falls))
    return (f"It has turned over (it falls while weight rises) in {percent(falls[0])} % of all patients, "
            f"{percent(falls[most])} % in {quoted_group(counts.groups[most])}: there it under-doses the heaviest.")


def _sides(found: SizeFound) -> str:
    sides = sides_line(found.asked.target, found.asked.base.models[0])
    meaning = f" ({sides})" if sides else " (below: under-dosed; above: over-dosed)"
    return f"Mean share of the window below and above the range, in the class where each is largest{meaning}."


def _ranking(found: SizeFound, names: list[str]) -> tuple[list[str], list[list[str]]]:
    counts, (share, low, high) = found.counts, found.counts.attained()
    columns = ["dosed by", "attained, all (%)", "spans (points)", "worst (%)", "in", "ward"]
    return columns, [[f"{place + 1} {name}", short_share(share[place, 0], low[place, 0], high[place, 0]),
                      f"{100 * found.flatness[place]:.1f}", percent(found.worst[place]),
                      counts.groups[found.worst_group[place]], "yes" if found.measures[place] in PRACTICAL else "no"]
                     for place, name in enumerate(names)]


def _misses(found: SizeFound, names: list[str], classes: list[int]) -> tuple[list[str], list[list[str]]]:
    counts = found.counts
    below, above = counts.mean_share("below"), counts.mean_share("above")
    rows = []
    for place, name in enumerate(names):
        cells = [name]
        for side in (below, above):
            most = max(classes, key=lambda g, side=side, place=place: side[place, g])
            cells += [percent(side[place, most]), counts.groups[most]]
        rows.append([*cells, percent(found.turned_over[place, 0])])
    return ["dosed by", "time below (%)", "most in", "time above (%)", "most in", "turned over (%)"], rows
