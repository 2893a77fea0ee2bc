"""People drawn as a table 1 describes them: its figures come out, and everybody is possible."""

import doctest

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from scipy import stats

from popsim.patients import described
from popsim.patients.described import APART, TOGETHER, Described, Marginal, fit_marginal
from popsim.patients.possible import impossible
from popsim.patients.survey import candidates

BLOCKS = 12
N = BLOCKS * 8192


def people(population, seed=1, blocks=BLOCKS):
    parts = [population.candidates(seed, block) for block in range(blocks)]
    return {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}


def both(marginal):
    return marginal, marginal


AGE = both(fit_marginal({"mean": 64.0, "sd": 11.0}, 18.0, 95.0, 1.0))
HEIGHT = both(fit_marginal({"mean": 170.0, "sd": 10.0}, 100.0, 250.0, 1.0))
WEIGHT = both(fit_marginal({"median": 88.0, "p25": 75.0, "p75": 103.0}, 30.0, 300.0, None))
WARD = Described(0.45, {"age": AGE, "height": HEIGHT, "weight": WEIGHT}, {"opioid": 0.3})


def test_examples_in_the_docstrings():
    assert doctest.testmod(described).failed == 0


def test_limits_far_away_give_the_textbook_distributions():
    """scipy.stats, quantiles: normal; lognormal of mean m and SD s with variance of ln = ln(1 + (s/m)^2)."""
    luck = np.array([-2.0, -0.5, 0.0, 1.0, 2.5])
    at = stats.norm.cdf(luck)
    assert HEIGHT[0].values(luck) == pytest.approx(stats.norm(170, 10).ppf(at), rel=1e-4)
    omega = np.sqrt(np.log1p(0.3**2))
    found = fit_marginal({"mean": 1.0, "sd": 0.3}, 0.01, 100.0, 0.0)
    assert found.values(luck) == pytest.approx(stats.lognorm(omega, scale=np.exp(-(omega**2) / 2)).ppf(at), rel=1e-4)


def test_close_limits_give_the_truncated_normal():
    """scipy.stats.truncnorm with the same parent; its mean and SD are the printed ones."""
    found = fit_marginal({"mean": 40.0, "sd": 9.0}, 20.0, 60.0, 1.0)
    sd = found.median * found.spread
    theirs = stats.truncnorm((20 - found.median) / sd, (60 - found.median) / sd, found.median, sd)
    assert (theirs.mean(), theirs.std()) == pytest.approx((40.0, 9.0), rel=1e-4)
    luck = np.linspace(-3, 3, 7)
    assert found.values(luck) == pytest.approx(theirs.ppf(stats.norm.cdf(luck)), rel=1e-9)


def test_figures_come_out_of_many_people():
    """Mean within 4.5 standard errors; quantiles within 4.5 of theirs."""
    found = people(WARD)
    assert found["age"].mean() == pytest.approx(64, abs=4.5 * 11 / np.sqrt(N))
    assert found["age"].std() == pytest.approx(11, rel=4.5 / np.sqrt(2 * N))
    assert np.percentile(found["weight"], [25, 50, 75]) == pytest.approx([75, 88, 103], rel=0.006)
    assert (found["sex"] == "female").mean() == pytest.approx(0.45, abs=4.5 * 0.5 / np.sqrt(N))
    assert found["opioid"].mean() == pytest.approx(0.3, abs=4.5 * 0.5 / np.sqrt(N))
    assert found["bmi"] == pytest.approx(found["weight"] / (found["height"] / 100) ** 2)
    assert found["possible"].all()


def test_women_are_smaller_as_among_adults_of_the_survey():
    """The men's height above the women's, in SDs of both together, and the correlation within a sex."""

    def told(people):
        women = people["sex"] == "female"
        gap = (people["height"][~women].mean() - people["height"][women].mean()) / people["height"].std()
        within = [np.corrcoef(np.log(people["weight"][of]), people["height"][of])[0, 1] for of in (women, ~women)]
        return gap, np.mean(within)

    drawn, survey = people(WARD), candidates(1, 0)
    assert told(drawn) == pytest.approx(told(survey), abs=0.07)


def test_default_correlations_are_those_of_the_survey():
    """Of normal scores, pooled and within each sex: within 0.03 of what the survey generator gives."""
    parts = [candidates(7, block) for block in range(30)]
    survey = {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}
    men = survey["sex"] == "male"

    def scores(name, of):
        return stats.norm.ppf((stats.rankdata(survey[name][of]) - 0.5) / of.sum())

    everyone, share = np.ones(len(men), dtype=bool), men.mean()
    biserial = np.sqrt(share * (1 - share)) / stats.norm.pdf(stats.norm.ppf(share))
    for (one, other), value in TOGETHER.items():
        found = (
            np.corrcoef(men, scores(other, everyone))[0, 1] * biserial
            if one == "male"
            else np.corrcoef(scores(one, everyone), scores(other, everyone))[0, 1]
        )
        assert found == pytest.approx(value, abs=0.03), (one, other)
    for (one, other), value in APART.items():
        found = np.mean([np.corrcoef(scores(one, of), scores(other, of))[0, 1] for of in (men, ~men)])
        assert found == pytest.approx(value, abs=0.03), (one, other)


