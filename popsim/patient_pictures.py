"""The picture of a study's patients: some of them one by one, and all of them by group."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from matplotlib.axes import Axes

from popsim.drawing import COLOURS, FAINT, MARGIN, WIDTH, Page, house_style, save, text_width, wrapped
from popsim.people import People
from popsim.study_records import Study

PANEL, LEFT, GAP = 2.9, 0.65, 0.75  # inches
ROW = 0.24
SEX_LOOK = {"female": (COLOURS[1], "o"), "male": (COLOURS[0], "x")}
CLOUDS = (("age", "bmi", "Age (years)", "BMI (kg/m2)"), ("height", "weight", "Height (cm)", "Weight (kg)"))
LONGEST_NAME_IN = 2.2


def draw_people(study: Study, people: People, path: Path) -> None:
    """Write the picture as SVG: clouds of a sample above, quantiles of every measure by group below."""
    with house_style():
        page = Page()
        title = f"{people.patients[0]:,} patients: {study.title}"
        page.lines(wrapped(title, WIDTH - 2 * MARGIN, 12, "bold", 2), 12, weight="bold")
        clouds = [cloud for cloud in CLOUDS if {cloud[0], cloud[1]} <= people.sample.keys()]
        if clouds:
            shown = len(next(iter(people.sample.values())))
            note = f"The first {shown:,} of them, " + ", ".join(
                f"{sex} {'circles' if marker == 'o' else 'crosses'}" for sex, (_, marker) in SEX_LOOK.items()
            )
            page.lines([note], 9, color=FAINT)
            page.top += 0.1
            for place, cloud in enumerate(clouds):
                _cloud(
                    page.axes(LEFT + place * (PANEL + GAP + 0.3), page.top, PANEL + 0.3, PANEL), people.sample, *cloud
                )
            page.top += PANEL + 0.55
        _strips(page, people)
        save(
            page,
            path,
            title,
            "Age against body mass index and height against weight of some patients; below, by group, the "
            "5th, 25th, 50th, 75th and 95th percentile of each measure.",
        )


def _cloud(axes: Axes, sample: dict[str, np.ndarray], x: str, y: str, x_words: str, y_words: str) -> None:
    for sex, (colour, marker) in SEX_LOOK.items():
        of = sample["sex"] == sex if "sex" in sample else np.full(len(sample[x]), sex == "male")
        axes.plot(
            sample[x][of],
            sample[y][of],
            linestyle="none",
            marker=marker,
            markersize=2.2,
            color=colour,
            markeredgewidth=0.5,
            fillstyle="none",
            alpha=0.6,
        )
    axes.set_xlabel(x_words, labelpad=2)
    axes.set_ylabel(y_words, labelpad=3)
    axes.grid(True)


def _strips(page: Page, people: People) -> None:
    """For each measure a panel: groups below each other, a thin line from the 5th to the 95th percentile, a thick one
    between the quartiles, a dot at the median."""
    measures, names = people.shown(), [wrapped(name, LONGEST_NAME_IN, 9, most_lines=1)[0] for name in people.names]
    page.lines(["By group: median, quartiles, 5th and 95th percentile"], 9, color=FAINT)
    page.top += 0.08
    room = max(text_width(name, 9) for name in names) + 0.15
    height, columns = ROW * len(names) + 0.1, 3
    width = (WIDTH - 2 * MARGIN - room - 0.2 * columns) / columns
    for first in range(0, len(measures), columns):
        for place, measure in enumerate(measures[first : first + columns]):
            axes = page.axes(MARGIN + room + place * (width + 0.2), page.top, width, height)
            for row in range(len(names)):
                p05, p25, p50, p75, p95 = people.quantiles(measure, row)
                axes.plot([p05, p95], [row, row], color=COLOURS[0], linewidth=1)
                axes.plot([p25, p75], [row, row], color=COLOURS[0], linewidth=4)
                axes.plot([p50], [row], "o", color="white", markeredgecolor=COLOURS[0], markersize=5)
            axes.set(ylim=(len(names) - 0.4, -0.6), yticks=range(len(names)))
            axes.set_yticklabels(names if place == 0 else [])
            axes.tick_params(axis="y", length=0)
            axes.set_xlabel(f"{measure.words} ({measure.unit})", labelpad=2)
            axes.grid(True, axis="x")
        page.top += height + 0.55
