"""Reading one table of a TOML file key by key; what is missing, unknown or wrong is gathered, never guessed."""

from __future__ import annotations

import math
from collections.abc import Collection, Iterator

from covariates.problems import Problem, ProblemsError, nearest
from covariates.units import Quantity, Range, parse_quantity, parse_range


class Section:
    """One table. Each reading method notes its key as known and returns None where nothing usable stands there.

    table     what the file holds
    where     file and key, for messages: "sheet.toml: built_on"
    problems  shared by all sections of one file
    """

    def __init__(self, table: dict, where: str, problems: list[Problem]):
        self.table = table
        self.where = where
        self.problems = problems
        self._known: set[str] = set()

    def problem(self, key: str, found: str, allowed: str = "", advice: str = "") -> None:
        """Note a problem of one key."""
        self.problems.append(Problem(self._place(key), found, allowed, advice))

    def take(self, key: str, needed: bool, allowed: str) -> object | None:
        """The raw value; a problem where it is needed and missing."""
        self._known.add(key)
        value = self.table.get(key)
        if value is None and needed:
            self.problem(key, "missing", allowed)
        return value

    def text(self, key: str, needed: bool = False, among: Collection[str] = (), example: str = "") -> str | None:
        """Text that is not blank, one of `among` where given."""
        allowed = ", ".join(among) or "text in quotes" + (f", such as {example}" if example else "")
        value = self.take(key, needed, allowed)
        if value is None:
            return None
        if not isinstance(value, str) or not value.strip() or (among and value not in among):
            self.problem(key, f"{value!r:.100}", allowed, nearest(str(value), among))
            return None
        return value

    def texts(self, key: str) -> tuple[str, ...]:
        """A list of texts; empty where the key is absent."""
        value = self.take(key, False, "")
        if value is None:
            return ()
        if not isinstance(value, list) or not all(isinstance(item, str) and item.strip() for item in value):
            self.problem(key, f"{value!r:.100}", 'a list of texts, ["...", "..."]')
            return ()
        return tuple(value)

    def number(self, key: str, low: float, high: float, needed: bool = False, advice: str = "") -> float | None:
        """A number with low < number <= high."""
        allowed = f"a number above {low:g}" + (f", at most {high:g}" if math.isfinite(high) else "")
        value = self.take(key, needed, allowed)
        if value is None:
            return None
        usable = isinstance(value, (int, float)) and not isinstance(value, bool)
        if not usable or not low < value <= high or not math.isfinite(value):
            self.problem(key, f"{value!r:.100}", allowed, advice if usable and value > high else "")
            return None
        return float(value)

    def whole_number(self, key: str) -> int | None:
        """A whole number of 1 or more."""
        value = self.number(key, 0, math.inf)
        if value is not None and value != int(value):
            self.problem(key, f"{value:g}", "a whole number")
            return None
        return None if value is None else int(value)

    def flag(self, key: str, otherwise: bool) -> bool:
        """true or false."""
        value = self.take(key, False, "")
        if value is None:
            return otherwise
        if not isinstance(value, bool):
            self.problem(key, f"{value!r:.100}", "true or false")
            return otherwise
        return value

    def quantity(self, key: str, kind: str) -> float | None:
        """A quantity of one kind, in its internal unit."""
        measure = self.measure(key, (kind,))
        return None if measure is None else measure.value

    def measure(self, key: str, kinds: Collection[str]) -> Quantity | None:
        """A quantity of one of these kinds."""
        value = self.take(key, False, "")
        try:
            return None if value is None else parse_quantity(value, kinds, self._place(key))
        except ProblemsError as error:
            self.problems.extend(error.problems)
            return None

    def range(self, key: str, kind: str) -> Range | None:
        """A range of one kind."""
        value = self.take(key, False, "")
        try:
            return None if value is None else parse_range(value, kind, self._place(key))
        except ProblemsError as error:
            self.problems.extend(error.problems)
            return None

    def section(self, key: str, needed: bool = False) -> Section:
        """A table inside this one; an empty one where it is absent."""
        value = self.take(key, needed, f"a section [{key}]")
        if value is not None and not isinstance(value, dict):
            self.problem(key, f"{value!r:.100}", f"a section [{key}]")
            value = None
        return Section(value or {}, self._place(key), self.problems)

    def entries(self, example: str) -> Iterator[tuple[str, Section]]:
        """The keys not read so far, each holding a table such as `example`."""
        for key in [key for key in self.table if key not in self._known]:
            self._known.add(key)
            if isinstance(self.table[key], dict):
                yield key, Section(self.table[key], self._place(key), self.problems)
            else:
                self.problem(key, f"{self.table[key]!r:.100}", example)

    def pairs(self) -> Iterator[tuple[str, object]]:
        """The keys not read so far with their raw values."""
        for key in [key for key in self.table if key not in self._known]:
            self._known.add(key)
            yield key, self.table[key]

    def close(self) -> None:
        """Every key that nobody asked for is a problem, with the nearest known key."""
        for key in self.table:
            if key not in self._known:
                self.problem(key, "an unknown key", ", ".join(sorted(self._known)), nearest(key, self._known))

    def _place(self, key: str) -> str:
        return f"{self.where}{'.' if ': ' in self.where else ': '}{key}"
