"""The one form in which anything a user can mend is said: where, what was found, what is allowed, what to do."""

from __future__ import annotations

import difflib
from collections.abc import Iterable
from dataclasses import dataclass


@dataclass(frozen=True)
class Problem:
    """One thing the user can mend.

    where    file and key, such as "study.toml: protocol[1].dose[2].amount"
    found    what stands there
    allowed  what may stand there
    advice   what to do, where that is not plain from `allowed`
    """

    where: str
    found: str
    allowed: str = ""
    advice: str = ""

    def __str__(self) -> str:
        lines = [self.where, f"    found:   {self.found}"]
        if self.allowed:
            lines.append(f"    allowed: {self.allowed}")
        if self.advice:
            lines.append(f"    to do:   {self.advice}")
        return "\n".join(lines)


class ProblemsError(ValueError):
    """All the problems of one input at once (exit code 2)."""

    def __init__(self, problems: Problem | Iterable[Problem]):
        self.problems = [problems] if isinstance(problems, Problem) else list(problems)
        super().__init__("\n".join(str(problem) for problem in self.problems))


def nearest(word: str, known: Iterable[str]) -> str:
    """The advice that names the closest known word, or an empty string: nearest("wieght", ["weight"])
    gives 'did you mean "weight"?'."""
    close = difflib.get_close_matches(str(word), list(known), n=1, cutoff=0.6)
    return f'did you mean "{close[0]}"?' if close else ""
