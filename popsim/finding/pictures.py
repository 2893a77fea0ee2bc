"""The pictures of a search: along the doses, the measures of size, the table's rules by group, the map."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import numpy as np
from matplotlib.axes import Axes

from covariates.units import to_unit
from popsim.drawing import (
    FAINT, INK, MARGIN, RULE, SHADE, WIDTH, Page, house_style, save, share_axis, strokes, wrapped,
)  # fmt: skip
from popsim.finding.answer_map import PEOPLE, region_text
from popsim.finding.answer_size import said
from popsim.finding.counting import Asked
from popsim.finding.dose import DoseFound, label
from popsim.finding.map import SEXES, MapFound, neighbours
from popsim.finding.size import AGE_CLASSES, BMI_CLASSES, PRACTICAL, SizeFound
from popsim.finding.table import TableFound
from popsim.pictures.shown import INTERVALS_SAY, Picture
from popsim.words import percent, target_line, unit_of

ROOM = WIDTH - 2 * MARGIN
HEAT = "cividis"
FEWEST_IN_CELL = 10  # a cell of fewer patients is left blank


def _head(page: Page, asked: Asked, title: str, what: str) -> None:
    page.lines(wrapped(title, ROOM, 12.5, "bold"), 12.5, weight="bold")
    page.top += 0.04
    about = f"Target: {target_line(asked.target)}. Model: {asked.base.models[0].name}."
    page.lines(wrapped(f"{what}. {about}", ROOM, 9), 9, color=FAINT)
    page.top += 0.08


def _finish(page: Page, path: Path, title: str, told: str, caption: str) -> Picture:
    page.lines(wrapped(caption, ROOM, 8), 8, color=FAINT)
    save(page, path, title, told)
    return Picture(path.name, title, told, caption)


def draw_dose(found: DoseFound, folder: Path) -> list[Picture]:
    with house_style():
        return [_along(found, folder / "along.svg") if len(found.varied) == 1 else _grid(found, folder / "grid.svg")]


def _along(found: DoseFound, path: Path) -> Picture:
    """Attainment by group along the dose, the doses that meet the wishes shaded; below, the mean shares outside."""
    one, counts = found.varied[0], found.counts
    at = np.array([to_unit(point[0].value, one.unit, one.kind) for point in found.points])
    share, low, high = counts.attained()
    shown = [g for g in range(len(counts.groups)) if counts.n[g] > 0]
    title = (f"Most patients attain at {label(found.points[found.best_overall])} "
             f"({percent(share[found.best_overall, 0])} %), the worst group at {label(found.points[found.best_worst])} "
             f"({percent(found.worst()[found.best_worst])} %)")
    page = Page()
    _head(page, found.asked, title, "Share of patients who attain the target, by group, in the same patients")
    page.key([counts.groups[g] for g in shown])
    axes = page.axes(MARGIN + 0.6, page.top + 0.05, ROOM - 0.7, 2.6)
    page.top += 2.7 + 0.25
    for place, g in enumerate(shown):
        look = strokes(place)
        axes.fill_between(at, low[:, g], high[:, g], color=look.colour, alpha=0.18, linewidth=0)
        axes.plot(at, share[:, g], color=look.colour, linestyle=look.dash, marker=look.marker, markersize=4,
                  markevery=0.12)
    _share_panel(axes, at, "Patients who attain (%)")
    below = page.axes(MARGIN + 0.6, page.top + 0.1, ROOM - 0.7, 1.3)
    page.top += 1.4 + 0.5
    for side, dash, name in (("below", "solid", "below"), ("above", (0, (5, 1.6)), "above")):
        values = counts.mean_share(side)[:, 0]
        below.plot(at, values, color=INK, linestyle=dash)
        peak = int(np.argmax(values))
        left = peak < len(at) / 2
        below.annotate(name, (at[peak], values[peak]), xytext=(4 if left else -4, -10 if values[peak] > 0.9 else 7),
                       textcoords="offset points", fontsize=8.5, ha="left" if left else "right")
    _share_panel(below, at, "Time outside (%)")
    below.set_xlabel(f"{one.place.text[:1].upper()}{one.place.text[1:]} ({one.unit})", labelpad=2)
    for stretch in found.meeting:
        for panel in (axes, below):
            panel.axvspan(at[stretch.first], at[stretch.last], facecolor=SHADE, edgecolor="none", zorder=0)
    told = "; ".join(f"{counts.groups[g]}: {percent(share[:, g].min())} to {percent(share[:, g].max())} %, most at "
                     f"{label(found.points[int(np.argmax(share[:, g]))])}" for g in shown)
    shaded = " Below: mean share of the window under and over the range, all patients."
    shaded += " Grey: doses that meet every wish." if found.meeting else ""
    return _finish(page, path, title, f"Lines along the dose. {told}.", f"Bands: {INTERVALS_SAY}{shaded}")


def _share_panel(axes: Axes, at: np.ndarray, name: str) -> None:
    share_axis(axes.yaxis)
    axes.set(ylim=(0, 1), xlim=(at[0], at[-1]))
    axes.set_ylabel(name, fontsize=8.5, labelpad=3)
    axes.grid(axis="y")
    axes.tick_params(axis="x", length=3)


def _grid(found: DoseFound, path: Path) -> Picture:
    """Two numbers at once: the worst group's attainment on the grid, the best of all and the chosen marked."""
    first, second = found.varied
    worst = found.worst()
    place_of = {label(point): place for place, point in enumerate(found.points)}
    values = np.array([[worst[place_of[label((a, b))]] for a in first.values] for b in second.values])
    title = (f"The worst group attains most at {label(found.points[found.best_worst])} "
             f"({percent(worst[found.best_worst])} %)")
    page = Page()
    _head(page, found.asked, title, "Share who attain in the group that attains least")
    axes = page.axes(MARGIN + 0.9, page.top, ROOM - 2.2, 3.4)
    bar = page.axes(MARGIN + 0.9 + ROOM - 2.0, page.top, 0.18, 3.4)
    page.top += 3.4 + 0.55
    across, up = ([to_unit(value.value, one.unit, one.kind) for value in one.values] for one in (first, second))
    shades = axes.pcolormesh(across, up, values, cmap=HEAT, vmin=0, vmax=1, shading="nearest", rasterized=False)
    axes.figure.colorbar(shades, cax=bar)
    share_axis(bar.yaxis)
    for place, marker in ((found.best_overall, "o"), (found.best_worst, "s"), (found.chosen, "*")):
        if place is not None:
            x, y = (to_unit(value.value, one.unit, one.kind)
                    for one, value in zip(found.varied, found.points[place], strict=True))
            axes.plot([x], [y], marker=marker, color="white", markeredgecolor=INK, markersize=8, linestyle="none")
    axes.set_xlabel(f"{first.place.text} ({first.unit})")
    axes.set_ylabel(f"{second.place.text} ({second.unit})")
    told = (f"A grid of {len(first.values)} by {len(second.values)} combinations, from {percent(values.min())} to "
            f"{percent(values.max())} %.")
    star = " Star: meets every wish." if found.chosen is not None else ""
    caption = f"Circle: most of all attain. Square: best for the worst group.{star} Intervals are in along.csv."
    return _finish(page, path, title, told, f"{caption} {INTERVALS_SAY}")


