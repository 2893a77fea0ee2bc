"""Attainment over age and total weight: a cell for each, with the share of its own patients."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.colors import LinearSegmentedColormap
from matplotlib.patches import Rectangle

from popsim.drawing import FAINT, MARGIN, RULE, Page, wrapped
from popsim.headlines import rows_where
from popsim.pictures.shown import ROOM, Picture, Shown, finish, head

FEW_IN_CELL = 50
MOST_OUTSIDE = 0.5
SHADES = LinearSegmentedColormap.from_list("attained", ["#f2f6fa", "#6aaed6", "#08415c"])  # darker and darker in grey
HATCH = "#a6a6a6"
DARK = 0.725  # above it letters are white, below it black: each stands out at least 4.5 to 1
COLUMNS, GAP, AXIS_ROOM, CELL_HEIGHT = 2, 0.3, 0.62, 0.2


def age_weight(shown: Shown, path: Path) -> Picture:
    """A map for each protocol, on the same axes and shades."""
    cells = shown.rows("attainment_map")
    title = _title(cells, shown)
    page = Page()
    head(page, title, f"Share of each cell's patients who attain the target (%), by age and total body weight. "
         f"{shown.about}")
    ages, weights = (sorted({*cells[f"{name}_from"]}) for name in ("age", "weight"))
    width = (ROOM - COLUMNS * AXIS_ROOM - GAP) / COLUMNS
    height = CELL_HEIGHT * len(weights)
    for first in range(0, len(shown.protocols), COLUMNS):
        line = shown.protocols[first:first + COLUMNS]
        if len(shown.protocols) > 1:
            for column, protocol in enumerate(line):
                page.text(MARGIN + AXIS_ROOM + column * (width + GAP + AXIS_ROOM), page.top,
                          wrapped(protocol, width, 9, "bold", 1)[0], 9, weight="bold")
            page.top += 0.24
        for column, protocol in enumerate(line):
            axes = page.axes(MARGIN + AXIS_ROOM + column * (width + GAP + AXIS_ROOM), page.top, width, height)
            _map(axes, rows_where(cells, protocol=protocol), ages, weights)
        page.top += height + 0.58
    foot = (f"Number and shade: patients of the cell who attain the target, %. Faded: fewer than {FEW_IN_CELL} "
            f"patients. Hatched: at least half of the cell's patients lie outside the people the model was built on. "
            f"Empty: no patients. Counts and intervals: attainment_map.csv.")
    return finish(page, path, title, f"A table of cells, age by weight, shaded by attainment. {title}.", foot)


def _map(axes: Axes, cells: pd.DataFrame, ages: list[float], weights: list[float]) -> None:
    for cell in cells.itertuples():
        _cell(axes, cell, ages.index(cell.age_from), weights.index(cell.weight_from))
    axes.set(xlim=(0, len(ages)), ylim=(0, len(weights)))
    axes.set_xticks([k + 0.5 for k in range(len(ages))], [_span(cells, "age", start) for start in ages], fontsize=7.5)
    axes.set_yticks([k + 0.5 for k in range(len(weights))], [_span(cells, "weight", start) for start in weights],
                    fontsize=7.5)
    axes.tick_params(length=0, pad=3)
    axes.set_xlabel("Age (years)", fontsize=8.5, labelpad=3)
    axes.set_ylabel("Total body weight (kg)", fontsize=8.5, labelpad=3)
    for side in axes.spines.values():
        side.set_visible(False)


def _cell(axes: Axes, cell, i: int, j: int) -> None:
    few = cell.patients < FEW_IN_CELL
    outside = cell.outside_model >= MOST_OUTSIDE
    colour = "white" if few else SHADES(cell.attained)
    dark = not few and cell.attained > DARK
    axes.add_patch(Rectangle((i, j), 1, 1, facecolor=colour, edgecolor="white" if dark else HATCH,
                             hatch="////" if outside else None, linewidth=0))
    axes.add_patch(Rectangle((i, j), 1, 1, facecolor="none", edgecolor=RULE if few else "white", linewidth=0.8))
    axes.text(i + 0.5, j + 0.48, f"{100 * cell.attained:.0f}", fontsize=7.5, ha="center", va="center_baseline",
              color="white" if dark else FAINT if few else "black",
              bbox={"facecolor": colour, "edgecolor": "none", "pad": 0.8} if outside else None)


def _span(cells: pd.DataFrame, name: str, start: float) -> str:
    ends = cells.loc[cells[f"{name}_from"] == start, f"{name}_to"]
    return f"{start:g}+" if np.isinf(ends.iloc[0]) else f"{start:g}-{ends.iloc[0]:g}"


def _title(cells: pd.DataFrame, shown: Shown) -> str:
    enough = cells[cells["patients"] >= FEW_IN_CELL]
    if enough.empty:
        return f"No cell of age and weight holds {FEW_IN_CELL} patients"
    least, most = (enough.loc[place] for place in (enough["attained"].idxmin(), enough["attained"].idxmax()))
    return f"Attained by age and weight: from {_said(least, shown)} to {_said(most, shown)}"


def _said(cell: pd.Series, shown: Shown) -> str:
    ages, weights = (f"{cell[f'{name}_from']:g} to {cell[f'{name}_to']:g}" if np.isfinite(cell[f"{name}_to"])
                     else f"{cell[f'{name}_from']:g} and more" for name in ("age", "weight"))
    of = f', "{cell.protocol}"' if len(shown.protocols) > 1 else ""
    return f"{100 * cell.attained:.0f} % ({ages} years, {weights} kg{of})"
