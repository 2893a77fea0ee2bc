"""Named random streams: reproducible, independent of each other, and what they claim to be."""

import csv
import doctest
from pathlib import Path

import numpy as np
import pytest
from scipy.stats import kstest

from popsim import streams
from popsim.streams import BLOCK, normals, uniforms

PINNED = Path(__file__).parents[1] / "pinned" / "streams.csv"


def test_examples_in_the_docstrings():
    assert doctest.testmod(streams).failed == 0


def test_same_key_same_numbers_whatever_was_drawn_before():
    first = normals(7, "survey.height", 3)
    uniforms(7, "another", 3)
    normals(7, "survey.height", 2)
    assert np.array_equal(first, normals(7, "survey.height", 3))


@pytest.mark.parametrize("other", [(8, "height", 3), (7, "heights", 3), (7, "height", 4), (2**32 + 7, "height", 3)])
def test_seed_name_and_block_each_give_unrelated_numbers(other):
    one, two = normals(7, "height", 3), normals(*other)
    assert abs(np.corrcoef(one, two)[0, 1]) < 4 / np.sqrt(BLOCK)
    assert not np.intersect1d(one, two).size


def test_distributions():
    """Against the distribution functions of scipy (Kolmogorov and Smirnov's test, 40 blocks)."""
    assert kstest(np.concatenate([normals(1, "x", block) for block in range(40)]), "norm").pvalue > 1e-4
    assert kstest(np.concatenate([uniforms(1, "x", block) for block in range(40)]), "uniform").pvalue > 1e-4


def test_slots_and_neighbouring_blocks_do_not_follow_each_other():
    values = np.concatenate([normals(1, "x", block) for block in range(40)])
    for lag in (1, 2, BLOCK):
        assert abs(np.corrcoef(values[lag:], values[:-lag])[0, 1]) < 4 / np.sqrt(len(values) - lag)


@pytest.mark.parametrize("key", [(-1, "x", 0), (2**128, "x", 0), (1, "", 0), (1, "x", -1)])
def test_impossible_keys_are_refused(key):
    with pytest.raises(ValueError):
        normals(*key)


def test_our_own_first_numbers_of_version_0():
    rows = list(csv.DictReader(line for line in PINNED.read_text().splitlines() if not line.startswith("#")))
    assert len(rows) == 12
    for row in rows:
        draw = {"normals": normals, "uniforms": uniforms}[row["kind"]]
        value = draw(int(row["seed"]), row["name"], int(row["block"]))[int(row["slot"])]
        assert value == pytest.approx(float(row["value"]), abs=1e-9)
