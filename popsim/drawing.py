"""How every picture looks and is saved: palette, type, a page laid out in inches, files without date or random ids."""

from __future__ import annotations

import io
import re
from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache
from html import escape
from pathlib import Path

import numpy as np
from matplotlib import style
from matplotlib.axes import Axes
from matplotlib.axis import Axis
from matplotlib.figure import Figure
from matplotlib.font_manager import FontProperties
from matplotlib.lines import Line2D
from matplotlib.textpath import text_to_path
from matplotlib.ticker import MaxNLocator
from matplotlib.transforms import Bbox

WIDTH = 9.0
HOURS_FROM_MIN = 240.0
PNG_DPI = 200
MARGIN = 0.12
INK, FAINT, RULE, SHADE = "#1a1a1a", "#595959", "#d9d9d9", "#f0f0f0"
# Source: Okabe and Ito 2008, Color Universal Design (from memory); without their yellow, too pale for a line on white.
COLOURS = ("#0072B2", "#D55E00", "#000000", "#CC79A7", "#009E73", "#56B4E9", "#E69F00")
DASHES = ("solid", (0, (5, 1.6)), (0, (1, 1.2)), (0, (6, 1.5, 1, 1.5)), (0, (2.5, 1.2)))
MARKERS = ("o", "s", "D", "^", "v", "P", "X", "*")
LOOK = {
    "font.family": "DejaVu Sans", "font.size": 9, "text.color": INK, "text.parse_math": False,
    "axes.edgecolor": FAINT, "axes.labelcolor": INK, "axes.linewidth": 0.7, "axes.labelsize": 9,
    "axes.spines.top": False, "axes.spines.right": False, "axes.axisbelow": True,
    "grid.color": RULE, "grid.linewidth": 0.6, "xtick.color": FAINT, "ytick.color": FAINT,
    "xtick.labelcolor": INK, "ytick.labelcolor": INK, "xtick.labelsize": 8.5, "ytick.labelsize": 8.5,
    "lines.linewidth": 1.6, "lines.solid_capstyle": "round", "legend.frameon": False,
    "svg.fonttype": "path", "svg.hashsalt": "popsim",
}  # fmt: skip


def house_style():
    """Context in which pictures are drawn; a user's own matplotlib settings do not reach them."""
    return style.context(["default", LOOK])


@dataclass(frozen=True)
class Strokes:
    """How one protocol is drawn: told apart by colour, and in grey print by dash and marker."""

    colour: str
    dash: object
    marker: str


def strokes(index: int) -> Strokes:
    """The strokes of the protocol at that place of the study; all different up to 35 protocols."""
    return Strokes(COLOURS[index % len(COLOURS)], DASHES[index % len(DASHES)], MARKERS[index % len(MARKERS)])


def plain(text: str) -> str:
    """Text without characters that cannot be printed (or stand in XML): each becomes a blank."""
    return "".join(letter if letter.isprintable() else " " for letter in text)


@lru_cache(maxsize=4096)
def text_width(text: str, size: float, weight: str = "normal") -> float:
    """Width of one line of text in inches."""
    font = FontProperties(family=LOOK["font.family"], weight=weight, size=size)
    return text_to_path.get_text_width_height_descent(text, font, ismath=False)[0] / 72


def wrapped(text: str, width: float, size: float, weight: str = "normal", most_lines: int = 99) -> list[str]:
    """Lines that fit `width` inches; a word longer than that is broken, what passes `most_lines` ends in "..."."""
    lines: list[str] = [""]
    for word in plain(text).split():
        if lines[-1] and text_width(f"{lines[-1]} {word}", size, weight) <= width:
            lines[-1] += f" {word}"
            continue
        while text_width(word, size, weight) > width and len(word) > 1:
            fits = max((k for k in range(1, len(word)) if text_width(word[:k], size, weight) <= width), default=1)
            lines.append(word[:fits])
            word = word[fits:]
        lines.append(word)
    lines = [line for line in lines if line]
    if len(lines) > most_lines:
        last = lines[most_lines - 1]
        while last and text_width(f"{last}...", size, weight) > width:
            last = last[:-1]
        lines = [*lines[:most_lines - 1], f"{last}..."]
    return lines


def label_spots(curves: dict[str, tuple[np.ndarray, np.ndarray]], size: float, width: float,
                height: float) -> dict[str, tuple[float, float]] | None:
    """Where each curve's name can stand on its own line, clear of the other lines and names; None if one cannot.

    curves   name -> (x, y), all on the same x, y on a scale from 0 to 1
    width, height   of the axes, inches
    """
    half_y = (0.65 * size / 72 + 0.02) / height
    spots: dict[str, tuple[float, float, float]] = {}
    for name, (x, y) in curves.items():
        half_x = (text_width(name, size) / 2 + 0.06) / width * (x[-1] - x[0])
        others = [other for key, (_, other) in curves.items() if key != name]
        best = None
        for k in np.flatnonzero((x - half_x >= x[0]) & (x + half_x <= x[-1]) & (y > 1.2 * half_y) & (y < 1 - half_y)):
            span = np.abs(x - x[k]) <= 1.3 * half_x
            free = min((float(np.abs(other[span] - y[k]).min()) for other in others), default=1.0)
            clash = any(abs(x[k] - at) < half_x + half and abs(y[k] - level) < 2 * half_y
                        for at, level, half in spots.values())
            if np.ptp(y[span]) < half_y and free > 1.5 * half_y and not clash and (best is None or free > best[0]):
                best = free, (float(x[k]), float(y[k]), half_x)
        if best is None:
            return None
        spots[name] = best[1]
    return {name: (at, level) for name, (at, level, _) in spots.items()}


