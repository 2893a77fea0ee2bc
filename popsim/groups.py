"""Which patients belong to which group."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np

from covariates.formula import Formula
from covariates.problems import Problem, ProblemsError

ALL = "all"


def members(groups: Sequence[tuple[str, Formula]], lookup: Callable[[str], np.ndarray], count: int) -> np.ndarray:
    """Membership of one block of patients.

    groups  name and condition of each group
    lookup  attribute or covariate -> (count,) array
    count   patients in the block

    Returns (count, 1 + groups) bool: first everyone ("all"), then the groups in their order. A condition that compares
    with a number that is not known (NaN) is not met.
    Raises ProblemsError for a group that is named "all", a name used twice, or a formula that is not a condition.

    >>> from covariates.formula import compile_formula
    >>> old = compile_formula("age >= 75", "group[1].where")
    >>> members([("old", old)], {"age": np.array([60.0, 80.0])}.__getitem__, 2).tolist()
    [[True, False], [True, True]]
    """
    problems = list(_problems(groups))
    if problems:
        raise ProblemsError(problems)
    inside = np.ones((count, 1 + len(groups)), dtype=bool)
    for column, (_, where) in enumerate(groups, start=1):
        inside[:, column] = where.evaluate(lookup)
    return inside


def _problems(groups: Sequence[tuple[str, Formula]]):
    names = [ALL, *(name for name, _ in groups)]
    for place, (name, where) in enumerate(groups, start=1):
        if name == ALL:
            yield Problem("group: name", '"all"', "any other name", 'the group "all" is always there')
        elif name in names[:place]:
            yield Problem("group: name", f'"{name}" twice', "each name once")
        if where.kind != "condition":
            yield Problem(f'group "{name}": where', f'"{where.text}", a number', 'a condition, such as "age >= 65"')
