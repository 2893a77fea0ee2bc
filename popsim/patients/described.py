"""Patients as a paper's table 1 describes them: each variable by a few figures, tied together by correlations.

Every variable follows one family, value = median (1 + L S z)^(1/L): normal where the shape L is 1, lognormal where it
is 0, Box-Cox in between and beyond. Median, spread S and, where three figures tell it, the shape are found so that
people within the limits have just the figures that are printed. Variables are tied by a normal copula; sex takes part
in it, as an unseen normal number with a threshold, so that women are smaller than men while the whole group keeps its
figures.

Source: Box-Cox distribution (Cole and Green 1992, Stat Med 11:1305); normal copula and inversion (textbook methods).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np

from covariates.variability import cholesky_factor, covariance_from
from popsim.patients.possible import ADULT_YEARS, completed, completed_names, impossible
from popsim.patients.survey import box_cox_ln_ratio
from popsim.streams import normals, uniforms

# Correlations of normal scores among adults of our own survey generator, which follows NHANES 2017-2018 in this.
# `male` is the normal number behind sex. Men and women together:
TOGETHER = {
    ("male", "height"): 0.85, ("male", "weight"): 0.38, ("male", "bmi"): -0.02, ("male", "serum_creatinine"): 0.70,
    ("height", "weight"): 0.46, ("height", "bmi"): 0.0, ("height", "serum_creatinine"): 0.47,
    ("weight", "serum_creatinine"): 0.27, ("bmi", "serum_creatinine"): 0.06,
}  # fmt: skip
# Within one sex, the mean of both:
APART = {("height", "weight"): 0.37, ("height", "bmi"): 0.0, ("height", "serum_creatinine"): 0.16,
         ("weight", "serum_creatinine"): 0.14, ("bmi", "serum_creatinine"): 0.09}  # fmt: skip
ORDER = ("age", "height", "weight", "bmi", "serum_creatinine")
MISFIT = 0.005  # how far a figure may lie from what is printed: rounding in print is larger
Z = np.linspace(-8.0, 8.0, 1601)
DENSITY = np.exp(-(Z**2) / 2.0) / np.exp(-(Z**2) / 2.0).sum()
FIGURES = {"p05": -1.6448536269514722, "p25": -0.6744897501960817, "median": 0.0,
           "p75": 0.6744897501960817, "p95": 1.6448536269514722}  # fmt: skip


@dataclass(frozen=True)
class Marginal:
    """One variable: `shape`, `median` and `spread` before its limits `low` and `high` are applied."""

    shape: float
    median: float
    spread: float
    low: float
    high: float

    def values(self, luck: np.ndarray) -> np.ndarray:
        """Of standard normal numbers; always within the limits."""
        from scipy.special import ndtr, ndtri

        start, end = ndtr(self._luck_of(self.low)), ndtr(self._luck_of(self.high))
        if start > 0.0 or end < 1.0:
            luck = ndtri(start + ndtr(luck) * (end - start))
        with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
            ratio = self.spread * luck if self.shape == 0 else box_cox_ln_ratio(self.shape, self.spread, luck)
            return np.clip(self.median * np.exp(ratio), self.low, self.high)

    def _luck_of(self, value: float) -> float:
        with np.errstate(divide="ignore", over="ignore"):
            ln_ratio = np.log(np.float64(value) / self.median)
            return float((ln_ratio if self.shape == 0 else np.expm1(self.shape * ln_ratio) / self.shape) / self.spread)

    def inside(self) -> float:
        """Share of the unlimited distribution that lies within the limits."""
        from scipy.special import ndtr

        return float(ndtr(self._luck_of(self.high)) - ndtr(self._luck_of(self.low)))

    def figure(self, name: str) -> float:
        """mean, sd, median, p05, p25, p75 or p95 of people within the limits."""
        if name in FIGURES:
            return float(self.values(np.array(FIGURES[name])))
        values = self.values(Z)
        mean = float(DENSITY @ values)
        return mean if name == "mean" else float(np.sqrt(DENSITY @ (values - mean) ** 2))


def fit_marginal(figures: Mapping[str, float], low: float, high: float, shape: float | None) -> Marginal:
    """The marginal with these figures, all above 0.

    figures  mean and sd, or median and others of FIGURES
    shape    1 normal, 0 lognormal, None: found, where there are three figures

    Raises ValueError, with the reason, when there is none.

    >>> fit_marginal({"median": 180.0, "p95": 360.0}, 0.0, np.inf, 0.0).spread.__round__(4)
    0.4214
    """
    from scipy.optimize import least_squares

    middle = figures.get("median", figures.get("mean"))
    if not low < middle < high:
        raise ValueError(f"the middle, {middle:g}, is not between the limits, {low:g} and {high:g}")
    ratios = [abs(np.log(value / middle) / FIGURES[name]) for name, value in figures.items() if FIGURES.get(name)]
    spread = max(float(np.mean(ratios)) if ratios else figures["sd"] / middle, 1e-4)
    start = [np.log(middle), np.log(spread), *([0.1] if shape is None else [])]

    def marginal(vector: np.ndarray) -> Marginal:
        return Marginal(
            shape if shape is not None else float(vector[2]),
            float(np.exp(vector[0])),
            float(np.exp(vector[1])),
            low,
            high,
        )

    def misfits(vector: np.ndarray) -> np.ndarray:
        found = marginal(vector)
        return np.nan_to_num(
            [np.log(found.figure(name) / value) for name, value in figures.items()], nan=9.0, posinf=9.0, neginf=-9.0
        )

    room = [5.0, 5.0, *([4.0] if shape is None else [])]
    bounds = ([at - by for at, by in zip(start, room)], [at + by for at, by in zip(start, room)])
    with np.errstate(all="ignore"):
        found = marginal(least_squares(misfits, start, bounds=bounds, xtol=1e-12, ftol=1e-12, gtol=1e-12).x)
        worst = max(abs(found.figure(name) / value - 1.0) for name, value in figures.items())
    if not worst <= MISFIT:
        printed = ", ".join(f"{name} {value:g}" for name, value in figures.items())
        kind = {1.0: "normal", 0.0: "lognormal", None: "Box-Cox"}[shape]
        nearest = ", ".join(f"{name} {found.figure(name):.4g}" for name in figures)
        raise ValueError(f"no {kind} distribution from {low:g} to {high:g} has {printed}; the nearest has {nearest}")
    if found.inside() < 0.5:
        raise ValueError(
            f"the limits, {low:g} to {high:g}, would cut off {100 * (1 - found.inside()):.0f} % of the people"
        )
    return found


@dataclass(frozen=True)
class Described:
    """A described population.

    female_share  share of women
    numbers       attribute -> its marginal in women and in men, the same one twice where both are described together
    switches      attribute -> share of people in whom it is true
    correlations  (attribute, attribute) -> correlation of their normal scores, as the study gives them
    """

    female_share: float
    numbers: Mapping[str, tuple[Marginal, Marginal]]
    switches: Mapping[str, float] = field(default_factory=dict)
    correlations: Mapping[tuple[str, str], float] = field(default_factory=dict)

    @cached_property
    def names(self) -> list[str]:
        """The normal numbers behind a person, in an order that a further variable does not change."""
        known = [name for name in ORDER if name in self.numbers]
        return ["male", *known, *sorted(self.numbers.keys() - set(known))]

    def attributes(self) -> list[str]:
        """All that these people bring."""
        return [*completed_names(["sex", *self.numbers]), *self.switches]

    @property
    def adults(self) -> bool:
        """Whether nobody can be a child; taken to be so where age is not described."""
        return "age" not in self.numbers or min(marginal.low for marginal in self.numbers["age"]) >= ADULT_YEARS

    def from_survey(self) -> dict[tuple[str, str], float]:
        """Correlations of adults that are taken from the survey because the study gives none."""
        if not self.adults:
            return {}
        mixed = 0.0 < self.female_share < 1.0
        apart = {name for name, (women, men) in self.numbers.items() if women is not men or not mixed}
        given = {frozenset(pair) for pair in self.correlations}
        found = {}
        for pair, value in TOGETHER.items():
            described = [name for name in pair if name != "male"]
            if not set(described) <= self.numbers.keys() or frozenset(pair) in given:
                continue
            if not apart & set(described):
                found[pair] = value
            elif pair in APART and set(described) <= apart:
                found[pair] = APART[pair]
        return {pair: value for pair, value in found.items() if value}

    @cached_property
    def factor(self) -> np.ndarray:
        """Lower triangular factor of the correlations; ValueError where they cannot hold together."""
        sds = dict.fromkeys(self.names, 1.0)
        return cholesky_factor(covariance_from(sds, {**self.from_survey(), **self.correlations}))

    def candidates(self, seed: int, block: int) -> dict[str, np.ndarray]:
        """One block of 8192 people: attribute -> (8192,) array, and `possible`, bool: False for who cannot be true."""
        from scipy.special import ndtri

        luck = self.factor @ np.stack([normals(seed, f"described.{name}", block) for name in self.names])
        female = luck[0] < ndtri(self.female_share)
        people = {"sex": np.where(female, "female", "male")}
        for name, numbers in zip(self.names[1:], luck[1:]):
            women, men = self.numbers[name]
            people[name] = (
                men.values(numbers) if women is men else np.where(female, women.values(numbers), men.values(numbers))
            )
        for name, share in self.switches.items():
            people[name] = uniforms(seed, f"described.{name}", block) < share
        people = completed(people)
        return people | {"possible": ~impossible(people)}
