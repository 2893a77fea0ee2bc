"""The pictures of a run, for each model and target: attainment by group and protocol, and share in range over time."""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
from matplotlib.axes import Axes

from covariates.sheet import DrugModel
from popsim.drawing import (
    FAINT, INK, MARGIN, RULE, SHADE, WIDTH, Page, house_style, label_spots, plain, save, share_axis, strokes,
    text_width, time_axis, wrapped,
)  # fmt: skip
from popsim.estimate import wilson
from popsim.headlines import attainment_headline, has_headline, range_headline, rows_where, spans_zero
from popsim.records import Study, Target
from popsim.tables import FEW_PATIENTS
from popsim.words import clock, percent, points, sides_line, target_line, window

INTERVALS_SAY = "95 % simulation intervals: the luck of drawing patients. They say nothing about the model's error."
MOST_POINTS = 600


@dataclass(frozen=True)
class Picture:
    """One SVG file of a run. `title` states the finding, `alternative_text` tells what is to be seen."""

    file_name: str
    title: str
    alternative_text: str
    caption: str


@dataclass(frozen=True)
class Shown:
    """What one picture is about, with the rows of the tables that belong to it."""

    study: Study
    model: DrugModel
    target: Target
    attainment: pd.DataFrame
    over_time: pd.DataFrame
    comparison: pd.DataFrame

    @property
    def protocols(self) -> list[str]:
        return [protocol.name for protocol in self.study.protocols]

    def row(self, group: str, protocol: str) -> pd.Series:
        return rows_where(self.attainment, group=group, protocol=protocol).iloc[0]

    def head(self, page: Page, title: str, what: str) -> None:
        """The finding, what is drawn, of which target, under which model."""
        room = WIDTH - 2 * MARGIN
        page.lines(wrapped(title, room, 12.5, "bold"), 12.5, weight="bold")
        page.top += 0.04
        page.lines(wrapped(f"{what}. {self.about}", room, 9), 9, color=FAINT)
        page.top += 0.08

    @property
    def about(self) -> str:
        sides = sides_line(self.target, self.model)
        return f"Target: {target_line(self.target)}{f' ({sides})' if sides else ''}. Model: {self.model.name}."


def draw_all(study: Study, tables: dict[str, pd.DataFrame], folder: Path) -> list[Picture]:
    """Draw every picture of a run into `folder` and tell what was drawn, in the order of a report."""
    pictures, endings = [], _endings(study)
    with house_style():
        for model in study.models:
            for target in study.targets:
                shown = Shown(study, model, target, *(
                    rows_where(tables[name], model=model.name, target=target.name)
                    for name in ("attainment", "over_time", "comparison")))
                ending = endings[model.name, target.name]
                pictures.append(_by_group(shown, folder / f"attainment_by_group{ending}.svg"))
                if target.over_time and not target.summary:
                    pictures.append(_over_time(shown, folder / f"attainment_over_time{ending}.svg"))
    return pictures


def _endings(study: Study) -> dict[tuple[str, str], str]:
    """What tells the file names apart: nothing where there is one model and target, else their names made safe."""
    endings: dict[tuple[str, str], str] = {}
    for model in study.models:
        for target in study.targets:
            parts = [model.name] * (len(study.models) > 1) + [target.name] * (len(study.targets) > 1)
            words = "".join("_" + re.sub(r"[^a-z0-9]+", "_", part.lower()).strip("_")[:60] for part in parts)
            same = sum(re.sub(r"__\d+$", "", ending) == words for ending in endings.values())
            endings[model.name, target.name] = f"{words}__{same + 1}" if same else words
    return endings


# ------------------------------------------------------------------------------- attainment by group and protocol

GROUP_WIDTH, DIFFERENCE_WIDTH = 2.05, 2.1
STEP = 0.235
VALUE_SIZE = 8.5