def share_axis(axis: Axis) -> None:
    """Ticks of a share from 0 to 1, in percent."""
    axis.set_ticks([0, 0.25, 0.5, 0.75, 1], ["0 %", "25 %", "50 %", "75 %", "100 %"])
    axis.set_tick_params(length=0, pad=5)


def time_axis(axes: Axes, until_min: float) -> None:
    """Minutes, or hours for a long run; the positions stay minutes."""
    unit, name = (60.0, "h") if until_min > HOURS_FROM_MIN else (1.0, "min")
    steps = [1, 1.2, 2.4, 4.8, 6, 10] if unit == 60 else [1, 1.5, 2, 3, 6, 10]
    ticks = MaxNLocator(6, steps=steps).tick_values(0, until_min / unit)
    ticks = [tick for tick in ticks if 0 <= tick <= until_min / unit * (1 + 1e-9)]
    axes.set_xticks([tick * unit for tick in ticks], [f"{tick:g}" for tick in ticks])
    axes.set(xlim=(0, until_min))
    axes.set_xlabel(f"Time ({name})", labelpad=2)
    axes.tick_params(axis="x", length=3)


class Page:
    """A figure laid out in inches from its top left corner, so that nothing moves when a name is long.

    `top` is where the next part goes. The sheet is far taller than needed; `save` cuts it off below the last part.
    """

    height = 1000.0

    def __init__(self) -> None:
        self.figure = Figure(figsize=(WIDTH, self.height))
        self.top = MARGIN

    def axes(self, left: float, top: float, width: float, height: float) -> Axes:
        return self.figure.add_axes((left / WIDTH, 1 - (top + height) / self.height, width / WIDTH,
                                     height / self.height))

    def text(self, left: float, top: float, text: str, size: float = 9, **how) -> None:
        """Text whose top is at `top`."""
        self.figure.text(left / WIDTH, 1 - top / self.height, text, fontsize=size, va=how.pop("va", "top"), **how)

    def lines(self, lines: list[str], size: float, left: float = MARGIN, **how) -> None:
        """Lines at the left edge, each below the last; moves `top`."""
        for line in lines:
            self.text(left, self.top, line, size, **how)
            self.top += 1.4 * size / 72

    def key(self, names: Sequence[str]) -> None:
        """The protocols' strokes and names, side by side as far as they fit; moves `top`."""
        left, height, stroke = MARGIN, 0.21, 0.38
        for index, name in enumerate(names):
            shown = wrapped(name, WIDTH - 2 * MARGIN - stroke - 0.1, 9, most_lines=1)[0]
            width = stroke + 0.08 + text_width(shown, 9)
            if left > MARGIN and left + width > WIDTH - MARGIN:
                left, self.top = MARGIN, self.top + height
            middle, look = 1 - (self.top + height / 2) / self.height, strokes(index)
            self.figure.add_artist(Line2D(
                [left / WIDTH, (left + stroke / 2) / WIDTH, (left + stroke) / WIDTH], [middle] * 3, color=look.colour,
                linestyle=look.dash, marker=look.marker, markersize=5, markevery=[1]))
            self.text(left + stroke + 0.08, self.top + height / 2, shown, 9, va="center_baseline")
            left += width + 0.3
        self.top += height + 0.06


def _signed(kind: str, title: str, description: str) -> dict[str, str | None]:
    """What a file says of itself: popsim's name, by which a later run knows it, and no date."""
    if kind == "svg":  # title and description become elements, which screen readers know
        return {"Date": None, "Creator": "popsim"}
    if kind == "png":
        return {"Software": "popsim", "Title": title, "Description": description}
    return {"Creator": "popsim", "Producer": "popsim", "Title": title, "Subject": description, "CreationDate": None}


def save(page: Page, path: Path, title: str, description: str) -> None:
    """Write SVG, PNG or PDF by the path's ending: same bytes on repeat, with title and description inside."""
    buffer, kind = io.BytesIO(), path.suffix[1:]
    used = Bbox([[0, page.height - page.top - MARGIN], [WIDTH, page.height]])
    page.figure.savefig(buffer, format=kind, dpi=PNG_DPI, metadata=_signed(kind, plain(title), plain(description)),
                        bbox_inches=used)
    if kind != "svg":
        path.write_bytes(buffer.getvalue())
        return
    svg = buffer.getvalue().decode("utf-8")
    names = '<title id="popsim-title">{}</title>\n <desc id="popsim-description">{}</desc>'
    said = names.format(escape(plain(title)), escape(plain(description)))
    role = ' role="img" aria-labelledby="popsim-title popsim-description">\n '
    svg = re.sub(r"(<svg\b[^>]*)>", lambda found: found.group(1) + role + said, svg, count=1)
    path.write_text(svg, encoding="utf-8")