def draw_size(found: SizeFound, folder: Path) -> list[Picture]:
    """For each measure a bar from the lowest to the highest class, a dot for each class, a mark for all patients."""
    counts, share = found.counts, found.counts.attained()[0]
    classes = [g for g, name in enumerate(counts.groups) if name in BMI_CLASSES | AGE_CLASSES and counts.n[g] > 0]
    title = (f"Flattest dosed by {said(found.measures[0])}: attainment moves by {100 * found.flatness[0]:.0f} points "
             f"over body mass index and age")
    with house_style():
        page = Page()
        _head(page, found.asked, title, "Share who attain, by class of body mass index and age; measures by rank")
        height, step, left = 0.3 * len(found.measures), 0.3, 2.6
        axes = page.axes(MARGIN + left, page.top, ROOM - left - 0.1, height)
        share_axis(axes.xaxis)
        axes.set(xlim=(0, 1), ylim=(height, 0), yticks=[])
        axes.grid(axis="x")
        axes.spines["left"].set_visible(False)
        axes.set_xlabel("Patients who attain the target (%)")
        for place, name in enumerate(found.measures):
            at, values = (place + 0.5) * step, share[place, classes]
            axes.plot([values.min(), values.max()], [at, at], color=RULE, linewidth=5, solid_capstyle="butt", zorder=1)
            for kind, colour, marker in ((BMI_CLASSES, 0, "o"), (AGE_CLASSES, 1, "s")):
                mine = [share[place, g] for g in classes if counts.groups[g] in kind]
                axes.plot(mine, [at] * len(mine), linestyle="none", marker=marker, markersize=4,
                          color=strokes(colour).colour, clip_on=False)
            axes.plot([share[place, 0]], [at], marker="|", markersize=12, color=INK, markeredgewidth=2)
            strong = "bold" if name in PRACTICAL else "normal"
            page.text(MARGIN, page.top + at, wrapped(said(name), left - 0.1, 8.5, strong, 1)[0], 8.5,
                      va="center_baseline", weight=strong)
        page.top += height + 0.5
        told = "; ".join(f"{said(name)}: all {percent(share[place, 0])} %, classes "
                         f"{percent(share[place, classes].min())} to {percent(share[place, classes].max())} %"
                         for place, name in enumerate(found.measures))
        caption = ("Circles: classes of body mass index. Squares: ages. Upright stroke: all patients. Bold: what a "
                   f"ward can use. Intervals are in sizes.csv. {INTERVALS_SAY}")
        return [_finish(page, folder / "sizes.svg", title, f"Dots. {told}.", caption)]


