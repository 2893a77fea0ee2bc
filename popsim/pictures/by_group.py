"""Attainment by group and protocol, with intervals, and beside it the difference in the same patients."""

from __future__ import annotations

from pathlib import Path

import pandas as pd
from matplotlib.axes import Axes

from popsim.drawing import FAINT, INK, MARGIN, RULE, WIDTH, Page, plain, share_axis, strokes, text_width, wrapped
from popsim.headlines import attainment_headline, has_headline, rows_where, spans_zero
from popsim.pictures.shown import INTERVALS_SAY, Picture, Shown, finish, group_label, head, told_by_group
from popsim.tables import FEW_PATIENTS
from popsim.words import percent, points

GROUP_WIDTH, DIFFERENCE_WIDTH = 2.05, 2.1
STEP = 0.235
VALUE_SIZE = 8.5


def by_group(shown: Shown, path: Path) -> Picture:
    """Dots with intervals, groups down the side; beside them the paired difference where there are two protocols."""
    run, groups, paired = shown.run, _sorted(shown), len(shown.protocols) == 2
    title = attainment_headline(run, shown.comparison, shown.attainment)
    width = WIDTH - 2 * MARGIN - GROUP_WIDTH - (DIFFERENCE_WIDTH if paired else 0.1)
    named = _names_fit(shown, width)
    page = Page()
    head(page, title, f"Share of patients who attain the target. {shown.about}")
    if not named and len(shown.protocols) > 1:
        page.key(shown.protocols)
    if paired:
        _difference_header(page, shown)
    names = {group: wrapped(group_label(run, group), GROUP_WIDTH - 0.2, 9, most_lines=3) for group in groups}
    heights = {group: max(STEP * len(shown.protocols), 0.175 * (len(names[group]) + 1)) + 0.2 for group in names}
    left, total = MARGIN + GROUP_WIDTH, sum(heights.values())
    axes = page.axes(left, page.top, width, total)
    share_axis(axes.xaxis)
    axes.set(xlim=(0, 1), ylim=(total, 0), yticks=[])
    axes.set_xlabel("Patients who attain the target (%)")
    axes.grid(axis="x")
    axes.spines["left"].set_visible(False)
    place = 0.0
    for group in groups:
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
    return finish(page, path, title, _told_by_group(shown), f"Bars: {INTERVALS_SAY}{_order_said(shown)}",
                  "Dots: share of patients who attain the target. ")


def _sorted(shown: Shown) -> list[str]:
    """All patients, then the groups from the most to the fewest who attain; those without a result last."""
    def place(group: str) -> float:
        row = shown.row(group, shown.protocols[0])
        return -row.attained if has_headline(row) else 1.0

    return ["all", *sorted(shown.run.group_names[1:], key=place)]


def _order_said(shown: Shown) -> str:
    if len(shown.run.group_names) < 3:
        return ""
    of = f' with "{shown.protocols[0]}"' if len(shown.protocols) > 1 else ""
    return f" Groups from the most to the fewest who attain the target{of}."


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
    said = told_by_group(shown, lambda row: f"{percent(row.attained)} % ({percent(row.attained_low)} to "
                                            f"{percent(row.attained_high)})")
    return f"Dots with intervals on a scale from 0 to 100 % of patients who attain the target. {said}."
