"""Rare corners of the survey, such as women over 80 with a body mass index over 45: drawn from the same distribution as
everybody, given that they lie within limits of height, weight and body mass index, but without drawing everybody.

Sex, age and height are cut into cells. In each, a bound on the share whose body mass index can lie within the limits
follows from the cell's edges alone, since all constants move in straight lines within it. A cell is drawn by its people
times its bound, a person within the cell, and that person is kept with probability true share over bound; the body mass
index then comes from its distribution between the limits. The result is exact, whatever the bounds: they save work.

Source: rejection from a piecewise constant envelope, and inversion of the normal distribution (textbook methods).
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from popsim.patients import survey
from popsim.patients.ages import OLDEST_YEARS, SEXES, YOUNGEST_YEARS, AgeCurve
from popsim.streams import normals, uniforms

HEIGHT_EDGES = np.arange(-8.0, 8.25, 0.25)  # SDs of height; beyond lies one in 10**15
EVERYTHING = (-np.inf, np.inf)


class Corner:
    """The adults within limits of height (cm), weight (kg) and bmi (kg/m2), age (years) and sex.

    share   bound on how many of the adults within the limits of age and sex are within the others too: 0 to 1
    """

    def __init__(
        self,
        limits: Mapping[str, tuple[float, float]],
        curve: AgeCurve,
        age_limits: tuple[float, float] | None = None,
        sex: str | None = None,
    ):
        self._height, self._weight = (limits.get(name, EVERYTHING) for name in ("height", "weight"))
        low, high = limits.get("bmi", EVERYTHING)
        self._bmi = max(low, survey.BMI_LOWEST), min(high, survey.BMI_HIGHEST)
        self._make_cells(curve, age_limits or (YOUNGEST_YEARS, OLDEST_YEARS), sex)

    def _make_cells(self, curve: AgeCurve, age_limits: tuple[float, float], sex: str | None) -> None:
        from scipy.special import ndtr

        # whole years, so that the constants are straight lines within a cell; the curve's own ages, so that it is too
        whole_years = np.arange(YOUNGEST_YEARS, OLDEST_YEARS + 1.0)
        ages = np.unique(np.clip(np.concatenate([whole_years, curve.ages, age_limits]), *age_limits))
        people = np.array([np.diff(np.interp(ages, curve.ages, below)) for below in curve.below])
        if sex is not None:
            people[1 - SEXES.index(sex)] = 0.0
        cells = np.meshgrid(np.arange(2), np.arange(len(ages) - 1), np.arange(len(HEIGHT_EDGES) - 1), indexing="ij")
        index, year, step = (axis.ravel() for axis in cells)
        self._female, self._age = index == 1, (ages[year], ages[year + 1])
        self._step = HEIGHT_EDGES[step], HEIGHT_EDGES[step + 1]
        self._bound = self._bounds()
        in_cell = people[index, year] * (ndtr(self._step[1]) - ndtr(self._step[0]))
        self._upto = np.cumsum(in_cell * self._bound)
        self.share = float(self._upto[-1] / people.sum())

    def _bounds(self) -> np.ndarray:
        """For each cell a bound on the share of its people whose body mass index is within the limits."""
        ends = [survey.constants_at(survey.constants(), self._female, age) for age in self._age]
        heights = np.array(
            [at["height_mean"] + at_sd["height_sd"] * step for at in ends for at_sd in ends for step in self._step]
        )
        shortest, tallest = (np.clip(edge, *self._height) for edge in (heights.min(axis=0), heights.max(axis=0)))
        possible = (heights.min(axis=0) <= self._height[1]) & (heights.max(axis=0) >= self._height[0])
        low, high = self._bmi_within(tallest)[0], self._bmi_within(shortest)[1]
        luck = [
            [
                _own_luck(bmi, {**at, "bmi_spread": at_spread["bmi_spread"]}, self._female, step)
                for at in ends
                for at_spread in ends
                for step in self._step
            ]
            for bmi in (low, high)
        ]
        return np.where(possible & (low < high), _share_between(np.min(luck[0], axis=0), np.max(luck[1], axis=0)), 0.0)

    def _bmi_within(self, height: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """The body mass indices that people of this height (cm) may have."""
        square = (height / 100.0) ** 2
        return (np.maximum(self._bmi[0], self._weight[0] / square), np.minimum(self._bmi[1], self._weight[1] / square))

    def candidates(self, seed: int, block: int) -> dict[str, np.ndarray]:
        """One block of 8192 candidates, as `survey.candidates` gives them; those not kept are not `possible`.

        Raises ValueError when nobody can be within the limits.
        """
        if not self.share > 0:
            raise ValueError("nobody can be within these limits")
        luck = {
            name: uniforms(seed, f"survey.corner.{name}", block) for name in ("cell", "age", "height", "keep", "bmi")
        }
        cell = np.searchsorted(self._upto, luck["cell"] * self._upto[-1], side="right")
        cell = np.minimum(cell, len(self._upto) - 1)  # rounding must not lead beyond the last cell
        female, (young, old) = self._female[cell], (edge[cell] for edge in self._age)
        age = np.clip(young + luck["age"] * (old - young), young, old)
        height_luck = _between(*(edge[cell] for edge in self._step), luck["height"])

        at_age = survey.constants_at(survey.constants(), female, age)
        height = at_age["height_mean"] + at_age["height_sd"] * height_luck
        low, high = (_own_luck(bmi, at_age, female, height_luck) for bmi in self._bmi_within(height))
        kept = luck["keep"] * self._bound[cell] < _share_between(low, high)
        kept &= (height >= self._height[0]) & (height <= self._height[1])
        bmi_luck = _between(np.where(kept, low, -1.0), np.where(kept, high, 1.0), luck["bmi"])
        creatinine_luck = normals(seed, "survey.serum_creatinine", block)
        body = survey.body_of_luck(survey.constants(), female, age, height_luck, bmi_luck, creatinine_luck)
        people = survey.adults(female, age, body)
        people["possible"] &= kept
        return people


def _own_luck(bmi: np.ndarray, at_age: dict[str, np.ndarray], female: np.ndarray, height_luck) -> np.ndarray:
    """The normal number that gives this body mass index beside this height: what `survey.body_of_luck` undoes."""
    correlation = np.array([survey.HEIGHT_BMI_CORRELATION[sex] for sex in SEXES])[female.astype(np.int64)]
    shape = at_age["bmi_shape"]
    marginal = np.expm1(shape * np.log(bmi / at_age["bmi_median"])) / (shape * at_age["bmi_spread"])
    return (marginal - correlation * height_luck) / np.sqrt(1.0 - correlation**2)


def _share_between(low: np.ndarray, high: np.ndarray) -> np.ndarray:
    """Share of a standard normal variable between two numbers, exact in both tails; 0 where they are out of order."""
    from scipy.special import ndtr

    flipped = low > 0
    lower, upper = np.where(flipped, -high, low), np.where(flipped, -low, high)
    return np.where(low < high, ndtr(upper) - ndtr(lower), 0.0)


def _between(low: np.ndarray, high: np.ndarray, evenly: np.ndarray) -> np.ndarray:
    """Standard normal numbers between two numbers, of evenly spread ones; exact in both tails."""
    from scipy.special import ndtr, ndtri

    flipped = low > 0
    lower, upper = np.where(flipped, -high, low), np.where(flipped, -low, high)
    rank = ndtr(lower) + evenly * (ndtr(upper) - ndtr(lower))
    number = np.where(flipped, -1.0, 1.0) * ndtri(rank)
    return np.clip(number, low, high)