def test_one_sex_and_each_sex_for_itself():
    women, men = (fit_marginal({"mean": mean, "sd": 7.0}, 100.0, 250.0, 1.0) for mean in (162.0, 176.0))
    found = people(Described(0.5, {"height": (women, men)}))
    for sex, mean in (("female", 162.0), ("male", 176.0)):
        assert found["height"][found["sex"] == sex].mean() == pytest.approx(mean, abs=0.2)
    only = people(Described(1.0, {"height": HEIGHT, "weight": WEIGHT}), blocks=2)
    assert set(only["sex"]) == {"female"}
    assert np.corrcoef(np.log(only["weight"]), only["height"])[0, 1] == pytest.approx(0.37, abs=0.04)


def test_a_given_correlation_wins():
    found = people(Described(0.45, WARD.numbers, correlations={("weight", "height"): 0.2, ("age", "weight"): -0.3}))
    assert stats.spearmanr(found["age"], found["weight"]).statistic == pytest.approx(-0.29, abs=0.02)
    assert np.corrcoef(np.log(found["weight"]), found["height"])[0, 1] == pytest.approx(0.2, abs=0.02)


def test_a_further_variable_changes_nobody_else():
    more = Described(
        0.45,
        {**WARD.numbers, "closure_min": both(fit_marginal({"median": 180.0, "p95": 360.0}, 0, np.inf, 0.0))},
        {"opioid": 0.3, "smoker": 0.2},
    )
    one, other = people(WARD, blocks=1), people(more, blocks=1)
    for name in one:
        assert np.array_equal(one[name], other[name]), name
    assert np.percentile(people(more)["closure_min"], [50, 95]) == pytest.approx([180, 360], rel=0.02)


def test_newborns_have_a_postmenstrual_age():
    birth = both(fit_marginal({"mean": 31.0, "sd": 3.0}, 24.0, 42.0, 1.0))
    age = both(fit_marginal({"median": 10 / 365.25, "p95": 40 / 365.25}, 0.0, 60 / 365.25, 0.0))
    found = people(Described(0.5, {"age": age, "gestational_age_weeks": birth}), blocks=2)
    assert found["postmenstrual_age_weeks"] == pytest.approx(found["gestational_age_weeks"] + 52.143 * found["age"])
    assert found["gestational_age_weeks"].mean() == pytest.approx(31.0, abs=0.1) and found["possible"].all()


@pytest.mark.parametrize(
    "figures, low, high, shape, reason",
    [
        ({"mean": 64.0, "sd": 40.0}, 18.0, 95.0, 1.0, "no normal distribution from 18 to 95"),
        ({"median": 88.0, "p25": 75.0, "p75": 140.0}, 40.0, 200.0, 0.0, "no lognormal distribution"),
        ({"median": 88.0, "p25": 87.0, "p75": 300.0}, 0.3, 350.0, None, "no Box-Cox distribution"),
        ({"mean": 15.0, "sd": 3.0}, 18.0, 95.0, 1.0, "not between the limits"),
    ],
)
def test_impossible_figures_are_refused_with_the_reason(figures, low, high, shape, reason):
    with pytest.raises(ValueError, match=reason):
        fit_marginal(figures, low, high, shape)


def test_correlations_that_cannot_hold_together():
    numbers = {**WARD.numbers, "crp": both(fit_marginal({"median": 5.0, "p95": 50.0}, 0, np.inf, 0.0))}
    with pytest.raises(ValueError, match="cannot hold together"):
        Described(0.45, numbers, correlations={("crp", "height"): 0.9, ("crp", "weight"): -0.9}).factor


middles = st.fixed_dictionaries({"age": st.floats(30, 80), "height": st.floats(150, 185), "weight": st.floats(50, 120)})


@settings(max_examples=40, deadline=None)
@given(
    middle=middles,
    cv=st.floats(0.02, 0.3),
    female=st.floats(0, 1),
    seed=st.integers(0, 2**32),
    shape=st.sampled_from([0.0, 1.0]),
    tie=st.floats(-0.5, 0.5),
)
def test_any_description_yields_only_possible_people_and_its_own_figures(middle, cv, female, seed, shape, tie):
    limits = {"age": (18.0, 110.0), "height": (100.0, 250.0), "weight": (30.0, 300.0)}
    spread = {"age": cv, "height": min(cv, 0.06), "weight": cv}
    try:
        numbers = {
            name: both(fit_marginal({"mean": mean, "sd": mean * spread[name]}, *limits[name], shape))
            for name, mean in middle.items()
        }
    except ValueError:
        assume(False)  # limits that no such figures fit into
    population = Described(female, numbers, correlations={("age", "weight"): tie})
    found = people(population, seed, 1)
    kept = {name: values[found["possible"]] for name, values in found.items()}
    assert found["possible"].mean() > 0.9 and not impossible(kept).any()
    for name, mean in middle.items():
        low, high = limits[name]
        assert kept[name].min() >= low and kept[name].max() <= high
        assert found[name].mean() == pytest.approx(mean, abs=5 * mean * spread[name] / np.sqrt(8192))


@given(median=st.floats(0.01, 1000), ratio=st.floats(1.02, 4))
@settings(max_examples=40)
def test_median_and_a_percentile_are_met(median, ratio):
    found = fit_marginal({"median": median, "p95": median * ratio}, 0.0, np.inf, 0.0)
    assert (found.figure("median"), found.figure("p95")) == pytest.approx((median, median * ratio), rel=1e-4)
    assert isinstance(found, Marginal) and found.inside() == pytest.approx(1.0)
