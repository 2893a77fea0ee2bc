"""Probability of target attainment against the minimum inhibitory concentration (MIC), a panel for each group."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
from matplotlib.axes import Axes

from popsim.drawing import FAINT, MARGIN, RULE, Page, label_spots, plain, share_axis, strokes, wrapped
from popsim.finished import FinishedModel, FinishedRun
from popsim.headlines import NO_HEADLINE, has_headline, rows_where
from popsim.pictures.shown import INTERVALS_SAY, ROOM, Picture, finish, group_label, head
from popsim.words import percent

WANTED = 0.9  # the share below which a MIC is usually called out of reach; common practice
COLUMNS, AXIS_ROOM, GAP, HEIGHT = 2, 0.6, 0.22, 1.9
LABEL_SIZE = 8.5


def mic(run: FinishedRun, model: FinishedModel, family: str, rows: pd.DataFrame, path: Path) -> Picture:
    """A line for each protocol over log2 of the MIC, the isolates' distribution behind it where the run has one.

    rows  the attainment rows of this model whose targets are `family` at one MIC each (column mic, mg/L)
    """
    title, isolates = _title(run, rows), _isolates(run, rows)
    page = Page()
    head(page, title, f"Share of patients who attain the target at each MIC. Target: {family}. Model: {model.name}.")
    columns = min(COLUMNS, len(run.group_names))
    width = (ROOM - 0.08 - (columns - 1) * GAP) / columns - AXIS_ROOM
    everyone = _lines(run, rows_where(rows, group="all"))
    spots = label_spots({plain(run.protocols[index]): (np.log2(line["mic"].to_numpy()), line["attained"].to_numpy())
                         for index, line in everyone.items()}, LABEL_SIZE, width, HEIGHT) if len(everyone) > 1 else {}
    if spots is None:
        page.key(run.protocols)
    for first in range(0, len(run.group_names), columns):
        page.top += 0.26
        for column, group in enumerate(run.group_names[first:first + columns]):
            left = MARGIN + AXIS_ROOM + column * (width + AXIS_ROOM + GAP)
            axes = page.axes(left, page.top, width, HEIGHT)
            page.text(left, page.top - 0.24, wrapped(group_label(run, group), width, 9, "bold", 1)[0], 9, weight="bold")
            _panel(axes, run, rows_where(rows, group=group), isolates)
            for name, (at, share) in (spots or {}).items() if group == "all" else ():
                axes.text(2**at, share, name, fontsize=LABEL_SIZE, ha="center", va="center", zorder=5,
                          bbox={"facecolor": "white", "edgecolor": "none", "pad": 1.2})
        page.top += HEIGHT + 0.52
    foot = f"Bands: {INTERVALS_SAY} Dotted line: {percent(WANTED, 0)} %, common practice."
    foot += " Grey bars: share of the isolates with each MIC." if isolates else ""
    return finish(page, path, title, f"Lines that fall as the MIC rises. {title}.", foot)


def _isolates(run: FinishedRun, rows: pd.DataFrame) -> dict[float, float]:
    """MIC -> share of the isolates that have it; empty where the study gives no distribution."""
    weights = {target.name: target.mic.weight for target in run.targets if getattr(target, "mic", None)}
    found = {mic: weights[name] for name, mic in zip(rows["target"], rows["mic"], strict=True)}
    return found if all(weight is not None and np.isfinite(weight) for weight in found.values()) else {}


def _lines(run: FinishedRun, rows: pd.DataFrame) -> dict[int, pd.DataFrame]:
    """Protocol's place -> its rows, ascending by MIC, those without a result left out."""
    fine = rows[[has_headline(row) for row in rows.itertuples()]]
    lines = [rows_where(fine, protocol=protocol).sort_values("mic") for protocol in run.protocols]
    return {index: line for index, line in enumerate(lines) if len(line)}


def _panel(axes: Axes, run: FinishedRun, rows: pd.DataFrame, isolates: dict[float, float]) -> None:
    values = sorted(rows["mic"].unique())
    axes.set_xscale("log", base=2)
    axes.set(xlim=(values[0] / 1.5, values[-1] * 1.5), ylim=(0, 1))
    axes.set_xticks(values, [f"{value:g}" for value in values])
    axes.set_xticks([], minor=True)
    share_axis(axes.yaxis)
    axes.grid(axis="y")
    axes.set_xlabel("MIC (mg/L)", labelpad=2)
    axes.set_ylabel("Patients (%)", fontsize=8.5, labelpad=3)
    axes.axhline(WANTED, color=FAINT, linewidth=0.9, linestyle=(0, (1, 2)))
    for value, share in isolates.items():
        axes.bar(value / 2**0.3, share, width=value * (2**0.3 - 2**-0.3), align="edge", color=RULE, linewidth=0,
                 zorder=0)
    for index, line in _lines(run, rows).items():
        look = strokes(index)
        axes.fill_between(line["mic"], line["attained_low"], line["attained_high"], color=look.colour, alpha=0.22,
                          linewidth=0)
        axes.plot(line["mic"], line["attained"], color=look.colour, linestyle=look.dash, marker=look.marker,
                  markersize=4, clip_on=False, zorder=3)


def _title(run: FinishedRun, rows: pd.DataFrame) -> str:
    """Up to which MIC the wanted share is reached, all patients."""
    said = []
    for index, line in _lines(run, rows_where(rows, group="all")).items():
        reached = np.cumprod(line["attained"].to_numpy() >= WANTED).sum()
        with_it = f' with "{run.protocols[index]}"' if len(run.protocols) > 1 else ""
        said.append(f"up to {line['mic'].iloc[reached - 1]:g} mg/L{with_it}" if reached else f"at no MIC{with_it}")
    if not said:
        return NO_HEADLINE
    shown = said if len(said) < 4 else [*said[:3], "..."]
    return f"{percent(WANTED, 0)} % or more of all patients attain the target {', '.join(shown)}"