def draw_table(found: TableFound, folder: Path) -> list[Picture]:
    """Attainment by group under every rule, from the protocol as written to one dose, in fresh patients."""
    counts = found.fresh[0][1]
    rules = ["as written", *(table.name for table in found.tables)]
    share, low, high = counts.attained()
    shown = [g for g in range(len(counts.groups)) if counts.n[g] > 0]
    title = (f"{found.tables[0].name.capitalize()}: {percent(share[1, 0])} % of all attain, "
             f"as written {percent(share[0, 0])} %")
    with house_style():
        page = Page()
        _head(page, found.asked, title, "Share who attain under every rule, in fresh patients, by group")
        page.key(rules)
        step, left = 0.17, 2.05
        block = step * len(rules) + 0.14
        axes = page.axes(MARGIN + left, page.top, ROOM - left - 0.1, block * len(shown))
        share_axis(axes.xaxis)
        axes.set(xlim=(0, 1), ylim=(block * len(shown), 0), yticks=[])
        axes.grid(axis="x")
        axes.spines["left"].set_visible(False)
        axes.set_xlabel("Patients who attain the target (%)")
        for place, g in enumerate(shown):
            name = wrapped(counts.groups[g], left - 0.2, 9, most_lines=1)[0]
            page.text(MARGIN, page.top + block * (place + 0.5), name, 9, va="center_baseline")
            for p in range(len(rules)):
                at, look = block * place + 0.07 + step * (p + 0.5), strokes(p)
                axes.plot([low[p, g], high[p, g]], [at, at], color=look.colour, linewidth=2, solid_capstyle="butt")
                axes.plot([share[p, g]], [at], color=look.colour, marker=look.marker, markersize=5, markeredgewidth=0)
            if place:
                axes.axhline(block * place, color=RULE, linewidth=0.6)
        page.top += block * len(shown) + 0.5
        told = "; ".join(f"{counts.groups[g]}: " + ", ".join(f"{rule} {percent(share[p, g])} %" for p, rule in
                                                             enumerate(rules)) for g in shown)
        return [_finish(page, folder / "simplicity.svg", title, f"Dots with intervals. {told}.",
                        f"Bars: {INTERVALS_SAY}")]


