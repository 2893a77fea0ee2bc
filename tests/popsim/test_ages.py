"""Ages and sexes mixed as a study wants them."""

import doctest

import numpy as np
import pytest

from covariates.problems import ProblemsError
from popsim.patients import ages
from popsim.patients.ages import mixed, national
from popsim.patients.draw import blocks
from popsim.patients.population import Population


def people(**how):
    parts = [part.attributes for part in blocks(Population("survey", 40_000, **how), 1)]
    return {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}


def test_examples_in_the_docstrings():
    assert doctest.testmod(ages).failed == 0


def test_uniform_ages():
    age = people(age_mix=((20.0, 100.0, 1.0),), limits={"age": (30.0, 90.0)})["age"]
    assert np.histogram(age, bins=6, range=(30, 90))[0] / len(age) == pytest.approx(np.full(6, 1 / 6), abs=0.01)


def test_bands_of_age_keep_their_shares_and_the_nations_share_of_women_at_an_age():
    mix = ((20.0, 60.0, 0.25), (80.5, 95.0, 0.75))
    found = people(age_mix=mix)
    old = found["age"] > 70
    assert old.mean() == pytest.approx(0.75, abs=0.01)
    assert found["age"][old].min() >= 80.5 and found["age"].max() <= 95
    of_nation = people(limits={"age": (80.5, 95.0)})
    young = of_nation["age"] < 84  # the share of women grows with age, so it is compared where ages are alike
    of_old = old & (found["age"] < 84)
    wanted = (of_nation["sex"][young] == "female").mean()
    assert (found["sex"][of_old] == "female").mean() == pytest.approx(wanted, abs=0.02)


@pytest.mark.parametrize("limits", [{}, {"age": (65.0, 90.0)}])
def test_a_share_of_women(limits):
    found = people(female_share=0.7, limits=limits)
    assert (found["sex"] == "female").mean() == pytest.approx(0.7, abs=0.01)
    for sex, below in zip(ages.SEXES, national().below):  # each sex keeps the nation's ages
        low, high = limits.get("age", (20.0, 100.0))
        middle = np.interp(
            (np.interp(low, national().ages, below) + np.interp(high, national().ages, below)) / 2,
            below,
            national().ages,
        )
        assert np.median(found["age"][found["sex"] == sex]) == pytest.approx(middle, abs=0.8)


def test_nothing_asked_for_is_the_nation():
    curve = mixed((), None)
    for ours, theirs in zip(curve.below, national().below):
        assert np.interp(national().ages, curve.ages, ours) == pytest.approx(theirs, rel=1e-12)


def test_a_mix_that_leaves_nobody_is_refused():
    with pytest.raises(ProblemsError, match="nobody within the limits"):
        blocks(Population("survey", 10, age_mix=((20.0, 40.0, 1.0),), limits={"age": (60.0, 70.0)}), 1)
    with pytest.raises(ProblemsError, match="nobody within the limits"):
        blocks(Population("survey", 10, female_share=0.0, sex="female"), 1)