def _by_group(shown: Shown, path: Path) -> Picture:
    """Dots with intervals, groups down the side; beside them the paired difference where there are two protocols."""
    study, paired = shown.study, len(shown.protocols) == 2
    title = attainment_headline(study, shown.comparison, shown.attainment)
    width = WIDTH - 2 * MARGIN - GROUP_WIDTH - (DIFFERENCE_WIDTH if paired else 0.1)
    named = _names_fit(shown, width)
    page = Page()
    shown.head(page, title, "Share of patients who attain the target")
    if not named and len(shown.protocols) > 1:
        page.key(shown.protocols)
    if paired:
        _difference_header(page, shown)
    names = {group: wrapped(_group_label(study, group), GROUP_WIDTH - 0.2, 9, most_lines=3)
             for group in study.group_names}
    heights = {group: max(STEP * len(shown.protocols), 0.175 * (len(names[group]) + 1)) + 0.2 for group in names}
    left, total = MARGIN + GROUP_WIDTH, sum(heights.values())
    axes = page.axes(left, page.top, width, total)
    share_axis(axes.xaxis)
    axes.set(xlim=(0, 1), ylim=(total, 0), yticks=[])
    axes.set_xlabel("Patients who attain the target (%)")
    axes.grid(axis="x")
    axes.spines["left"].set_visible(False)
    place = 0.0
    for group in study.group_names:
        middle = place + heights[group] / 2
        _group_name(page, names[group], page.top + middle, int(shown.row(group, shown.protocols[0]).patients))
        first = named and group == "all"
        for index, protocol in enumerate(shown.protocols):
            at = middle + (index - (len(shown.protocols) - 1) / 2) * STEP
            _dot(axes, shown.row(group, protocol), at, index, protocol if first else "", width)
        if paired:
            _difference(page, shown, group, left + width + 0.2, page.top + middle)
        place += heights[group]
        if place < total - 1e-9:
            axes.axhline(place, color=RULE, linewidth=0.6)
    page.top += total + 0.48
    page.lines(wrapped(f"Bars: {INTERVALS_SAY}", WIDTH - 2 * MARGIN, 8), 8, color=FAINT)
    caption = f"Dots: share of patients who attain the target. Bars: {INTERVALS_SAY}"
    save(page, path, title, told := _told_by_group(shown))
    return Picture(path.name, title, told, caption)


def _group_label(study: Study, group: str) -> str:
    if group == "all":
        return "all patients"
    return f"{group} (reference)" if group == study.reference else group


def _group_name(page: Page, lines: list[str], middle: float, patients: int) -> None:
    top = middle - 0.175 * (len(lines) + 1) / 2
    few = f" (under {FEW_PATIENTS})" if patients < FEW_PATIENTS else ""
    for index, line in enumerate([*lines, f"{patients:,} patients{few}"]):
        last = index == len(lines)
        page.text(MARGIN, top + 0.175 * index, line, 8 if last else 9, color=FAINT if last else INK)


def _value_text(row: pd.Series, name: str) -> str:
    return plain(f"{name}  {percent(row.attained)} %" if name else f"{percent(row.attained)} %")


def _fits(row: pd.Series, text: str, width: float) -> tuple[bool, bool]:
    """Whether the text has room to the right and to the left of the interval."""
    needs = (text_width(text, VALUE_SIZE) + 0.1) / width
    return row.attained_high + needs <= 1, row.attained_low - needs >= 0


def _names_fit(shown: Shown, width: float) -> bool:
    """Whether every protocol's name has room beside its dot in the group "all"; else a key says who is who."""
    rows = [shown.row("all", protocol) for protocol in shown.protocols]
    return len(rows) > 1 and all(has_headline(row) and any(_fits(row, _value_text(row, row.protocol), width))
                                 for row in rows)


def _dot(axes: Axes, row: pd.Series, at: float, index: int, name: str, width: float) -> None:
    look = strokes(index)
    if not has_headline(row):
        reason = "no patients" if row.patients == 0 else f"no headline: {int(row.failed)} patients failed or undosed"
        axes.text(0.01, at, reason, fontsize=8, color=FAINT, va="center_baseline")
        return
    axes.plot([row.attained_low, row.attained_high], [at, at], color=look.colour, linewidth=2.2, clip_on=False,
              solid_capstyle="butt")
    axes.plot([row.attained], [at], color=look.colour, marker=look.marker, markersize=5.5, markeredgewidth=0,
              clip_on=False)
    text = _value_text(row, name)
    right, left = _fits(row, text, width)
    beside = 0.09 / width
    if right or not left:
        axes.text(row.attained_high + beside, at, text, fontsize=VALUE_SIZE, va="center_baseline")
    else:
        axes.text(row.attained_low - beside, at, text, fontsize=VALUE_SIZE, va="center_baseline", ha="right")


