"""A self-contained HTML page, written from a template: all reports are made so."""

from __future__ import annotations

import re
from pathlib import Path
from typing import Any

from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

from popsim.pictures.shown import Picture


def write_page(path: Path, template: str, **values: Any) -> None:
    """Fill the template of that name; a value that it misses is an error, and what stands in texts is escaped."""
    environment = Environment(loader=PackageLoader("popsim"), autoescape=True, undefined=StrictUndefined,
                              trim_blocks=True, lstrip_blocks=True, keep_trailing_newline=True)
    path.write_text(environment.get_template(template).render(values), encoding="utf-8")


def inlined(pictures: list[Picture], folder: Path) -> list[dict[str, Any]]:
    """Each picture with its file in `folder` as a part of a page."""
    return [{"picture": picture, "svg": _inlined((folder / picture.file_name).read_text("utf-8"), number)}
            for number, picture in enumerate(pictures, 1)]


def _inlined(svg: str, number: int) -> Markup:
    """One of our SVG files as part of a page: no prolog, comments or metadata; ids that no other picture has."""
    svg = svg[svg.index("<svg"):]
    svg = re.sub(r"<!--.*?-->|<metadata>.*?</metadata>", "", svg, flags=re.DOTALL)
    own = f"p{number}-"
    svg = re.sub(r'\bid="', f'id="{own}', svg)
    svg = re.sub(r'(xlink:href="#|url\(#)', rf"\g<1>{own}", svg)
    svg = svg.replace('aria-labelledby="popsim-title popsim-description"',
                      f'aria-labelledby="{own}popsim-title {own}popsim-description"')
    return Markup(re.sub(r"\n\s*\n+", "\n", svg))  # its text was escaped when it was drawn
