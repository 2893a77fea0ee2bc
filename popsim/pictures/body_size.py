"""The measures of body size against total weight, in the study's own patients: where they part."""

from __future__ import annotations

from pathlib import Path

import pandas as pd
from matplotlib.axes import Axes

from popsim.drawing import MARGIN, RULE, Page, strokes, wrapped
from popsim.finished import FinishedRun
from popsim.headlines import rows_where
from popsim.pictures.shown import ROOM, Picture, finish, head

FEW_IN_BIN = 50
WORDS = {"female": "Women", "male": "Men"}
AXIS_ROOM, LABEL_ROOM, GAP, HEIGHT = 0.6, 1.35, 0.2, 2.7
LABEL_SIZE = 8


def shown_rows(run: FinishedRun) -> pd.DataFrame:
    """The rows of body_size.csv with enough patients; none where no protocol doses by body size."""
    rows = run.tables.get("body_size")
    if rows is None or not rows["doses"].any():
        return pd.DataFrame()
    return rows[rows["patients"] >= FEW_IN_BIN]


def body_size(run: FinishedRun, path: Path) -> Picture:
    """A panel for each sex: medians with the middle nine tenths, each line named at its end."""
    rows = shown_rows(run)
    title, page = _title(rows), Page()
    head(page, title, f"Measures of body size against total body weight, in the study's patients ({FEW_IN_BIN} or more "
         f"in each 10 kg)")
    sexes = [sex for sex in WORDS if (rows["sex"] == sex).any()]
    width = (ROOM - len(sexes) * (AXIS_ROOM + LABEL_ROOM) - GAP * (len(sexes) - 1)) / len(sexes)
    page.top += 0.24
    for column, sex in enumerate(sexes):
        left = MARGIN + column * (width + AXIS_ROOM + LABEL_ROOM + GAP) + AXIS_ROOM
        axes = page.axes(left, page.top, width, HEIGHT)
        page.text(left, page.top - 0.24, WORDS[sex], 9, weight="bold")
        _panel(axes, rows_where(rows, sex=sex), rows, width)
    page.top += HEIGHT + 0.5
    foot = ("Lines: median of the patients of each 10 kg of total weight; bands: 5 to 95 %. Grey line: total weight "
            "itself. Lean, ideal and adjusted weight in adults only. Numbers: body_size.csv.")
    return finish(page, path, title, f"Lines over total weight. {_told(rows)}", foot)


def _panel(axes: Axes, rows: pd.DataFrame, every: pd.DataFrame, width: float) -> None:
    total = rows_where(rows, measure="weight").set_index("weight_from")["p50"]
    low, high = every.loc[every["measure"] == "weight", "p50"].agg(["min", "max"])
    axes.set(xlim=(low, high), ylim=(0, high * 1.02))
    axes.grid(axis="y")
    axes.set_axisbelow(True)
    axes.tick_params(length=3)
    axes.set_xlabel("Total body weight (kg)", fontsize=8.5, labelpad=2)
    axes.set_ylabel("Measure (kg)", fontsize=8.5, labelpad=3)
    axes.plot([low, high], [low, high], color=RULE, linewidth=1.4)
    ends = {}
    for index, name in enumerate(_measures(every)):
        one = rows_where(rows, measure=name)
        one = one[one["weight_from"].isin(total.index)]
        if one.empty:
            continue
        look, at = strokes(index), total.loc[one["weight_from"]]
        axes.fill_between(at, one["p05"], one["p95"], color=look.colour, alpha=0.14, linewidth=0)
        axes.plot(at, one["p50"], color=look.colour, linestyle=look.dash, marker=look.marker, markersize=3.5)
        ends[name] = (float(one["p50"].iloc[-1]), look)
    step = 1.35 * LABEL_SIZE / 72 / HEIGHT * high * 1.02
    floor = float("-inf")
    for name, (end, look) in sorted(ends.items(), key=lambda item: item[1][0]):
        lines = wrapped(_words(name), LABEL_ROOM - 0.42, LABEL_SIZE, most_lines=2)
        middle = max(end, floor + step * len(lines) / 2)
        floor = middle + step * len(lines) / 2
        axes.plot([1 + inches / width for inches in (0.06, 0.2, 0.34)], [middle] * 3, color=look.colour,
                  linestyle=look.dash, marker=look.marker, markersize=3.5, markevery=[1],
                  transform=axes.get_yaxis_transform(), clip_on=False)
        axes.annotate("\n".join(lines), (1 + 0.34 / width, middle), xycoords=axes.get_yaxis_transform(), xytext=(4, 0),
                      textcoords="offset points", fontsize=LABEL_SIZE, va="center", annotation_clip=False)


def _measures(rows: pd.DataFrame) -> list[str]:
    return [name for name in dict.fromkeys(rows["measure"]) if name != "weight"]


def _words(measure: str) -> str:
    """"adjusted body weight": a covariate's name without the author that tells it from others."""
    return {"lean_body_mass_janmahasatian": "lean body mass", "ideal_body_weight_devine": "ideal body weight"}.get(
        measure, measure.replace("_", " "))


def _title(rows: pd.DataFrame) -> str:
    return _heaviest(rows, "female" if (rows["sex"] == "female").any() else "male")


def _heaviest(rows: pd.DataFrame, sex: str) -> str:
    """What the medians of the heaviest women or men are."""
    of = rows_where(rows, sex=sex)
    total = rows_where(of, measure="weight").sort_values("weight_from").iloc[-1]
    others = of[(of["weight_from"] == total.weight_from) & (of["measure"] != "weight")]
    said = ", ".join(f"{_words(row.measure)} {row.p50:.0f}" for row in others.itertuples())
    return f"In {WORDS[sex].lower()} of {total.p50:.0f} kg the measures part: {said} kg (medians)"


def _told(rows: pd.DataFrame) -> str:
    return "; ".join(_heaviest(rows, sex) for sex in WORDS if (rows["sex"] == sex).any()) + "."
