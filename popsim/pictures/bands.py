"""The course over time as bands of percentiles over patients, with the target as a box, by group and protocol."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
from matplotlib.patches import Rectangle

from popsim.drawing import INK, Page, strokes
from popsim.headlines import rows_where
from popsim.pictures.grid import Panel, panels
from popsim.pictures.shown import (
    Picture, Shown, finish, fixed_window, group_label, head, no_result, quantity_shown, scale_shown, thinned,
)  # fmt: skip
from popsim.words import clock

BANDS = (("p05", "p95", 0.2), ("p25", "p75", 0.38))


def bands(shown: Shown, path: Path) -> Picture:
    """Median, middle half and middle nine tenths of the patients at each moment, on one scale."""
    name, unit = quantity_shown(shown)
    page, top, courses = Page(), _top(shown), _courses(shown)
    head(page, _title(shown), f"{name} over time: percentiles over patients at each moment. {shown.about}")
    for panel in panels(page, shown, f"{name} ({unit})" if unit else name):
        panel.axes.set(ylim=(0, top))
        panel.axes.locator_params(axis="y", nbins=4)
        panel.axes.tick_params(axis="y", length=0, pad=4)
        _draw(panel, shown, courses)
    foot = ("Line: median; darker band: 25 to 75 %; pale band: 5 to 95 % of patients at each moment, not one patient's "
            f"course.{_box_said(shown)}")
    if courses is not None:
        foot += f" Thin lines among all patients: the first {courses['patient'].nunique()} patients themselves."
    told = f"Bands over time from 0 to {clock(shown.run.until_min)}. {_told(shown)}"
    return finish(page, path, _title(shown), told, foot)


def _draw(panel: Panel, shown: Shown, courses: pd.DataFrame | None) -> None:
    axes, scale = panel.axes, scale_shown(shown)
    look = strokes(shown.protocols.index(panel.protocol))
    course = shown.course(panel.group, panel.protocol)
    if course.empty:
        no_result(axes, shown, panel.group, [panel.protocol], panel.width)
        return
    course = thinned(course)
    time = course["time_min"].to_numpy()
    for low, high, alpha in BANDS:
        axes.fill_between(time, course[low] * scale, course[high] * scale, color=look.colour, alpha=alpha, linewidth=0)
    axes.plot(time, course["p50"] * scale, color=look.colour, linestyle=look.dash)
    if courses is not None and panel.group == "all":
        for _, rows in rows_where(courses, protocol=panel.protocol).groupby("patient"):
            axes.plot(rows["time_min"], rows["value"] * scale, color=INK, linewidth=0.5)
    if _boxed(shown):
        _box(panel, shown, scale)


def _boxed(shown: Shown) -> bool:
    """Whether the range can stand in the picture: it is one of the quantity drawn, in one window."""
    return shown.target.quantity in ("plasma", "unbound_plasma", "effect_site", "effect", "response") and \
        fixed_window(shown.target)


def _box(panel: Panel, shown: Shown, scale: float) -> None:
    target, (bottom, top) = shown.target, panel.axes.get_ylim()
    low, high = max(target.low * scale, bottom), min(target.high * scale, top)
    if target.instant:
        panel.axes.plot([target.start] * 2, [low, high], color=INK, linewidth=2.5, solid_capstyle="butt")
        return
    panel.axes.add_patch(Rectangle((target.start, low), target.end - target.start, high - low, facecolor="none",
                                   edgecolor=INK, linewidth=0.9, linestyle=(0, (4, 2)), zorder=4))


def _box_said(shown: Shown) -> str:
    if not _boxed(shown):
        return " The target's range is not one of this course in one window, and is not marked."
    return f" {'Upright bar' if shown.target.instant else 'Dashed box'}: the target's range in its window."


def _top(shown: Shown) -> float:
    """Upper end of the scale: above every band that is drawn, and above the range."""
    scale = scale_shown(shown)
    parts = [shown.course(group, protocol)["p95"] for group in shown.run.group_names for protocol in shown.protocols]
    highest = max((float(part.max()) for part in parts if len(part)), default=1.0)
    ends = [end for end in (shown.target.low, shown.target.high) if np.isfinite(end)] if _boxed(shown) else []
    return 1.06 * scale * max([highest, *ends]) or 1.0


def _courses(shown: Shown) -> pd.DataFrame | None:
    """The first few patients' courses of the quantity drawn, where the run kept them."""
    column = {"Plasma": "plasma", "Effect site": "effect_site"}.get(quantity_shown(shown)[0])
    column = "effect" if shown.target.quantity == "effect" else column
    if shown.run.courses is None or column is None:
        return None
    rows = rows_where(shown.run.courses, model=shown.model.name)
    return rows.assign(value=rows[column])


def _at_end(shown: Shown, group: str, protocol: str) -> str:
    """"5.2 (3.3 to 7.9)": median and 5 to 95 % at the window's end, or the run's where patients' windows differ."""
    course = shown.course(group, protocol)
    if course.empty:
        return "no result"
    row = course[course["time_min"] <= _end(shown) * (1 + 1e-12)].iloc[-1]
    low, median, high = (f"{row[name] * scale_shown(shown):.3g}" for name in ("p05", "p50", "p95"))
    return f"{median} ({low} to {high})"


def _end(shown: Shown) -> float:
    """The last moment of the grid within the window."""
    times = np.unique(shown.over_time["time_min"])
    end = shown.target.end if fixed_window(shown.target) else shown.run.until_min
    return float(times[times <= end * (1 + 1e-12)][-1])


def _title(shown: Shown) -> str:
    name, unit = quantity_shown(shown)
    several = len(shown.protocols) > 1
    kept = shown.protocols if len(shown.protocols) < 4 else (shown.protocols[0], shown.protocols[-1])
    said = "; ".join(_at_end(shown, "all", protocol) + (f' with "{protocol}"' if several else "") for protocol in kept)
    unit = f"{unit}, " if unit else ""
    return f"{name} at {clock(_end(shown))}, {unit}median (5 to 95 % of all patients): {said}"


def _told(shown: Shown) -> str:
    said = "; ".join(f"{group_label(shown.run, group)}: " + ", ".join(
        f"{protocol} {_at_end(shown, group, protocol)}" for protocol in shown.protocols)
        for group in shown.run.group_names)
    return f"Median, and 5 to 95 % of patients, at {clock(_end(shown))}: {said}."