def _difference_header(page: Page, shown: Shown) -> None:
    a, b = shown.protocols
    lines = wrapped(f"{b} minus {a}, same patients (percentage points)", DIFFERENCE_WIDTH - 0.2, 8, most_lines=5)
    for line in lines:
        page.text(WIDTH - MARGIN - DIFFERENCE_WIDTH + 0.2, page.top, line, 8, color=FAINT)
        page.top += 0.155
    page.top += 0.05


def _difference(page: Page, shown: Shown, group: str, left: float, middle: float) -> None:
    pair = rows_where(shown.comparison, group=group).iloc[0]
    if not all(has_headline(shown.row(group, protocol)) for protocol in shown.protocols):
        page.text(left, middle, "none given", 8, color=FAINT, va="center_baseline")
        return
    said = _pair_said(pair)
    page.text(left, middle - (0.085 if said else 0), f"{points(pair.difference)}  ({points(pair.difference_low)} to "
              f"{points(pair.difference_high)})", 9, va="center_baseline", weight="bold")
    if said:
        page.text(left, middle + 0.095, wrapped(said, DIFFERENCE_WIDTH - 0.2, 8, most_lines=1)[0], 8,
                  color=FAINT, va="center_baseline")


def _pair_said(pair: pd.Series) -> str:
    """The verdict of `[compare] matters`, in the words of the sentences; without that key only whether zero is in."""
    if pair.verdict == "better":
        return f"better: {pair.better}"
    if pair.verdict == "too small to matter":
        return pair.verdict
    if spans_zero(pair):
        return "no clear difference"
    return "not clear whether it matters" if pair.verdict else ""


def _told_by_group(shown: Shown) -> str:
    said = _told(shown, lambda row: f"{percent(row.attained)} % ({percent(row.attained_low)} to "
                                    f"{percent(row.attained_high)})")
    return f"Dots with intervals on a scale from 0 to 100 % of patients who attain the target. {said}."


def _told(shown: Shown, number: Callable[[pd.Series], str]) -> str:
    """Group by group, what a number is with each protocol, for those who cannot see the picture."""
    parts = []
    for group in shown.study.group_names:
        rows = [(protocol, shown.row(group, protocol)) for protocol in shown.protocols]
        said = [f"{protocol} {number(row) if has_headline(row) else row.note}" for protocol, row in rows]
        parts.append(f"{_group_label(shown.study, group)}: {', '.join(said)}")
    return "; ".join(parts)


# ------------------------------------------------------------------------------------ share in range over time

AXIS_ROOM, PANEL_HEIGHT, PANEL_GAP = 0.6, 1.75, 0.22
LABEL_SIZE = 8.5


def _over_time(shown: Shown, path: Path) -> Picture:
    """One small panel for each group, one line with its band for each protocol, the target's window shaded."""
    study, groups = shown.study, shown.study.group_names
    columns = {1: 1, 2: 2, 4: 2}.get(len(groups), 3)
    title = range_headline(study, shown.comparison, shown.attainment, shown.target)
    page = Page()
    shown.head(page, title, "Share of patients in range at each moment, one panel for each group")
    width = (WIDTH - 2 * MARGIN - 0.08 - (columns - 1) * PANEL_GAP) / columns - AXIS_ROOM
    lines = {group: _lines(shown, group) for group in groups}
    spots = {}
    if len(shown.protocols) > 1:
        curves = {plain(shown.protocols[index]): (time, share) for index, (time, share, _, _) in lines["all"].items()}
        spots = label_spots(curves, LABEL_SIZE, width, PANEL_HEIGHT)
    if spots is None:
        page.key(shown.protocols)
    for first in range(0, len(groups), columns):
        names = [wrapped(_group_label(study, group), width, 9, "bold", 2) for group in groups[first:first + columns]]
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
    foot = f"Bands: {INTERVALS_SAY} {_window_said(shown.target)}"
    page.lines(wrapped(foot, WIDTH - 2 * MARGIN, 8), 8, color=FAINT)
    save(page, path, title, told := _told_over_time(shown))
    return Picture(path.name, title, told, f"Lines: share of patients in range at each moment. {foot}")


