"""Lines for the terminal: how wide it is taken to be, and texts that fit it."""

from __future__ import annotations

import textwrap

WIDTH = 80


def wrapped(text: str, lead: str = "") -> list[str]:
    """The text in lines; those after the first are indented as far as the lead."""
    return textwrap.wrap(text, WIDTH, initial_indent=lead, subsequent_indent=" " * len(lead))
