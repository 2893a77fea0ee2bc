"""Share of patients in range over time, a panel for each group."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from matplotlib.axes import Axes

from popsim.drawing import MARGIN, WIDTH, Page, label_spots, plain, share_axis, strokes, time_axis, wrapped
from popsim.estimate import wilson
from popsim.finished import FinishedRun
from popsim.headlines import range_headline
from popsim.pictures.shown import (
    INTERVALS_SAY, Picture, Shown, finish, group_label, head, mark_window, no_result, thinned, told_by_group,
    window_said,
)  # fmt: skip
from popsim.words import clock, percent, window

AXIS_ROOM, PANEL_HEIGHT, PANEL_GAP = 0.6, 1.75, 0.22
LABEL_SIZE = 8.5


def over_time(shown: Shown, path: Path) -> Picture:
    """One small panel for each group, one line with its band for each protocol, the target's window shaded."""
    run, groups = shown.run, shown.run.group_names
    columns = {1: 1, 2: 2, 4: 2}.get(len(groups), 3)
    title = range_headline(run, shown.comparison, shown.attainment, shown.target)
    page = Page()
    head(page, title, f"Share of patients in range at each moment, one panel for each group. {shown.about}")
    width = (WIDTH - 2 * MARGIN - 0.08 - (columns - 1) * PANEL_GAP) / columns - AXIS_ROOM
    lines = {group: _lines(shown, group) for group in groups}
    spots = {}
    if len(shown.protocols) > 1:
        curves = {plain(shown.protocols[index]): (time, share) for index, (time, share, _, _) in lines["all"].items()}
        spots = label_spots(curves, LABEL_SIZE, width, PANEL_HEIGHT)
    if spots is None:
        page.key(shown.protocols)
    for first in range(0, len(groups), columns):
        names = [wrapped(group_label(run, group), width, 9, "bold", 2) for group in groups[first:first + columns]]
        page.top += 0.16 * max(len(name) for name in names) + 0.22
        for column, group in enumerate(groups[first:first + columns]):
            left = MARGIN + column * (width + AXIS_ROOM + PANEL_GAP) + AXIS_ROOM
            axes = page.axes(left, page.top, width, PANEL_HEIGHT)
            for k, line in enumerate(reversed(names[column])):
                page.text(left, page.top - 0.22 - 0.16 * k, line, 9, weight="bold", va="bottom")
            _panel(axes, shown, lines[group], group)
            if group == "all":
                for name, (at, share) in (spots or {}).items():
                    axes.text(at, share, name, fontsize=LABEL_SIZE, ha="center", va="center",
                              bbox={"facecolor": "white", "edgecolor": "none", "pad": 1.2}, zorder=5)
        page.top += PANEL_HEIGHT + 0.5
    told = told_by_group(shown, lambda row: f"{percent(row.time_in_range)} %")
    return finish(page, path, title, f"Lines over time from 0 to {clock(run.until_min)}: share of patients in range, "
                  f"from 0 to 100 %. Mean over the window ({window(shown.target)}): {told}.",
                  f"{_bands_say(run)} {window_said(shown.target)}",
                  "Lines: share of patients in range at each moment. ")


def _bands_say(run: FinishedRun) -> str:
    if run.resampled:
        return "No interval bands: people of a list drawn again and again are no independent draws."
    return f"Bands: {INTERVALS_SAY}"


def _lines(shown: Shown, group: str) -> dict[int, tuple[np.ndarray, ...]]:
    """Protocol's place -> (time_min, share, low, high)."""
    lines = {}
    for index, protocol in enumerate(shown.protocols):
        course, row = shown.course(group, protocol), shown.row(group, protocol)
        if course.empty:
            continue
        course = thinned(course)
        time, share, solved = course["time_min"].to_numpy(), course["in_range"].to_numpy(), row.patients - row.failed
        low, high = wilson(np.rint(share * solved), np.full(len(time), 0 if shown.run.resampled else solved))
        lines[index] = (time, share, low, high)
    return lines


def _panel(axes: Axes, shown: Shown, lines: dict[int, tuple[np.ndarray, ...]], group: str) -> None:
    time_axis(axes, shown.run.until_min)
    share_axis(axes.yaxis)
    axes.set(ylim=(0, 1))
    axes.set_ylabel("Patients in range (%)", fontsize=8.5, labelpad=3)
    axes.grid(axis="y")
    mark_window(axes, shown.target)
    for index, (time, share, low, high) in lines.items():
        look = strokes(index)
        axes.fill_between(time, low, high, color=look.colour, alpha=0.22, linewidth=0)
        every = max(len(time) // 6, 1)
        axes.plot(time, share, color=look.colour, linestyle=look.dash, marker=look.marker, markersize=4,
                  markevery=(every * (index + 1) // (len(shown.protocols) + 1), every), markeredgecolor="white",
                  markeredgewidth=0.5, clip_on=False, zorder=3)
    missing = [protocol for index, protocol in enumerate(shown.protocols) if index not in lines]
    if missing:
        no_result(axes, shown, group, missing, axes.get_position().width * WIDTH)
