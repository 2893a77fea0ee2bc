"""Fits the constants of `survey.py` to the published tables. For developers: needs scipy.

Run `python -m popsim.patients.fit_survey` and store what it prints as `tables/survey_constants.csv`. Everything is
fitted through the very functions that draw the patients, at an even (Sobol) set of points in place of random numbers,
so the same tables give the same constants.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from popsim.patients import survey
from popsim.patients.ages import OLDEST_YEARS, SEXES, person_of_luck, read_table

BANDS = ("20-29", "30-39", "40-49", "50-59", "60-69", "70-79", "80+")
PERCENTS = (5, 10, 15, 25, 50, 75, 85, 90, 95)
POINTS_LOG2 = 11  # points for one sex and decade
ROUGHNESS_WEIGHT = 1.0  # how much a bend between three knots counts against a misfit of one percentile
FITTED = ("height_mean", "height_sd", "bmi_shape", "bmi_median", "bmi_spread", "creatinine_median", "creatinine_spread")
HEADER = """\
# Constants of the survey generator, one row for each sex and knot of age (years), interpolated linearly in between.
# height_mean, height_sd cm; bmi_median kg/m2; bmi_shape, bmi_spread (Box-Cox) no unit; creatinine_median mg/dL;
# creatinine_spread SD of ln below the median.
# Source: fitted by popsim.patients.fit_survey to us_adults_2021_2023.csv, us_age_mix_2022.csv and us_creatinine.csv.
"""


def fit() -> dict[str, np.ndarray]:
    """All constants: name -> (14,) float64, seven knots of the men, then of the women."""
    fitted = [fit_sex(sex) for sex in SEXES]
    return {name: np.concatenate([one[name] for one in fitted]) for name in FITTED}


def fit_sex(sex: str) -> dict[str, np.ndarray]:
    """The constants of one sex: name -> (7,). Heights first, then body mass index, then creatinine."""
    height, bmi, weight = (_percentiles(measure, sex) for measure in ("height_cm", "bmi_kg_m2", "weight_kg"))
    creatinine = _creatinine_percentiles(sex)
    search = _Search(
        people=[_even_people(sex, band) for band in BANDS],
        table={
            "height_mean": height[:, PERCENTS.index(50)],
            "height_sd": np.full(7, 7.0),
            "bmi_shape": np.full(7, -0.6),
            "bmi_median": bmi[:, PERCENTS.index(50)],
            "bmi_spread": np.full(7, 0.22),
            "creatinine_median": creatinine[:, 0],
            "creatinine_spread": np.log(creatinine[:, 1] / creatinine[:, 0]) / 2.0,
        },
    )
    search.fit(("height_mean", "height_sd"), {"height": (PERCENTS, height)})
    search.fit(("bmi_shape", "bmi_median", "bmi_spread"), {"bmi": (PERCENTS, bmi), "weight": (PERCENTS, weight)})
    search.fit(("creatinine_median", "creatinine_spread"), {"serum_creatinine": ((50, 95), creatinine)})
    return search.table


@dataclass
class _Search:
    """Least squares over some constants of `table` at a time, the others held; start values in, fitted values out."""

    people: list[tuple[np.ndarray, ...]]
    table: dict[str, np.ndarray]

    def fit(self, names: tuple[str, ...], wanted: dict[str, tuple[tuple[int, ...], np.ndarray]]) -> None:
        """Fit the named constants to attribute -> (percents, published percentiles by decade)."""
        from scipy.optimize import least_squares

        sizes = [1 if name == "bmi_shape" else 7 for name in names]  # one shape for all ages
        start = np.concatenate([self.table[name][:size] for name, size in zip(names, sizes)])

        def put(vector: np.ndarray) -> None:
            parts = np.split(vector, np.cumsum(sizes)[:-1])
            self.table.update({name: np.broadcast_to(part, 7) for name, part in zip(names, parts)})

        def residuals(vector: np.ndarray) -> np.ndarray:
            put(vector)
            bends = [np.diff(_effect(name, self.table[name]), 2) for name in names]
            return np.concatenate([*self._misfits(wanted), ROUGHNESS_WEIGHT * np.concatenate(bends)])

        put(least_squares(residuals, start, x_scale=np.abs(start), diff_step=1e-4).x)

    def _misfits(self, wanted: dict[str, tuple[tuple[int, ...], np.ndarray]]) -> Iterator[np.ndarray]:
        """ln of drawn over published percentiles; one that the tables leave blank says nothing."""
        both = {name: np.concatenate([values, values]) for name, values in self.table.items()}
        bodies = [survey.body_of_luck(both, *some) for some in self.people]
        for name, (percents, published) in wanted.items():
            drawn = np.array([_smooth_percentiles(body[name], percents) for body in bodies])
            yield np.log(drawn / published)[np.isfinite(published)]


def as_csv(table: dict[str, np.ndarray]) -> str:
    """The text of `tables/survey_constants.csv`, five digits."""
    lines = [",".join(("sex", "age", *FITTED))]
    for row in range(14):
        figures = [f"{table[name][row]:.5g}" for name in FITTED]
        lines.append(",".join([SEXES[row // 7], f"{survey.KNOT_AGES[row % 7]:.0f}", *figures]))
    return HEADER + "\n".join(lines) + "\n"


def _even_people(sex: str, band: str) -> tuple[np.ndarray, ...]:
    """Sex, age and the three normal numbers of people of one sex and decade, spread evenly over all there are."""
    from scipy.special import ndtri
    from scipy.stats import qmc

    even = qmc.Sobol(4, scramble=False).random_base2(POINTS_LOG2).T + 0.5**(POINTS_LOG2 + 1)
    limits = (80.0, OLDEST_YEARS) if band == "80+" else (float(band[:2]), float(band[:2]) + 10.0)
    female, age = person_of_luck(np.full(2**POINTS_LOG2, 0.5), even[0], limits, sex)
    return female, age, *ndtri(even[1:])


def _smooth_percentiles(values: np.ndarray, percents: tuple[int, ...]) -> np.ndarray:
    """Percentiles averaged over 1 % to either side: a single point says which way one person of one age would move,
    and a search that follows single points stalls."""
    nearby = np.add.outer(percents, np.linspace(-1.0, 1.0, 41))
    return np.percentile(values, nearby).mean(axis=1)


def _effect(name: str, values: np.ndarray) -> np.ndarray:
    """Constants on the scale on which they move ln of a percentile, so that their bends can be weighed together."""
    if name.startswith("height"):
        return values / 170.0
    return np.log(values) if name.endswith("median") else values


def _percentiles(measure: str, sex: str) -> np.ndarray:
    """(7, 9) published percentiles by decade; NaN where the report prints none."""
    rows = {
        row["age_band"]: row
        for row in read_table("us_adults_2021_2023.csv")
        if row["measure"] == measure and row["sex"] == sex
    }
    return np.array([[float(rows[band][f"p{percent}"] or "nan") for percent in PERCENTS] for band in BANDS])


def _creatinine_percentiles(sex: str) -> np.ndarray:
    """(7, 2) median and 95th percentile by decade; ratios that the table leaves blank lie between their neighbours."""
    rows = [row for row in read_table("us_creatinine.csv") if row["sex"] == sex]
    medians = np.array([float(row["median"]) for row in rows])
    ln_ratios = np.log([float(row["p95_over_median"] or "nan") for row in rows])
    known = np.isfinite(ln_ratios)
    ages = np.array(survey.KNOT_AGES)
    return np.column_stack([medians, medians * np.exp(np.interp(ages, ages[known], ln_ratios[known]))])


if __name__ == "__main__":
    print(as_csv(fit()), end="")