def draw_map(found: MapFound, folder: Path) -> list[Picture]:
    """One panel for each sex: shares by colour, the level as a line, the regions as dotted edges."""
    sexes = [place for place in range(len(SEXES)) if (found.cells[:, 0] == place).any()]
    title = region_text(found, found.regions[0]) if found.regions else (
        f"No region clearly below {percent(found.level, 0)} %")
    title = f'"{found.protocol.name}": {title}'
    with house_style():
        page = Page()
        _head(page, found.asked, title, "Share who attain, by cell")
        width, height = (ROOM - 1.0 - 0.75 * len(sexes)) / len(sexes), 3.2
        low, high = (edge(found.cells[:, 1:3], axis=0) for edge in (np.min, np.max))
        page.top += 0.25
        for column, sex in enumerate(sexes):
            left = MARGIN + 0.6 + column * (width + 0.75)
            page.text(left, page.top - 0.2, PEOPLE[SEXES[sex]], 9, weight="bold")
            axes = page.axes(left, page.top, width, height)
            shades = _panel(axes, found, sex, low, high)
        bar = page.axes(WIDTH - MARGIN - 0.6, page.top, 0.16, height)
        axes.figure.colorbar(shades, cax=bar)
        share_axis(bar.yaxis)
        page.top += height + 0.5
        told = "; ".join(region_text(found, region) for region in found.regions) or "no region is below the level"
        caption = (f"White line: {percent(found.level, 0)} % (shares smoothed over neighbouring cells). Dotted: the "
                   f"regions in the text. Cells of fewer than {FEWEST_IN_CELL} patients are blank. {INTERVALS_SAY}")
        return [_finish(page, folder / "map.svg", title, f"Cells by colour for each sex. {told}.", caption)]


def _panel(axes: Axes, found: MapFound, sex: int, low: np.ndarray, high: np.ndarray):
    n, hits = (np.zeros(high - low + 1) for _ in range(2))
    mine = found.cells[found.cells[:, 0] == sex]
    place = tuple((mine[:, 1:3] - low).T)
    n[place], hits[place] = mine[:, 3], mine[:, 4]
    share = np.where(n >= FEWEST_IN_CELL, hits / np.maximum(n, 1), np.nan)
    edges = [np.arange(low[k], high[k] + 2) * axis.width for k, axis in enumerate((found.across, found.up))]
    shades = axes.pcolormesh(*edges, share.T, cmap=HEAT, vmin=0, vmax=1, shading="flat")
    near_n, near_hits = neighbours(n, 1), neighbours(hits, 1)
    smooth = np.where(n >= FEWEST_IN_CELL, near_hits / np.maximum(near_n, 1), np.nan)
    shown = smooth[np.isfinite(smooth)]
    if min(smooth.shape) > 1 and len(shown) and shown.min() < found.level < shown.max():
        middles = [(edge[:-1] + edge[1:]) / 2 for edge in edges]
        axes.contour(*middles, smooth.T, levels=[found.level], colors="white", linewidths=1.8)
    for region in found.regions:
        if region.sex == SEXES[sex]:
            _outline(axes, region.across, region.up, edges)
    names = [f"{axis.name.replace('_', ' ').capitalize()} ({unit_of(axis.name)})" for axis in (found.across, found.up)]
    axes.set_xlabel(names[0])
    axes.set_ylabel(names[1])
    many = found.cells[found.cells[:, 3] >= FEWEST_IN_CELL]
    if len(many):
        axes.set(xlim=(many[:, 1].min() * found.across.width, (many[:, 1].max() + 1) * found.across.width))
    return shades


def _outline(axes: Axes, across: tuple[float, float], up: tuple[float, float], edges: Sequence[np.ndarray]) -> None:
    left, right = max(across[0], edges[0][0]), min(across[1], edges[0][-1])
    bottom, top = max(up[0], edges[1][0]), min(up[1], edges[1][-1])
    axes.plot([left, right, right, left, left], [bottom, bottom, top, top, bottom], color="white", linewidth=1.2,
              linestyle=(0, (1, 1.5)))
