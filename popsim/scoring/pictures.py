"""The pictures of a score: accuracy by group and model, observed against predicted, and the visual predictive check."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.axis import Axis
from matplotlib.ticker import FuncFormatter, NullFormatter

from covariates.units import to_unit
from popsim.drawing import FAINT, INK, MARGIN, RULE, WIDTH, Page, house_style, save, strokes, time_axis, wrapped
from popsim.pictures.shown import Picture
from popsim.scoring.tables import Scored
from popsim.scoring.words import INTERVALS_SAY, answer, interval, number

LABEL_WIDTH, PANEL_GAP, STEP = 1.7, 0.3, 0.24
PANEL_HEIGHT, AXIS_ROOM = 2.1, 0.6
OBSERVED, SIMULATED = strokes(1).colour, strokes(0).colour


def draw_scores(scored: Scored, tables: dict[str, pd.DataFrame], folder: Path) -> list[Picture]:
    """Draw every picture of a score into `folder` and tell what was drawn."""
    with house_style():
        drawn = [_accuracy(scored, tables, folder / "score_accuracy.svg"),
                 _observed(scored, tables, folder / "score_predicted.svg")]
        if len(tables["score_check"]):
            drawn.append(_check(scored, tables, folder / "score_check.svg"))
    return drawn


def _head(page: Page, title: str, what: str) -> None:
    page.lines(wrapped(title, WIDTH - 2 * MARGIN, 12.5, "bold"), 12.5, weight="bold")
    page.top += 0.04
    page.lines(wrapped(what, WIDTH - 2 * MARGIN, 9), 9, color=FAINT)
    page.top += 0.08


def _foot(page: Page, text: str) -> None:
    page.lines(wrapped(text, WIDTH - 2 * MARGIN, 8), 8, color=FAINT)


def _accuracy(scored: Scored, tables: dict[str, pd.DataFrame], path: Path) -> Picture:
    """MDPE and MDAPE with intervals, groups down the side, one mark for each model."""
    page, title = Page(), answer(scored, tables, "all")
    names = [model.name for model in scored.models]
    _head(page, title, "Bias (MDPE) and inaccuracy (MDAPE) of each model in each group: medians over patients")
    page.key(names)
    rows = tables["scores"].query("phase == 'all'")
    step = STEP * len(names) + 0.25
    width = (WIDTH - 2 * MARGIN - LABEL_WIDTH - PANEL_GAP) / 2
    total = step * len(scored.group_names)
    for column, (measure, label) in enumerate((("mdpe_percent", "MDPE (%)"), ("mdape_percent", "MDAPE (%)"))):
        axes = page.axes(MARGIN + LABEL_WIDTH + column * (width + PANEL_GAP), page.top, width, total)
        axes.set(ylim=(total, 0), yticks=[])
        axes.set_xlabel(label)
        axes.grid(axis="x")
        axes.spines["left"].set_visible(False)
        axes.axvline(0, color=FAINT, linewidth=0.8)
        for g, group in enumerate(scored.group_names):
            for index, name in enumerate(names):
                row = next(rows.query("model == @name and group == @group").itertuples())
                _mark(axes, row, measure, g * step + step / 2 + (index - (len(names) - 1) / 2) * STEP, index)
    for g, group in enumerate(scored.group_names):
        count = int(rows.query("group == @group")["patients"].max())
        label = [*wrapped(group, LABEL_WIDTH - 0.2, 9, most_lines=2), f"{count} patients"]
        for k, line in enumerate(label):
            page.text(MARGIN, page.top + g * step + step / 2 + 0.16 * (k - len(label) / 2), line, 9,
                      color=FAINT if k == len(label) - 1 else INK)
    page.top += total + 0.5
    _foot(page, f"Bars: {INTERVALS_SAY}")
    told = "; ".join(f"{row.group}, {row.model}: MDPE {interval(row, 'mdpe_percent')}, MDAPE "
                     f"{interval(row, 'mdape_percent')} %" for row in rows.itertuples())
    save(page, path, title, f"Dots with intervals, zero marked. {told}.")
    return Picture(path.name, title, told, f"Dots: medians over patients. Bars: {INTERVALS_SAY}")


def _mark(axes: Axes, row, measure: str, at: float, index: int) -> None:
    look = strokes(index)
    low, high = getattr(row, f"{measure}_low"), getattr(row, f"{measure}_high")
    axes.plot([low, high], [at, at], color=look.colour, linewidth=2.2, solid_capstyle="butt")
    axes.plot([getattr(row, measure)], [at], color=look.colour, marker=look.marker, markersize=5.5, markeredgewidth=0)


def _panels(page: Page, names: list[str], sharing: Callable[[Axes, str], None]) -> None:
    """One panel for each model, its name above."""
    columns = min(len(names), 3)
    width = (WIDTH - 2 * MARGIN - (columns - 1) * PANEL_GAP) / columns - AXIS_ROOM
    for k, name in enumerate(names):
        if k % columns == 0:
            page.top += 0.24
        left = MARGIN + (k % columns) * (width + AXIS_ROOM + PANEL_GAP) + AXIS_ROOM
        page.text(left, page.top - 0.2, wrapped(name, width, 9, "bold", 1)[0], 9, weight="bold")
        sharing(page.axes(left, page.top, width, PANEL_HEIGHT), name)
        if k % columns == columns - 1 or k == len(names) - 1:
            page.top += PANEL_HEIGHT + 0.5


def _log(axis: Axis) -> None:
    """Powers of ten in plain digits."""
    axis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
    axis.set_minor_formatter(NullFormatter())


def _in_unit(values: pd.Series, unit: str) -> np.ndarray:
    return values.to_numpy() * to_unit(1.0, unit, "concentration")


def _observed(scored: Scored, tables: dict[str, pd.DataFrame], path: Path) -> Picture:
    """Measured against predicted, one panel for each model, logarithmic."""
    unit, table = scored.measured.unit, tables["score_predictions"]
    usable = table[(table["predicted"] > 0) & (table["measured"] > 0)]
    both = np.concatenate([_in_unit(usable[name], unit) for name in ("measured", "predicted")])
    low, high = (both.min() * 0.8, both.max() * 1.25) if len(both) else (0.1, 10.0)
    page, title = Page(), "Measured against predicted concentrations, model by model"
    _head(page, title, f"One dot a measurement ({unit}); on the line the two agree, dotted: half and twice")

    def draw(axes: Axes, name: str) -> None:
        part = usable[usable["model"] == name]
        axes.plot([low, high], [low, high], color=INK, linewidth=0.9)
        for factor in (0.5, 2.0):
            axes.plot([low, high], [low * factor, high * factor], color=FAINT, linewidth=0.8, linestyle=(0, (1, 2)))
        axes.scatter(_in_unit(part["predicted"], unit), _in_unit(part["measured"], unit), s=7, color=SIMULATED,
                     alpha=0.35, linewidth=0, rasterized=len(part) > 5000)
        axes.set(xscale="log", yscale="log", xlim=(low, high), ylim=(low, high))
        _log(axes.xaxis)
        _log(axes.yaxis)
        axes.set_xlabel(f"Predicted ({unit})", fontsize=8.5)
        axes.set_ylabel(f"Measured ({unit})", fontsize=8.5)
        axes.grid(color=RULE)

    _panels(page, [model.name for model in scored.models], draw)
    left_out = len(table) - len(usable)
    _foot(page, "Predicted: for the typical patient with the same covariates and doses."
          + (f" {left_out} points where one of the two is zero are not drawn." if left_out else ""))
    said = "; ".join(f"{row.model}: MDPE {number(row.mdpe_percent)} %, MDAPE {number(row.mdape_percent)} %"
                     for row in tables["scores"].query("group == 'all' and phase == 'all'").itertuples())
    save(page, path, title, f"Scatter of measured on predicted concentration, one panel for each model. {said}.")
    return Picture(path.name, title, said, "Dots: measurements against the typical prediction.")


def _check(scored: Scored, tables: dict[str, pd.DataFrame], path: Path) -> Picture:
    """Observed percentiles over time, and where simulated ones lie."""
    unit, table = scored.measured.unit, tables["score_check"]
    held = (table["observed"] >= table["simulated_low"]) & (table["observed"] <= table["simulated_high"])
    said = "; ".join(f"{name}: {int(part.sum())} of {len(part)} measured percentiles inside their band"
                     for name, part in held.groupby(table["model"], sort=False))
    page, title = Page(), f"Where simulated patients lie: {said}"
    _head(page, title, f"5th, 50th and 95th percentile over time ({unit}, corrected for the predicted level). Lines: "
                       "measured. Bands: where the same percentiles lie in 95 % of simulated data")

    def draw(axes: Axes, name: str) -> None:
        part = table[table["model"] == name]
        for percentile, rows in part.groupby("percentile"):
            time = rows["middle_min"].to_numpy()
            bounds = [np.maximum(_in_unit(rows[column], unit), 1e-9) for column in ("simulated_low", "simulated_high")]
            axes.fill_between(time, *bounds, color=SIMULATED, alpha=0.3 if percentile == 50 else 0.15, linewidth=0)
            axes.plot(time, _in_unit(rows["observed"], unit), color=OBSERVED, marker="o", markersize=3,
                      linestyle="solid" if percentile == 50 else (0, (4, 1.5)))
        axes.set(yscale="log")
        _log(axes.yaxis)
        time_axis(axes, float(table["middle_min"].max()) * 1.05 or 1.0)
        axes.set_ylabel(f"Concentration ({unit})", fontsize=8.5)
        axes.grid(axis="y", color=RULE)

    names = [model.name for model in scored.models if (table["model"] == model.name).any()]
    _panels(page, names, draw)
    without = [name for name, found in zip([model.name for model in scored.models], scored.predictions, strict=True)
               if found.with_error is None and name in names]
    _foot(page, f"Without measurement error, which the sheet lacks: {', '.join(without)}. The bands are then too "
                "narrow." if without else "Simulated with between-subject variability and measurement error.")
    save(page, path, title, f"Lines with bands over time, one panel for each model. {said}.")
    return Picture(path.name, title, said, f"Visual predictive check. {said}.")
