"""Rare corners of the survey: the same distribution as looking at everybody and keeping those within the limits."""

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from scipy.stats import ks_2samp

from covariates.problems import ProblemsError
from popsim.patients import survey
from popsim.patients.ages import mixed, national
from popsim.patients.corner import Corner
from popsim.patients.draw import blocks
from popsim.patients.population import Population

CASES = [
    ({"bmi": (45.0, np.inf)}, (80.0, 100.0), "female"),
    ({"weight": (150.0, np.inf), "height": (-np.inf, 180.0)}, None, None),
    ({"bmi": (20.0, 22.0), "weight": (40.0, 60.0), "height": (160.0, 163.0)}, (30.5, 77.2), None),
    ({"weight": (-np.inf, 40.0)}, None, None),
]


def kept(parts, limits):
    people = {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}
    inside = people["possible"]
    for name, (low, high) in limits.items():
        inside = inside & (people[name] >= low) & (people[name] <= high)
    return {name: values[inside] for name, values in people.items()}


@pytest.mark.parametrize(("limits", "ages", "sex"), CASES)
def test_the_same_people_as_among_everybody(limits, ages, sex):
    """Two-sample Kolmogorov-Smirnov at 1 in 1,000 for each of six; the share of women within 4.5 standard errors."""
    corner = Corner(limits, national(), ages, sex)
    direct = kept([corner.candidates(3, block) for block in range(4)], limits)
    looked = 90
    everybody = kept([survey.candidates(4, block, ages, sex) for block in range(looked)], limits)
    n, m = len(direct["age"]), len(everybody["age"])
    assert m > 1000 and n > 8192
    for name in ("age", "height", "weight", "bmi", "serum_creatinine"):
        assert ks_2samp(direct[name], everybody[name]).pvalue > 0.001, name
    skewed = [people["bmi"] * (people["height"] - 165) for people in (direct, everybody)]  # how the two go together
    assert ks_2samp(*skewed).pvalue > 0.001
    women = [(people["sex"] == "female").mean() for people in (direct, everybody)]
    assert women[0] == pytest.approx(women[1], abs=4.5 * 0.5 * np.sqrt(1 / n + 1 / m))
    share = corner.share * n / (4 * 8192)
    assert share == pytest.approx(m / (looked * 8192), rel=4.5 / np.sqrt(m))


def test_few_candidates_are_wasted():
    drawn = blocks(Population("survey", 20_000, limits={"bmi": (45.0, np.inf), "age": (80.0, np.inf)}, sex="female"), 1)
    parts = [part.attributes for part in drawn]
    people = {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}
    assert set(people["sex"]) == {"female"} and people["age"].min() >= 80 and people["bmi"].min() >= 45
    assert len(people["age"]) == 20_000
    assert drawn.eligible > 0.9 * drawn.seen
    assert drawn.share_eligible == pytest.approx(0.0098, rel=0.05)  # as among all women over 80, see above


def test_wide_limits_keep_the_people_of_the_unrestricted_survey():
    wide = next(blocks(Population("survey", 100, limits={"bmi": (18.5, 60.0)}), 1))
    assert np.array_equal(wide.attributes["age"], survey.candidates(1, 0)["age"][wide.slots])


def test_limits_are_meant_after_scaling():
    population = Population(
        "survey", 3000, limits={"bmi": (48.0, 50.0), "weight": (120.0, 130.0)}, scale={"weight": 1.25}
    )
    drawn = blocks(population, 1)
    people = next(drawn).attributes
    assert people["bmi"].min() >= 48 and people["bmi"].max() <= 50 and people["weight"].max() <= 130
    assert drawn.eligible > 0.3 * drawn.seen


@pytest.mark.parametrize("limits", [{"weight": (400.0, 500.0)}, {"bmi": (91.0, 95.0)}, {"height": (260.0, 300.0)}])
def test_who_is_not_supported_by_the_tables_is_refused_at_once(limits):
    with pytest.raises(ProblemsError, match="fewer than one adult in 100 million"):
        blocks(Population("survey", 1, limits=limits), 1)


def spans(lowest, highest, narrowest):
    both = st.tuples(st.floats(lowest, highest), st.floats(narrowest, highest - lowest))
    return both.map(lambda pair: (pair[0], pair[0] + pair[1]))


@settings(max_examples=40, deadline=None)
@given(
    limits=st.fixed_dictionaries(
        {}, optional={"weight": spans(40, 200, 5), "height": spans(145, 195, 2), "bmi": spans(14, 70, 1)}
    ),
    ages=spans(20, 95, 1).filter(lambda ages: ages[1] <= 100),
    uniform=st.booleans(),
)
def test_any_corner_holds_only_people_within_its_limits_and_its_bounds_bound(limits, ages, uniform):
    curve = mixed(((20.0, 100.0, 1.0),), None) if uniform else national()
    corner = Corner(limits, curve, ages)
    assume(corner.share >= 1e-8)
    people = corner.candidates(1, 0)
    found = {name: values[people["possible"]] for name, values in people.items()}
    for name, (low, high) in {**limits, "age": ages, "bmi": limits.get("bmi", (12.0, 90.0))}.items():
        assert np.all(found[name] >= low * (1 - 1e-12)) and np.all(found[name] <= high * (1 + 1e-12))
    among_all = survey.candidates(2, 0, ages, None, curve)
    inside = len(kept([among_all], limits)["age"]) / 8192
    assert inside <= corner.share + 4.5 * np.sqrt(corner.share * (1 - min(corner.share, 1)) / 8192) + 1e-9