def _lines(shown: Shown, group: str) -> dict[int, tuple[np.ndarray, ...]]:
    """Protocol's place -> (time_min, share, low, high), thinned where the grid is finer than can be seen."""
    lines = {}
    for index, protocol in enumerate(shown.protocols):
        row = shown.row(group, protocol)
        if not has_headline(row):
            continue
        course = rows_where(shown.over_time, group=group, protocol=protocol)
        time, share = course["time_min"].to_numpy(), course["in_range"].to_numpy()
        kept = np.unique(np.append(np.arange(0, len(time), -(-len(time) // MOST_POINTS)), len(time) - 1))
        solved = int(row.patients) - int(row.failed)
        low, high = wilson(np.rint(share[kept] * solved), np.full(len(kept), solved))
        lines[index] = (time[kept], share[kept], low, high)
    return lines


def _panel(axes: Axes, shown: Shown, lines: dict[int, tuple[np.ndarray, ...]], group: str) -> None:
    time_axis(axes, shown.study.until_min)
    share_axis(axes.yaxis)
    axes.set(ylim=(0, 1))
    axes.set_ylabel("Patients in range (%)", fontsize=8.5, labelpad=3)
    axes.grid(axis="y")
    _shade(axes, shown.target)
    for index, (time, share, low, high) in lines.items():
        look = strokes(index)
        axes.fill_between(time, low, high, color=look.colour, alpha=0.22, linewidth=0)
        every = max(len(time) // 6, 1)
        axes.plot(time, share, color=look.colour, linestyle=look.dash, marker=look.marker, markersize=4,
                  markevery=(every * (index + 1) // (len(shown.protocols) + 1), every), markeredgecolor="white",
                  markeredgewidth=0.5, clip_on=False, zorder=3)
    missing = [protocol for index, protocol in enumerate(shown.protocols) if index not in lines]
    if missing:
        empty = shown.row(group, missing[0]).patients == 0
        reason = "no patients" if empty else f"no headline (over 1 % failed or undosed): {', '.join(missing)}"
        shown_reason = "\n".join(wrapped(reason, axes.get_position().width * WIDTH - 0.2, 8, most_lines=4))
        axes.text(0.5, 0.5, shown_reason, transform=axes.transAxes, ha="center", va="center", fontsize=8, color=FAINT,
                  bbox={"facecolor": "white", "edgecolor": "none", "pad": 2})


def _shade(axes: Axes, target: Target) -> None:
    if target.steady or isinstance(target.start, str) or isinstance(target.end, str):
        return
    if target.instant:
        axes.axvline(target.start, color=FAINT, linewidth=1, linestyle=(0, (2, 2)))
    else:
        axes.axvspan(target.start, target.end, facecolor=SHADE, edgecolor="none", zorder=0)
    right = target.start > axes.get_xlim()[1] * 0.75
    axes.annotate(f"{'judged' if target.instant else 'window'} {window(target)}", (target.start, 1),
                  xycoords=axes.get_xaxis_transform(), xytext=(-1 if right else 1, 3), textcoords="offset points",
                  fontsize=7.5, color=FAINT, ha="right" if right else "left")


def _window_said(target: Target) -> str:
    if target.steady:
        return "The target is judged at steady state, which these courses may not have reached."
    if isinstance(target.start, str) or isinstance(target.end, str):
        return f"The target's window ({window(target)}) differs between patients and is not shaded."
    if target.instant:
        return f"Dotted line: the moment the target is judged, {clock(target.start)}."
    return f"Grey: the target's window, {window(target)}."


def _told_over_time(shown: Shown) -> str:
    said = _told(shown, lambda row: f"{percent(row.time_in_range)} %")
    return (f"Lines over time from 0 to {clock(shown.study.until_min)}: share of patients in range, from 0 to 100 %. "
            f"Mean over the window ({window(shown.target)}): {said}.")
