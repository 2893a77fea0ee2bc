"""Drawing: only eligible people, numbered, as many as asked for, and nobody changed by anything but the seed."""

import doctest
import tracemalloc

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from covariates.formula import compile_formula
from covariates.problems import ProblemsError
from popsim.patients import draw
from popsim.patients.draw import blocks
from popsim.patients.population import SURVEY_ATTRIBUTES, Population


def test_examples_in_the_docstrings():
    assert doctest.testmod(draw).failed == 0


def everyone(population, seed=1):
    parts = list(blocks(population, seed))
    return {name: np.concatenate([part.attributes[name] for part in parts]) for name in parts[0].attributes}


def ranges(lowest, highest, narrowest):
    return st.tuples(st.floats(lowest, highest), st.floats(lowest, highest)).filter(lambda r: r[1] - r[0] >= narrowest)


@settings(max_examples=40, deadline=None)
@given(
    limits=st.fixed_dictionaries(
        {},
        optional={
            "age": ranges(20, 100, 0.5),
            "weight": ranges(45, 160, 10),
            "height": ranges(145, 195, 5),
            "bmi": ranges(16, 60, 3),
        },
    ),
    sex=st.sampled_from([None, "female", "male"]),
    seed=st.integers(0, 2**64),
)
def test_any_limits_give_only_people_within_them(limits, sex, seed):
    try:
        people = everyone(Population("survey", 60, limits=limits, sex=sex), seed)
    except ProblemsError as error:
        assert "candidates were eligible" in str(error) or "one adult in 100 million" in str(error)
        assume(False)
    assert all(len(values) == 60 for values in people.values())
    for name, (low, high) in limits.items():
        assert np.all((people[name] >= low) & (people[name] <= high))
    if sex is not None:
        assert set(people["sex"]) == {sex}
    assert people["bmi"] == pytest.approx(people["weight"] / (people["height"] / 100) ** 2)


@settings(max_examples=20, deadline=None)
@given(count=st.integers(1, 20_000), seed=st.integers(0, 2**32))
def test_same_seed_gives_the_same_people_whatever_the_count(count, seed):
    limits = {"age": (65.0, np.inf), "bmi": (20.0, 35.0)}
    many = everyone(Population("survey", 20_000, limits=limits), seed)
    few = everyone(Population("survey", count, limits=limits), seed)
    for name, values in few.items():
        assert np.array_equal(values, many[name][:count])


def test_records_are_numbered_from_1_and_keyed_by_candidate():
    drawn = blocks(Population("survey", 20_001, limits={"bmi": (30.0, np.inf)}), 3)
    parts = list(drawn)
    assert [part.first for part in parts] == list(np.cumsum([1, *(len(part) for part in parts)])[:-1])
    assert sum(len(part) for part in parts) == 20_001
    assert [part.block for part in parts] == list(range(len(parts)))
    for part in parts:
        assert part.slots.dtype == np.int64 and np.all(np.diff(part.slots) > 0) and part.slots[-1] < 8192
    assert drawn.seen == 8192 * len(parts)
    assert drawn.seen * 0.36 < drawn.eligible < drawn.seen * 0.46  # of US adults 40 % (NHANES 2021-2023, from memory)
    assert set(parts[0].attributes) == set(SURVEY_ATTRIBUTES)


def test_a_further_attribute_or_scale_changes_nobody_else():
    plain = everyone(Population("survey", 9000))
    given_to_all = {"opioid": True, "closure_min": 30}
    more = everyone(Population("survey", 9000, set=given_to_all, scale={"serum_creatinine": 1.2}))
    for name in ("sex", "age", "weight", "height", "bmi"):
        assert np.array_equal(plain[name], more[name])
    assert more["serum_creatinine"] == pytest.approx(1.2 * plain["serum_creatinine"])
    assert more["opioid"].dtype == bool and more["opioid"].all()
    assert more["closure_min"].dtype == np.float64 and np.all(more["closure_min"] == 30.0)


