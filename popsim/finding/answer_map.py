"""What `popsim find map` tells."""

from __future__ import annotations

import math
from collections.abc import Iterable

import pandas as pd

from popsim.estimate import wilson
from popsim.finding.answer import Answer, Part, notes, share_text
from popsim.finding.counting import Counts, fresh, fresh_line
from popsim.finding.map import FEWEST, SEXES, Axis, MapFound, Region
from popsim.words import percent, unit_of

PEOPLE = {"female": "women", "male": "men", "": "people"}


def map_answer(found: MapFound) -> Answer:
    asked = found.asked
    counts = found.counts
    patients, whole = int(counts.n[0]), (values[0, 0] for values in counts.attained())
    parts = [
        Part("Answer", [f'Under "{found.protocol.name}" {share_text(*whole)} of '
                        f"{patients:,} patients attain the target.", *_sentences(found)]),
        *(Part(f"{PEOPLE[sex].capitalize()}: share attained (%), and how many patients", [], *table)
          for sex in SEXES if (table := _table(found, sex))[1]),
        Part("Note", ["Regions are found in one set of patients and their shares told from another: "
                      f"{fresh_line(asked.base, patients)}.", *_clustered(counts), *notes(asked, counts)]),
    ]
    return Answer(asked, parts, {"map": map_frame(found), "regions": _region_frame(found)},
                  {"searched": "map", "protocol": found.protocol.name, "across": found.across.name,
                   "up": found.up.name, "level": found.level,
                   "regions": [region_text(found, one) for one in found.regions],
                   "fresh_seed": fresh(asked.base).seed})


def _clustered(counts: Counts) -> list[str]:
    if counts.origins is None:
        return []
    return ["The list's people are drawn again and again: intervals of cells and regions count draws, not people, and "
            "are too narrow."]


def _sentences(found: MapFound) -> list[str]:
    if not found.regions:
        return [f"No region with 1 % of a sex and {FEWEST} patients or more lies clearly below "
                f"{percent(found.level, 0)} %."]
    lines = []
    for region in found.regions:
        clear = region.fresh_high < found.level
        share = share_text(region.fresh_attained, region.fresh_low, region.fresh_high)
        lines.append(f"B{region_text(found, region)[1:]}: {share} of "
                     f"{region.fresh_patients:,} fresh patients{'' if clear else ', so not clear there'}.")
    return lines


def region_text(found: MapFound, region: Region) -> str:
    """"below 80 % in women of weight 118 kg and over and age 70 years and over"."""
    level = f"below {percent(found.level, 0)} %"
    where = " and ".join(part for part in (_side(found.across, region.across), _side(found.up, region.up)) if part)
    return f"{level} in {PEOPLE[region.sex]}{' of ' + where if where else ' everywhere'}"


def _side(axis: Axis, limits: tuple[float, float]) -> str:
    """"weight 118 kg and over"; empty where the axis does not matter."""
    unit = f" {unit_of(axis.name)}" if unit_of(axis.name) else ""
    name = axis.name.replace("_", " ")
    if math.isfinite(limits[0]):
        return f"{name} {limits[0]:g}{unit} and over"
    return f"{name} under {limits[1]:g}{unit}" if math.isfinite(limits[1]) else ""


def map_frame(found: MapFound) -> pd.DataFrame:
    """One row per sex and cell with patients; lower edge inside, upper edge outside."""
    rows = []
    for sex, i, j, n, hits, failed in found.cells:
        low, high = wilson(hits, n)
        rows.append({"sex": SEXES[sex], **_edges(found.across, i), **_edges(found.up, j), "patients": n,
                     "failed": failed, "attained": hits / n, "attained_low": float(low), "attained_high": float(high)})
    return pd.DataFrame(rows)


def _edges(axis: Axis, cell: int) -> dict[str, float]:
    return {f"{axis.name}_from": cell * axis.width, f"{axis.name}_below": (cell + 1) * axis.width}


def _region_frame(found: MapFound) -> pd.DataFrame:
    columns = ["sex", f"{found.across.name}_from", f"{found.across.name}_below", f"{found.up.name}_from",
               f"{found.up.name}_below", "level", "patients", "attained", "fresh_patients", "fresh_attained",
               "fresh_attained_low", "fresh_attained_high"]
    rows = [[one.sex, *_finite((*one.across, *one.up)), found.level, one.patients, one.attained, one.fresh_patients,
             one.fresh_attained, one.fresh_low, one.fresh_high] for one in found.regions]
    return pd.DataFrame(rows, columns=columns)


def _finite(values: Iterable[float]) -> list[float]:
    """Open sides are empty cells."""
    return [value if math.isfinite(value) else math.nan for value in values]


def _table(found: MapFound, sex: str) -> tuple[list[str], list[list[str]]]:
    """Rows up, columns across: "84 (230)"."""
    mine = {(i, j): (n, hits) for s, i, j, n, hits, _ in found.cells.tolist() if SEXES[s] == sex}
    if not mine:
        return [], []
    across = sorted({i for i, _ in mine})
    up = sorted({j for _, j in mine}, reverse=True)
    unit = unit_of(found.across.name)
    columns = [found.up.name.replace("_", " "), *(f"{i * found.across.width:g} {unit}".strip() for i in across)]
    rows = []
    for j in up:
        cells = [mine.get((i, j)) for i in across]
        rows.append([f"{j * found.up.width:g} to {(j + 1) * found.up.width:g}",
                     *("" if cell is None else f"{percent(cell[1] / cell[0], 0)} ({cell[0]})" for cell in cells)])
    return columns, rows
