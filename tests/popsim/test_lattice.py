"""A lattice: every combination once, each point with its own luck, and only people who can be."""

import doctest

import numpy as np
import pytest

from covariates.formula import compile_formula
from covariates.problems import ProblemsError
from popsim.patients import lattice
from popsim.patients.draw import blocks
from popsim.patients.lattice import MOST_POINTS, lattice_people
from popsim.patients.population import Population

AXES = {
    "sex": ("female", "male"),
    "age": (30.0, 60.0, 90.0),
    "height": (160.0, 175.0),
    "bmi": (20.0, 45.0),
    "opioid": (True,),
}


def test_examples_in_the_docstrings():
    assert doctest.testmod(lattice).failed == 0


def test_every_combination_once():
    (people,) = blocks(Population("lattice", None, lattice=AXES), 1)
    rows = set(zip(*(people.attributes[name].tolist() for name in AXES)))
    assert len(people) == len(rows) == 24
    assert people.attributes["weight"] == pytest.approx(
        people.attributes["bmi"] * (people.attributes["height"] / 100) ** 2
    )
    assert people.attributes["opioid"].dtype == bool


def test_limits_choose_among_the_points_and_luck_stays_with_the_point():
    where = compile_formula('sex == "male" and bmi > 30', "where")
    (people,) = blocks(Population("lattice", None, lattice=AXES, where=where, limits={"age": (50.0, 100.0)}), 1)
    everyone = lattice_people(AXES)
    chosen = np.flatnonzero((everyone["sex"] == "male") & (everyone["bmi"] > 30) & (everyone["age"] >= 50))
    assert people.slots.tolist() == chosen.tolist()


def test_many_at_each_point():
    parts = list(blocks(Population("lattice", None, lattice=AXES, each=1000), 1))
    assert sum(map(len, parts)) == 24_000 and [part.block for part in parts] == [0, 1, 2]
    assert len({(part.block, slot) for part in parts for slot in part.slots.tolist()}) == 24_000


@pytest.mark.parametrize(
    "axes, found",
    [
        ({"height": (150.0, 200.0), "weight": (20.0, 180.0)}, "weight 20, height 200, bmi 5"),
        ({"age": (0.5,), "weight": (90.0,)}, "age 0.5, weight 90"),
    ],
)
def test_points_that_cannot_be_people_are_named(axes, found):
    with pytest.raises(ProblemsError, match=found):
        blocks(Population("lattice", None, lattice=axes), 1)


def test_limits_can_leave_the_corners_out():
    axes = {"height": (150.0, 200.0), "weight": (20.0, 180.0)}
    (people,) = blocks(Population("lattice", None, lattice=axes, limits={"bmi": (8.0, 100.0)}), 1)
    assert len(people) == 3


def test_too_many_points():
    with pytest.raises(ProblemsError, match="at most"):
        lattice_people({"age": tuple(np.linspace(20, 90, 5000)), "weight": tuple(np.linspace(40, 160, 5000))})
    assert MOST_POINTS == 10_000_000
    with pytest.raises(ProblemsError, match="each = 100"):
        blocks(Population("lattice", 10, lattice=AXES), 1)
