"""Intervals of shares and of differences, against scipy, statsmodels, print and simulation."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import binom, binomtest
from statsmodels.stats.proportion import confint_proportions_2indep

from popsim.estimate import (
    mean_error, no_headline, paired_difference, quantile_ranks, unpaired_difference, verdict, wilson,
)  # fmt: skip


@pytest.mark.parametrize(
    ("successes", "n", "low", "high"),
    [(81, 263, 0.2553, 0.3662), (15, 148, 0.0624, 0.1605), (0, 20, 0.0, 0.1611), (1, 29, 0.0061, 0.1718)],
)
def test_wilson_in_print(successes, n, low, high):
    """Newcombe 1998, Stat Med 17:857-72, table I, method 3 (from memory)."""
    assert [round(float(limit), 4) for limit in wilson(successes, n)] == [low, high]


@given(st.integers(1, 100_000).flatmap(lambda n: st.tuples(st.integers(0, n), st.just(n))))
def test_wilson_as_scipy(case):
    """scipy.stats.binomtest(...).proportion_ci(method="wilson")."""
    theirs = binomtest(*case).proportion_ci(method="wilson")
    np.testing.assert_allclose(
        [float(limit) for limit in wilson(*case)], [theirs.low, theirs.high], rtol=1e-10, atol=1e-12
    )


def test_wilson_of_none_all_and_nobody():
    low, high = wilson(np.array([0, 7, 0]), np.array([7, 7, 0]))
    assert low[0] == 0.0 and high[1] == 1.0
    assert np.isnan([low[2], high[2]]).all()


# Newcombe 1998, Stat Med 17:873-90, table II, method 10 (from memory): (a, m, b, n, low, high of a/m - b/n)
UNPAIRED = [
    (56, 70, 48, 80, 0.0524, 0.3339),
    (9, 10, 3, 10, 0.1705, 0.8090),
    (10, 10, 0, 20, 0.6791, 1.0),
    (10, 10, 0, 10, 0.6075, 1.0),
]


@pytest.mark.parametrize(("a", "m", "b", "n", "low", "high"), UNPAIRED)
def test_unpaired_in_print(a, m, b, n, low, high):
    difference, found_low, found_high = unpaired_difference(b, n, a, m)
    assert difference == pytest.approx(a / m - b / n)
    assert (round(found_low, 4), round(found_high, 4)) == (low, high)


@given(st.integers(1, 2000), st.integers(1, 2000), st.floats(0, 1), st.floats(0, 1))
def test_unpaired_as_statsmodels(n_a, n_b, share_a, share_b):
    """statsmodels confint_proportions_2indep(method="newcomb"), which gives first minus second."""
    a, b = round(share_a * n_a), round(share_b * n_b)
    theirs = confint_proportions_2indep(b, n_b, a, n_a, method="newcomb", compare="diff")
    np.testing.assert_allclose(unpaired_difference(a, n_a, b, n_b)[1:], theirs, rtol=1e-9, atol=1e-9)


def newcombe_method_10(e: int, f: int, g: int, h: int) -> tuple[float, float]:
    """Interval of (e+f)/n - (e+g)/n as Newcombe 1998, Stat Med 17:2635-50 writes it: roots of the score equation."""
    n, z2 = e + f + g + h, 1.959963984540054**2

    def score_limits(r):
        roots = np.roots([1 + z2 / n, -(2 * r / n + z2 / n), (r / n) ** 2])
        return min(roots.real), max(roots.real)

    (l2, u2), (l3, u3) = score_limits(e + f), score_limits(e + g)
    p2, p3 = (e + f) / n, (e + g) / n
    product = (e + f) * (g + h) * (e + g) * (f + h)
    cross = e * h - f * g
    cross = max(cross - n / 2, 0) if cross > 0 else cross
    phi = cross / math.sqrt(product) if product else 0.0
    dl2, du2, dl3, du3 = p2 - l2, u2 - p2, p3 - l3, u3 - p3
    delta = math.sqrt(max(dl2**2 - 2 * phi * dl2 * du3 + du3**2, 0))
    epsilon = math.sqrt(max(du2**2 - 2 * phi * du2 * dl3 + dl3**2, 0))
    return p2 - p3 - delta, p2 - p3 + epsilon


@given(*(st.integers(0, 400) for _ in range(4)))
def test_paired_as_written_in_the_paper(both, only_a, only_b, neither):
    if both + only_a + only_b + neither == 0:
        assert np.isnan(paired_difference(both, only_a, only_b, neither)).all()
        return
    _, low, high = paired_difference(both, only_a, only_b, neither)
    # e both, f only the second named, g only the first: b - a
    np.testing.assert_allclose((low, high), newcombe_method_10(both, only_b, only_a, neither), atol=2e-8)


def test_paired_in_print():
    """Newcombe 1998, Stat Med 17:2635-50 (36 both, 12 and 2 discordant, 0 neither): 0.0569 to 0.3404 (from memory)."""
    difference, low, high = paired_difference(36, 2, 12, 0)
    assert (difference, round(low, 4), round(high, 4)) == (0.2, 0.0569, 0.3404)


@given(*(st.integers(0, 200) for _ in range(4)))
def test_exchanging_the_protocols_turns_the_sign(both, only_a, only_b, neither):
    if both + only_a + only_b + neither:
        forth, back = paired_difference(both, only_a, only_b, neither), paired_difference(both, only_b, only_a, neither)
        np.testing.assert_allclose(forth, [-back[0], -back[2], -back[1]], atol=1e-12)
        assert -1 - 1e-12 <= forth[1] <= forth[0] <= forth[2] <= 1 + 1e-12


def test_counts_of_a_hundred_million_do_not_overflow():
    _, low, high = paired_difference(40_000_000, 10_000_000, 20_000_000, 30_000_000)
    assert 0.0998 < low < 0.1 < high < 0.1002


@pytest.mark.parametrize(
    ("shares", "n"), list(itertools.product([(0.5, 0.1, 0.15, 0.25), (0.85, 0.03, 0.02, 0.1)], [400, 2000]))
)
def test_the_paired_interval_covers_the_truth(shares, n):
    """4,000 samples; a 95 % interval must cover in 93.5 to 97 %, which is beyond 3.5 of the count's own SDs."""
    luck = np.random.default_rng(3)
    truth = shares[2] - shares[1]
    intervals = [paired_difference(*(int(count) for count in row)) for row in luck.multinomial(n, shares, size=4000)]
    covered = np.mean([low <= truth <= high for _, low, high in intervals])
    assert 0.935 < covered < 0.97


