"""What every picture shares: the rows it shows, its heading, its words for those who cannot see it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path

import numpy as np
import pandas as pd
from matplotlib.axes import Axes

from covariates.units import UNITS, to_unit
from popsim.drawing import FAINT, MARGIN, SHADE, WIDTH, Page, save, wrapped
from popsim.finished import FinishedModel, FinishedRun
from popsim.headlines import has_headline, rows_where
from popsim.study_records import Target
from popsim.words import clock, sides_line, target_line, window

INTERVALS_SAY = "95 % simulation intervals: the luck of drawing patients. They say nothing about the model's error."
ROOM = WIDTH - 2 * MARGIN
MOST_POINTS = 600


@dataclass(frozen=True)
class Picture:
    """One picture of a run. `title` states the finding, `alternative_text` tells what is to be seen."""

    file_name: str
    title: str
    alternative_text: str
    caption: str


@dataclass(frozen=True)
class Shown:
    """What one picture is about, with the rows of the tables that belong to it."""

    run: FinishedRun
    model: FinishedModel
    target: Target

    def rows(self, table: str) -> pd.DataFrame:
        """The rows of a table that belong to this model and target; none where the run left no such table."""
        found = self.run.tables.get(table)
        return pd.DataFrame() if found is None else rows_where(found, model=self.model.name, target=self.target.name)

    @cached_property
    def attainment(self) -> pd.DataFrame:
        return self.rows("attainment")

    @cached_property
    def over_time(self) -> pd.DataFrame:
        return self.rows("over_time")

    @cached_property
    def comparison(self) -> pd.DataFrame:
        return self.rows("comparison")

    @property
    def protocols(self) -> tuple[str, ...]:
        return self.run.protocols

    def row(self, group: str, protocol: str) -> pd.Series:
        return rows_where(self.attainment, group=group, protocol=protocol).iloc[0]

    def course(self, group: str, protocol: str) -> pd.DataFrame:
        """The over-time rows of one group and protocol; none where too many failed to show a result."""
        rows = rows_where(self.over_time, group=group, protocol=protocol)
        return rows if has_headline(self.row(group, protocol)) else rows.iloc[:0]

    @property
    def about(self) -> str:
        sides = sides_line(self.target, self.model)
        return f"Target: {target_line(self.target)}{f' ({sides})' if sides else ''}. Model: {self.model.name}."


def head(page: Page, title: str, what: str) -> None:
    """The finding, and what is drawn."""
    page.lines(wrapped(title, ROOM, 12.5, "bold"), 12.5, weight="bold")
    page.top += 0.04
    page.lines(wrapped(what, ROOM, 9), 9, color=FAINT)
    page.top += 0.08


def finish(page: Page, path: Path, title: str, alternative_text: str, foot: str, lead: str = "") -> Picture:
    """Write the foot and the file; `lead` goes before the foot in the caption only."""
    page.lines(wrapped(foot, ROOM, 8), 8, color=FAINT)
    save(page, path, title, alternative_text)
    return Picture(path.name, title, alternative_text, f"{lead}{foot}")


def thinned(course: pd.DataFrame) -> pd.DataFrame:
    """The rows of a course, fewer where the grid is finer than can be seen; the last one is always kept."""
    return course.iloc[np.unique(np.append(np.arange(0, len(course), -(-len(course) // MOST_POINTS)), len(course) - 1))]


def group_label(run: FinishedRun, group: str) -> str:
    if group == "all":
        return "all patients"
    return f"{group} (reference)" if group == run.reference else group


def told_by_group(shown: Shown, number: Callable[[pd.Series], str]) -> str:
    """Group by group, what a number is with each protocol, for those who cannot see the picture."""
    parts = []
    for group in shown.run.group_names:
        rows = [(protocol, shown.row(group, protocol)) for protocol in shown.protocols]
        said = [f"{protocol} {number(row) if has_headline(row) else row.note}" for protocol, row in rows]
        parts.append(f"{group_label(shown.run, group)}: {', '.join(said)}")
    return "; ".join(parts)


def quantity_shown(shown: Shown) -> tuple[str, str]:
    """Name and unit of the quantity whose percentiles over_time.csv holds, as the study writes them."""
    target = shown.target
    if target.quantity == "effect" and shown.model.effect is not None:
        return shown.model.effect.name, shown.model.effect.unit
    if target.quantity == "response":
        return "Probability of response", ""
    unbound = "Unbound plasma" if target.quantity.startswith("unbound") else "Plasma"
    name = "Effect site" if target.quantity == "effect_site" else unbound
    return name, target.unit if target.unit in UNITS["concentration"] else "mg/L"


def scale_shown(shown: Shown) -> float:
    """What a value of over_time.csv is multiplied by to be in the unit of `quantity_shown`."""
    _, unit = quantity_shown(shown)
    return to_unit(1.0, unit, "concentration") if unit in UNITS["concentration"] else 1.0


def no_result(axes: Axes, shown: Shown, group: str, protocols: list[str], width: float) -> None:
    """In place of what cannot be shown, why not."""
    empty = shown.row(group, protocols[0]).patients == 0
    reason = "no patients" if empty else f"no headline (over 1 % failed or undosed): {', '.join(protocols)}"
    axes.text(0.5, 0.5, "\n".join(wrapped(reason, width - 0.2, 8, most_lines=4)), transform=axes.transAxes, ha="center",
              va="center", fontsize=8, color=FAINT, bbox={"facecolor": "white", "edgecolor": "none", "pad": 2})


def fixed_window(target: Target) -> bool:
    """Whether the window is the same for every patient."""
    return not at_steady_state(target) and not isinstance(target.start, str) and not isinstance(target.end, str)


def at_steady_state(target: Target) -> bool:
    return getattr(target, "steady", False)


def mark_window(axes: Axes, target: Target) -> None:
    """The target's window shaded, or its instant dotted, with its times above."""
    if not fixed_window(target):
        return
    if target.instant:
        axes.axvline(target.start, color=FAINT, linewidth=1, linestyle=(0, (2, 2)))
    else:
        axes.axvspan(target.start, target.end, facecolor=SHADE, edgecolor="none", zorder=0)
    name_window(axes, target, 3)


def name_window(axes: Axes, target: Target, lift: float) -> None:
    """The window's times above the axes, `lift` points higher, at its start or against the right edge."""
    right = target.start > axes.get_xlim()[1] * 0.75
    axes.annotate(f"{'judged' if target.instant else 'window'} {window(target)}", (target.start, 1),
                  xycoords=axes.get_xaxis_transform(), xytext=(-1 if right else 1, lift), textcoords="offset points",
                  fontsize=7.5, color=FAINT, ha="right" if right else "left")


def window_said(target: Target, mark: str = "Grey") -> str:
    if at_steady_state(target):
        return "The target is judged at steady state, which these courses may not have reached."
    if not fixed_window(target):
        return f"The target's window ({window(target)}) differs between patients and is not marked."
    if target.instant:
        return f"Dotted line: the moment the target is judged, {clock(target.start)}."
    return f"{mark}: the target's window, {window(target)}."
