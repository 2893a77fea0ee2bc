"""Below, in and above the range over time: three shares of patients that fill each panel, by group and protocol."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from popsim.drawing import FAINT, INK, Page, share_axis, text_width
from popsim.headlines import sides_headline
from popsim.pictures.grid import Panel, panels
from popsim.pictures.shown import (
    Picture, Shown, finish, fixed_window, head, name_window, no_result, thinned, told_by_group, window_said,
)  # fmt: skip
from popsim.words import clock, percent, window

# From the bottom up, as concentrations lie: pale, dark and middling, so that grey print tells them apart too.
SIDES = {"below": ("#dbe8f2", INK), "in_range": ("#0072B2", "white"), "above": ("#e9a978", INK)}
LABELS = {"below": "below", "in_range": "in range", "above": "above"}
LABEL_SIZE = 8


def sides(shown: Shown, path: Path) -> Picture:
    """How many patients are on which side of the range at each moment."""
    title = sides_headline(shown.attainment, shown.target)
    page = Page()
    head(page, title, f"Share of patients below (at the bottom), in and above the range at each moment. {shown.about}")
    for panel in panels(page, shown, "Patients (%)"):
        _draw(panel, shown)
    told = told_by_group(shown, lambda row: f"{percent(row.time_below)}, {percent(row.time_in_range)} and "
                                            f"{percent(row.time_above)} %")
    return finish(page, path, title, f"Three bands over time from 0 to {clock(shown.run.until_min)}. Mean share of the "
                  f"window ({window(shown.target)}) below, in and above range: {told}.",
                  f"Pale band: below; dark band: in range; middle tone at the top: above. "
                  f"{window_said(shown.target, 'Line on top')}")


def _draw(panel: Panel, shown: Shown) -> None:
    axes = panel.axes
    share_axis(axes.yaxis)
    axes.set(ylim=(0, 1))
    course = shown.course(panel.group, panel.protocol)
    if course.empty:
        no_result(axes, shown, panel.group, [panel.protocol], panel.width)
        return
    course = thinned(course)
    time, floor = course["time_min"].to_numpy(), np.zeros(len(course))
    for side, (colour, ink) in SIDES.items():
        ceiling = floor + course[side].to_numpy()
        axes.fill_between(time, floor, ceiling, facecolor=colour, edgecolor="white", linewidth=0.6)
        spot = _spot(time, floor, ceiling, LABELS[side], panel)
        if spot is not None:
            axes.text(*spot, LABELS[side], fontsize=LABEL_SIZE, color=ink, ha="center", va="center")
        floor = ceiling
    _window_line(panel, shown)


def _spot(time: np.ndarray, floor: np.ndarray, ceiling: np.ndarray, text: str,
          panel: Panel) -> tuple[float, float] | None:
    """Where the text fits inside a band with the most room, or None."""
    half = (text_width(text, LABEL_SIZE) / 2 + 0.04) / panel.width * (time[-1] - time[0])
    best = None
    for k in np.flatnonzero((time - half >= time[0]) & (time + half <= time[-1])):
        span = np.abs(time - time[k]) <= half
        low, high = floor[span].max(), ceiling[span].min()
        if high - low > 1.5 * LABEL_SIZE / 72 / panel.height and (best is None or high - low > best[0]):
            best = high - low, (float(time[k]), float(low + high) / 2)
    return best and best[1]


def _window_line(panel: Panel, shown: Shown) -> None:
    """The window as a line above the panel: inside, the bands hide a shade."""
    target, axes = shown.target, panel.axes
    if not fixed_window(target):
        return
    if target.instant:
        axes.axvline(target.start, color=INK, linewidth=1, linestyle=(0, (2, 2)))
    else:
        axes.plot([target.start, target.end], [1.035, 1.035], color=FAINT, linewidth=2.5, clip_on=False,
                  transform=axes.get_xaxis_transform(), solid_capstyle="butt")
    if panel.protocol == shown.protocols[0]:
        name_window(axes, target, 6)