def test_scale_comes_before_eligibility():
    limits = {"bmi": (18.5, 25.0), "weight": (50.0, 70.0)}
    people = everyone(Population("survey", 500, limits=limits, scale={"weight": 0.8}))
    assert people["weight"].max() <= 70.0 and people["bmi"].max() <= 25.0
    assert people["bmi"] == pytest.approx(people["weight"] / (people["height"] / 100) ** 2)


def test_a_condition_on_attributes_and_covariates():
    where = compile_formula('weight < 200 and lean_body_mass_james > 55 and sex == "male" and opioid', "where")
    people = everyone(Population("survey", 300, where=where, set={"opioid": True}))
    assert set(people["sex"]) == {"male"} and len(people["sex"]) == 300
    ratio = people["weight"] / people["height"]
    assert np.all(1.10 * people["weight"] - 128 * ratio**2 > 55)  # James 1976, men


def test_nobody_eligible_is_said():
    with pytest.raises(ProblemsError, match=r"0 of 3,276,800 candidates were eligible"):
        everyone(Population("survey", 10, where=compile_formula("weight > 400", "where")))
    with pytest.raises(ProblemsError, match="fewer than one adult in 100 million"):
        blocks(Population("survey", 10, limits={"weight": (400.0, 500.0)}), 1)


def test_hardly_anybody_eligible_is_said(monkeypatch):
    monkeypatch.setattr(draw, "RARE_AFTER_BLOCKS", 4)
    with pytest.raises(ProblemsError, match=r"of 32,768 candidates were eligible"):
        everyone(Population("survey", 1000, where=compile_formula("bmi > 60", "where")))


def test_rare_people_are_found_when_few_are_asked_for():
    assert everyone(Population("survey", 20, limits={"bmi": (60.0, 90.0), "age": (70.0, 100.0)}))["bmi"].min() >= 60


@pytest.mark.parametrize(
    "population, message",
    [
        (Population("servey", 10), 'did you mean "survey"'),
        (Population("survey", None), "count"),
        (Population("survey", 0), "1 or more"),
        (Population("survey", 10, limits={"age": (18.0, 40.0)}), "adults of 20 to 100 years"),
        (Population("survey", 10, limits={"age": (60.0, 120.0)}), "adults of 20 to 100 years"),
        (Population("survey", 10, limits={"age": (-np.inf, 20.0)}), "nobody"),
        (Population("survey", 10, limits={"age": (100.0, np.inf)}), "nobody"),
        (Population("survey", 10, limits={"weight": (90.0, 60.0)}), "from low to high"),
        (Population("survey", 10, limits={"wieght": (60.0, 90.0)}), 'did you mean "weight"'),
        (Population("survey", 10, sex="women"), "female, male"),
        (Population("survey", 10, set={"weight": 70.0}), "which the survey draws"),
        (Population("survey", 10, scale={"age": 1.1}), "weight, height, serum_creatinine"),
        (Population("survey", 10, scale={"weight": 0.0}), "above 0"),
        (Population("list", None), 'file = "people.csv"'),
    ],
)
def test_what_cannot_be_drawn_is_refused_at_once(population, message):
    with pytest.raises(ProblemsError) as caught:
        blocks(population, 1)
    assert message in str(caught.value)


def test_all_problems_are_told_together():
    with pytest.raises(ProblemsError) as caught:
        blocks(Population("survey", 0, sex="x", scale={"bmi": -1.0}), 1)
    assert len(caught.value.problems) == 4


def test_enough_in_the_last_block_is_enough(monkeypatch):
    """Rare people, all found just when the search would otherwise be given up."""
    population = Population("survey", 1, where=compile_formula("bmi > 60", "where"))
    monkeypatch.setattr(draw, "RARE_AFTER_BLOCKS", 1)
    assert len(everyone(population)["age"]) == 1


def test_memory_does_not_grow_with_the_patients():
    def most(count):
        tracemalloc.start()
        for _ in blocks(Population("survey", count), 1):
            pass
        found = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
        return found

    most(10_000)  # what is kept for later use
    assert most(160_000) < 1.2 * most(20_000)
