"""A lattice: every combination of given values, for maps and questions about single patients."""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np

from covariates.problems import Problem, ProblemsError
from popsim.patients.possible import completed, impossible

MOST_POINTS = 10_000_000


def lattice_people(axes: Mapping[str, tuple], each: int = 1) -> dict[str, np.ndarray]:
    """The people at the points of a lattice, the last axis moving first.

    axes  attribute -> its values: numbers in the attribute's own unit, true or false, or "female" and "male"
    each  how many people at each point, each with a luck of their own

    Returns attribute -> (n,) array; with what follows from them, as `completed` adds it.
    Raises ProblemsError for too many points; `impossible_points` names those that cannot be people.

    >>> people = lattice_people({"sex": ("female",), "height": (160.0, 170.0), "bmi": (25.0,)})
    >>> people["weight"].round(2).tolist()
    [64.0, 72.25]
    """
    points = math.prod(len(values) for values in axes.values()) * each
    if points > MOST_POINTS:
        advice = "fewer values, or a smaller each"
        raise ProblemsError(Problem("population: lattice", f"{points:,} people", f"at most {MOST_POINTS:,}", advice))
    grids = np.meshgrid(*(np.array(values) for values in axes.values()), indexing="ij")
    return completed({name: np.repeat(grid.ravel(), each) for name, grid in zip(axes, grids)})


def impossible_points(people: Mapping[str, np.ndarray]) -> Problem | None:
    """What to say of points that cannot be people, the first of them named; None where all can."""
    wrong = np.flatnonzero(impossible(people))
    if not len(wrong):
        return None
    shown = ("sex", "age", "weight", "height", "bmi", "serum_creatinine", "postmenstrual_age_weeks")
    first = ", ".join(
        f"{name} {people[name][wrong[0]]:.4g}" if name != "sex" else str(people[name][wrong[0]])
        for name in shown
        if name in people
    )
    return Problem(
        "population: lattice",
        f"{len(wrong):,} points that cannot be people, the first: {first}",
        "possible people only",
        "give height and bmi instead of weight, or leave the corners out by limits",
    )
