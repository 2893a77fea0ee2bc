"""How sexes and ages are mixed: as in the nation, or as a study wants them.

A curve says how many people are below each age; sex and age of a candidate are looked up on it, so that limits of age
and sex waste nobody.
"""

from __future__ import annotations

import csv
from dataclasses import dataclass
from functools import lru_cache
from importlib import resources

import numpy as np

SEXES = ("male", "female")
YOUNGEST_YEARS, OLDEST_YEARS = 20.0, 100.0
THINNING_YEARS = 7.0  # from 80 years on, one in e of a cohort is left after this time: extrapolated openly


@dataclass(frozen=True)
class AgeCurve:
    """Ages (years, ascending), and for men and for women how many are below each; straight lines in between."""

    ages: np.ndarray
    below: tuple[np.ndarray, np.ndarray]

    def total(self) -> float:
        return float(sum(below[-1] for below in self.below))

    def within(self, limits: tuple[float, float] | None, sex: str | None) -> tuple[list[float], list[float]]:
        """For men and for women, how many are below the lower limit and how many between the limits."""
        low, high = limits or (YOUNGEST_YEARS, OLDEST_YEARS)
        start = [float(np.interp(low, self.ages, below)) for below in self.below]
        count = [float(np.interp(high, self.ages, below)) - first for below, first in zip(self.below, start)]
        if sex is not None:
            count[1 - SEXES.index(sex)] = 0.0
        return start, count


@lru_cache(maxsize=1)
def national() -> AgeCurve:
    """The adults of the United States, in millions."""
    rows = read_table("us_age_mix_2022.csv")
    old_years = np.arange(1.0, OLDEST_YEARS - 80.0 + 1.0)
    old_share = np.expm1(-old_years / THINNING_YEARS) / np.expm1(-old_years[-1] / THINNING_YEARS)
    ages = np.concatenate([np.arange(YOUNGEST_YEARS, 81.0, 10.0), 80.0 + old_years])
    below = []
    for sex in SEXES:
        *decades, oldest = [float(row["millions"]) for row in rows if row["sex"] == sex]
        to_80 = np.concatenate([[0.0], np.cumsum(decades)])
        below.append(np.concatenate([to_80, to_80[-1] + oldest * old_share]))
    return AgeCurve(ages, (below[0], below[1]))


def mixed(
    bands: tuple[tuple[float, float, float], ...],
    female_share: float | None,
    limits: tuple[float, float] | None = None,
) -> AgeCurve:
    """The nation's curve with other ages, another share of women, or both.

    bands         (from, to, share) in years and fractions, apart from each other: ages are even within a band, and the
                  share of women at an age stays the nation's; empty: the nation's ages
    female_share  share of women among those within `limits` (years); None: as it comes

    Raises ValueError when nobody is within the limits.
    """
    curve = national()
    low, high = limits or (YOUNGEST_YEARS, OLDEST_YEARS)
    edges = {edge for low_edge, high_edge, _ in bands for edge in (low_edge, high_edge)}
    inner = {min(max(age, YOUNGEST_YEARS), OLDEST_YEARS) for age in (*edges, low, high)}
    ages = np.array(sorted({*np.arange(YOUNGEST_YEARS, OLDEST_YEARS + 1.0).tolist(), *inner}))
    people = np.array([np.diff(np.interp(ages, curve.ages, below)) for below in curve.below])
    if bands:
        middle, width = (ages[1:] + ages[:-1]) / 2, np.diff(ages)
        share = np.zeros(len(width))
        for start, end, wanted in bands:
            share += np.where((middle > start) & (middle < end), wanted * width / (end - start), 0.0)
        people = share * people / people.sum(axis=0)
    if female_share is not None:
        inside = (ages[:-1] >= low) & (ages[1:] <= high)
        count = people[:, inside].sum(axis=1)
        if not np.all(count > 0):
            raise ValueError(f"nobody of {low:g} to {high:g} years")
        people *= (np.array([1.0 - female_share, female_share]) / count)[:, None]
    below = np.concatenate([np.zeros((2, 1)), np.cumsum(people, axis=1)], axis=1)
    return AgeCurve(ages, (below[0], below[1]))


def person_of_luck(
    sex_luck: np.ndarray,
    age_luck: np.ndarray,
    limits: tuple[float, float] | None = None,
    sex: str | None = None,
    curve: AgeCurve | None = None,
) -> tuple[np.ndarray, np.ndarray]:
    """Sex (True = female) and age (years) of evenly spread numbers, (n,) each: exact within limits of age and sex.

    Raises ValueError when nobody is within the limits.
    """
    curve = curve or national()
    low, high = limits or (YOUNGEST_YEARS, OLDEST_YEARS)
    start, count = curve.within(limits, sex)
    if not sum(count) > 0:
        raise ValueError(f"the survey holds nobody of {low} to {high} years")
    female = sex_luck * sum(count) >= count[0]
    age = np.empty(len(female))
    for index, mask in enumerate((~female, female)):
        rank = start[index] + age_luck[mask] * count[index]
        # rounding in the interpolation must not carry anybody across a limit
        age[mask] = np.clip(np.interp(rank, curve.below[index], curve.ages), low, high)
    return female, age


def read_table(name: str) -> list[dict[str, str]]:
    """Rows of a table in `tables/`, as text; lines that begin with # name its source."""
    text = (resources.files("popsim.patients") / "tables" / name).read_text(encoding="utf-8")
    return list(csv.DictReader(line for line in text.splitlines() if not line.startswith("#")))