@pytest.mark.parametrize(("share_a", "share_b"), [(0.6, 0.65), (0.05, 0.02)])
def test_the_unpaired_interval_covers_the_truth(share_a, share_b):
    luck = np.random.default_rng(4)
    counts = zip(luck.binomial(500, share_a, 4000), luck.binomial(900, share_b, 4000), strict=True)
    intervals = [unpaired_difference(int(a), 500, int(b), 900) for a, b in counts]
    covered = np.mean([low <= share_b - share_a <= high for _, low, high in intervals])
    assert 0.935 < covered < 0.97


@pytest.mark.parametrize(
    ("low", "high", "said"),
    [
        (0.068, 0.092, "better"),
        (-0.092, -0.068, "better"),
        (0.05, 0.08, "better"),
        (0.043, 0.067, "not clear"),
        (-0.049, 0.049, "too small to matter"),
        (-0.05, 0.049, "not clear"),
        (-0.2, 0.2, "not clear"),
        (0.01, 0.02, "too small to matter"),
    ],
)
def test_verdicts(low, high, said):
    assert verdict(low, high, 0.05) == said


def test_no_verdict_where_nothing_is_said_to_matter_or_nobody_is_there():
    assert verdict(0.1, 0.2, None) == "" and verdict(float("nan"), float("nan"), 0.05) == ""


def test_over_one_percent_failed_leaves_no_headline():
    assert no_headline(11, 1000) and not no_headline(10, 1000) and not no_headline(0, 0)
    assert no_headline(np.array([1, 0]), np.array([99, 99])).tolist() == [True, False]


def test_error_of_a_mean_against_numpy():
    values = np.random.default_rng(3).random(500)
    error = mean_error(values.mean(), (values**2).mean(), 500)
    assert error == pytest.approx(values.std(ddof=1) / np.sqrt(500))
    assert np.isnan(mean_error(0.5, 0.5, 1))


@pytest.mark.parametrize("share", [0.05, 0.5, 0.95])
def test_interval_of_a_quantile_covers_it_in_95_of_100_samples(share):
    """Ranks against the binomial distribution of scipy: the chance that the true quantile lies between them."""
    n = 2000
    rank, low, high = quantile_ranks(share, n)
    covered = binom.cdf(np.ceil(high) - 1, n, share) - binom.cdf(np.ceil(low) - 1, n, share)
    assert rank == n * share and covered == pytest.approx(0.95, abs=0.01)
