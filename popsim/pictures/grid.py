"""Small panels on one scale: a column for each group, a row for each protocol."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from matplotlib.axes import Axes

from popsim.drawing import MARGIN, Page, time_axis, wrapped
from popsim.pictures.shown import ROOM, Shown, group_label

MOST_COLUMNS = 4
AXIS_ROOM, GAP, HEIGHT = 0.68, 0.2, 1.2
ROW_NAME, WINDOW_NAME = 0.2, 0.14  # the window is named above the first row only


@dataclass(frozen=True)
class Panel:
    """One group and protocol; `width` and `height` of its axes in inches."""

    group: str
    protocol: str
    axes: Axes
    width: float
    height: float


def panels(page: Page, shown: Shown, y_label: str) -> Iterator[Panel]:
    """Every panel, its time axis drawn; the value axis is written on the left one of each row. Moves `page.top`."""
    groups, until = shown.run.group_names, shown.run.until_min
    columns = min(MOST_COLUMNS, len(groups))
    width = (ROOM - AXIS_ROOM - 0.08 - GAP * (columns - 1)) / columns
    for first in range(0, len(groups), columns):
        row_of_groups = groups[first:first + columns]
        names = [wrapped(group_label(shown.run, group), width - 0.05, 9, "bold", 2) for group in row_of_groups]
        for column, lines in enumerate(names):
            left = MARGIN + AXIS_ROOM + column * (width + GAP)
            for k, line in enumerate(lines):
                page.text(left, page.top + 0.16 * (k + max(map(len, names)) - len(lines)), line, 9, weight="bold")
        page.top += 0.16 * max(map(len, names)) + 0.04
        for protocol in shown.protocols:
            if len(shown.protocols) > 1:
                page.text(MARGIN, page.top, wrapped(protocol, ROOM, 8.5, most_lines=1)[0], 8.5)
            page.top += ROW_NAME + (WINDOW_NAME if protocol == shown.protocols[0] else 0)
            for column, group in enumerate(row_of_groups):
                axes = page.axes(MARGIN + AXIS_ROOM + column * (width + GAP), page.top, width, HEIGHT)
                time_axis(axes, until)
                if protocol != shown.protocols[-1]:
                    axes.set_xlabel("")
                    axes.tick_params(labelbottom=False)
                yield Panel(group, protocol, axes, width, HEIGHT)
                if column:
                    axes.tick_params(labelleft=False)
                else:
                    axes.set_ylabel(y_label, fontsize=8, labelpad=3)
            page.top += HEIGHT + 0.12
        page.top += 0.42
