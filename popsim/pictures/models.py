"""Agreement between published models: attainment under each, in the same patients under the same protocols."""

from __future__ import annotations

from pathlib import Path

import pandas as pd
from matplotlib.axes import Axes

from popsim.drawing import FAINT, INK, MARGIN, RULE, Page, share_axis, strokes, wrapped
from popsim.finished import FinishedRun
from popsim.headlines import NO_HEADLINE, has_headline, rows_where
from popsim.pictures.shown import INTERVALS_SAY, ROOM, Picture, finish, group_label, head
from popsim.study_records import Target
from popsim.words import percent, target_line

NAME_WIDTH, SPREAD_WIDTH, STEP = 3.0, 1.25, 0.3


def models(run: FinishedRun, target: Target, path: Path) -> Picture:
    """A line for each group and protocol from the model with the fewest to the one with the most who attain."""
    rows = rows_where(run.tables["attainment"], target=target.name)
    title, page = _title(run, rows), Page()
    names = [model.name for model in run.models]
    head(page, title, f"Share of patients who attain the target under each published model. Target: "
         f"{target_line(target)}.")
    page.key(names)
    lines = [(group, protocol) for group in run.group_names for protocol in run.protocols]
    left, width = MARGIN + NAME_WIDTH, ROOM - NAME_WIDTH - SPREAD_WIDTH
    page.text(left + width + 0.2, page.top, "spread (points)", 8, color=FAINT)
    page.top += 0.2
    axes = page.axes(left, page.top, width, STEP * len(lines))
    share_axis(axes.xaxis)
    axes.set(xlim=(0, 1), ylim=(STEP * len(lines), 0), yticks=[])
    axes.set_xlabel("Patients who attain the target (%)")
    axes.grid(axis="x")
    axes.spines["left"].set_visible(False)
    for number, (group, protocol) in enumerate(lines):
        at = STEP * (number + 0.5)
        middle = page.top + at
        label = group_label(run, group) + (f", {protocol}" if len(run.protocols) > 1 else "")
        page.text(MARGIN, middle, wrapped(label, NAME_WIDTH - 0.15, 8.5, most_lines=1)[0], 8.5, va="center_baseline")
        found = rows_where(rows, group=group, protocol=protocol)
        _line(axes, found, at)
        page.text(left + width + 0.2, middle, _spread(found) or "not all give a result", 8.5 if _spread(found) else 7.5,
                  va="center_baseline", color=INK if _spread(found) else FAINT)
        if number and protocol == run.protocols[0]:
            axes.axhline(STEP * number, color=RULE, linewidth=0.6)
    page.top += STEP * len(lines) + 0.48
    told = "; ".join(f"{group_label(run, group)}, {protocol}: " + ", ".join(
        f"{row.model} {percent(row.attained) if has_headline(row) else '-'} %"
        for row in rows_where(rows, group=group, protocol=protocol).itertuples()) for group, protocol in lines)
    return finish(page, path, title, f"One dot for each model on a scale from 0 to 100 %. {told}.",
                  f"Grey line: from the lowest to the highest model. Bars: {INTERVALS_SAY} The spread between models "
                  f"says more, and still not all.")


def _line(axes: Axes, rows: pd.DataFrame, at: float) -> None:
    shown = [(index, row) for index, row in enumerate(rows.itertuples()) if has_headline(row)]
    if not shown:
        return
    shares = [row.attained for _, row in shown]
    axes.plot([min(shares), max(shares)], [at, at], color=RULE, linewidth=5, solid_capstyle="butt", zorder=1)
    for index, row in shown:
        look = strokes(index)
        axes.plot([row.attained_low, row.attained_high], [at, at], color=look.colour, linewidth=1.8, clip_on=False,
                  solid_capstyle="butt", zorder=2)
        axes.plot([row.attained], [at], color=look.colour, marker=look.marker, markersize=6, markeredgecolor="white",
                  markeredgewidth=0.5, clip_on=False, zorder=3)


def _spread(rows: pd.DataFrame) -> str:
    """Points between the lowest and the highest model; empty where one has no result."""
    if not all(has_headline(row) for row in rows.itertuples()):
        return ""
    return f"{100 * (rows['attained'].max() - rows['attained'].min()):.1f}"


def _title(run: FinishedRun, rows: pd.DataFrame) -> str:
    everyone = rows_where(rows, group="all")
    spreads = {protocol: _spread(rows_where(everyone, protocol=protocol)) for protocol in run.protocols}
    if not all(spreads.values()):
        return NO_HEADLINE
    if len(spreads) > 3:
        sizes = sorted(spreads.values(), key=float)
        said = f"{sizes[0]} to {sizes[-1]} points, by protocol"
    else:
        said = ", ".join(f"{size} points" + (f' with "{name}"' if len(spreads) > 1 else "")
                         for name, size in spreads.items())
    return f"{len(run.models)} published models lie apart by {said}, of all patients"
