"""Adults as a national household survey finds them: sex, age, height, weight and serum creatinine, drawn together.

Age and sex follow the population of the United States; height is normal at a given age and sex; body mass index follows
a Box-Cox distribution whose median and spread move with age; weight = body mass index x height squared; creatinine
follows age and sex, hardly size, with a long upper tail. The constants are in `tables/survey_constants.csv`, fitted to
the published tables beside it by `fit_survey.py`.

Source: Box-Cox distribution with median M, spread S and shape L (Cole and Green 1992, Stat Med 11:1305); figures from
National Center for Health Statistics, Series 3 no. 50 (2025), and the other tables named in `tables/`.
"""

from __future__ import annotations

import csv
from functools import lru_cache
from importlib import resources

import numpy as np

from popsim.streams import normals, uniforms

SEXES = ("male", "female")
YOUNGEST_YEARS, OLDEST_YEARS = 20.0, 100.0
BMI_LOWEST, BMI_HIGHEST = 12.0, 90.0  # nobody outside is drawn: the tables say nothing about the far tails

KNOT_AGES = (25.0, 35.0, 45.0, 55.0, 65.0, 75.0, 85.0)  # mid-decade; before and after them constants are held
THINNING_YEARS = 7.0  # from 80 years on, one in e of a cohort is left after this time: extrapolated openly

# Within sex and age. Source: NHANES 2017-2018, survey-weighted, age-adjusted correlation of ln BMI with height.
HEIGHT_BMI_CORRELATION = {"male": 0.07, "female": -0.05}
# Source: NHANES 2017-2018 (creatinine under 3 mg/dL, n 4,818): ln creatinine rises by 0.074 ln weight + 0.851 ln
# height; with weight = BMI x height^2 that is 0.074 ln BMI + 0.999 ln height.
CREATININE_ON_LN_BMI, CREATININE_ON_LN_HEIGHT = 0.074, 0.999
# Lengthens the upper tail only, by a cubic. Chosen so that beside the 95th percentiles, which are fitted, the robust SD
# of ln creatinine within sex and decade comes out as in NHANES 2017-2018 (0.15 in the twenties, 0.25 from seventy).
CREATININE_TAIL = 0.05


def candidates(
    seed: int, block: int, age_limits: tuple[float, float] | None = None, sex: str | None = None
) -> dict[str, np.ndarray]:
    """One block of 8192 candidates.

    seed, block  key to their luck (see `popsim.streams`)
    age_limits   closed interval of ages (years): drawn from the population within it, nobody wasted
    sex          "female" or "male", likewise

    Returns name -> (8192,) array: `sex` text, `age` years, `weight` kg, `height` cm, `bmi` kg/m2, `serum_creatinine`
    mg/dL, and `possible`, bool: False where the body mass index falls outside 12 to 90 kg/m2 or is not a number.
    Raises ValueError when no adult of 20 to 100 years is within the limits.

    >>> people = candidates(20261201, 0, age_limits=(60.0, 70.0), sex="female")
    >>> people["sex"][0].item(), round(people["age"][0].item(), 2), round(people["weight"][0].item(), 1)
    ('female', 67.15, 54.8)
    """
    female, age = person_of_luck(
        uniforms(seed, "survey.sex", block), uniforms(seed, "survey.age", block), age_limits, sex
    )
    luck = (normals(seed, f"survey.{name}", block) for name in ("height", "bmi", "serum_creatinine"))
    people = body_of_luck(constants(), female, age, *luck)
    bmi = people["bmi"]
    return {
        "sex": np.array(SEXES)[female.astype(np.int64)],
        "age": age,
        **people,
        "possible": (bmi >= BMI_LOWEST) & (bmi <= BMI_HIGHEST),
    }


def person_of_luck(
    sex_luck: np.ndarray, age_luck: np.ndarray, age_limits: tuple[float, float] | None = None, sex: str | None = None
) -> tuple[np.ndarray, np.ndarray]:
    """Sex (True = female) and age (years) of evenly spread numbers, (n,) each: exact within limits of age and sex."""
    ages, millions_below = population_below()
    low, high = age_limits or (YOUNGEST_YEARS, OLDEST_YEARS)
    start = [np.interp(low, ages, below) for below in millions_below]
    share = [np.interp(high, ages, below) - first for below, first in zip(millions_below, start)]
    if sex is not None:
        share[1 - SEXES.index(sex)] = 0.0
    if not sum(share) > 0:
        raise ValueError(f"the survey holds nobody of {low} to {high} years")
    female = sex_luck * sum(share) >= share[0]
    age = np.empty(len(female))
    for index, mask in enumerate((~female, female)):
        rank = start[index] + age_luck[mask] * share[index]
        # rounding in the interpolation must not carry anybody across a limit
        age[mask] = np.clip(np.interp(rank, millions_below[index], ages), low, high)
    return female, age


def body_of_luck(
    table: dict[str, np.ndarray],
    female: np.ndarray,
    age: np.ndarray,
    height_luck: np.ndarray,
    bmi_luck: np.ndarray,
    creatinine_luck: np.ndarray,
) -> dict[str, np.ndarray]:
    """Weight (kg), height (cm), body mass index (kg/m2) and serum creatinine (mg/dL) of standard normal numbers.

    table       constants as from `constants()`: name -> (14,), men's seven knots, then women's
    female, age (n,) bool and years
    Returns name -> (n,) float64. Where the Box-Cox distribution has no value the results are NaN or inf.
    """
    index = female.astype(np.int64)
    # one line for both sexes: men's knots, then women's a hundred years on; held outside the knots
    place = np.clip(age, KNOT_AGES[0], KNOT_AGES[-1]) + 100.0 * index
    knots = np.concatenate([np.array(KNOT_AGES), np.array(KNOT_AGES) + 100.0])
    at_age = {name: np.interp(place, knots, values) for name, values in table.items()}

    correlation = np.array([HEIGHT_BMI_CORRELATION[sex] for sex in SEXES])
    own_luck = np.sqrt(1.0 - correlation**2)
    bmi_luck = correlation[index] * height_luck + own_luck[index] * bmi_luck

    height = at_age["height_mean"] + at_age["height_sd"] * height_luck
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):  # such candidates are marked, see `possible`
        ln_bmi_ratio = box_cox_ln_ratio(at_age["bmi_shape"], at_age["bmi_spread"], bmi_luck)
        bmi = at_age["bmi_median"] * np.exp(ln_bmi_ratio)
        ln_creatinine_ratio = (
            at_age["creatinine_spread"] * (creatinine_luck + CREATININE_TAIL * np.maximum(creatinine_luck, 0.0) ** 3)
            + CREATININE_ON_LN_BMI * ln_bmi_ratio
            + CREATININE_ON_LN_HEIGHT * np.log(height / at_age["height_mean"])
        )
    return {
        "weight": bmi * (height / 100.0) ** 2,
        "height": height,
        "bmi": bmi,
        "serum_creatinine": at_age["creatinine_median"] * np.exp(ln_creatinine_ratio),
    }


def box_cox_ln_ratio(shape: np.ndarray, spread: np.ndarray, luck: np.ndarray) -> np.ndarray:
    """ln of value over median of a Box-Cox variable: ln(1 + L S z) / L, L = `shape` not 0, S = `spread`, z = `luck`.

    No unit; NaN or inf where 1 + L S z is not above 0.
    >>> round(float(np.exp(box_cox_ln_ratio(np.array(-0.5), np.array(0.2), np.array(1.0)))), 4)
    1.2346
    """
    return np.log1p(shape * spread * luck) / shape


@lru_cache(maxsize=1)
def constants() -> dict[str, np.ndarray]:
    """The fitted constants: name -> (14,) float64, the seven knots of the men, then of the women."""
    rows = read_table("survey_constants.csv")
    return {name: np.array([float(row[name]) for row in rows]) for name in rows[0] if name not in ("sex", "age")}


@lru_cache(maxsize=1)
def population_below() -> tuple[np.ndarray, tuple[np.ndarray, np.ndarray]]:
    """Ages (years) and, for men and for women, the millions of adults below each age."""
    rows = read_table("us_age_mix_2022.csv")
    old_years = np.arange(1.0, OLDEST_YEARS - 80.0 + 1.0)
    old_share = np.expm1(-old_years / THINNING_YEARS) / np.expm1(-old_years[-1] / THINNING_YEARS)
    ages = np.concatenate([np.arange(YOUNGEST_YEARS, 81.0, 10.0), 80.0 + old_years])
    below = []
    for sex in SEXES:
        *decades, oldest = [float(row["millions"]) for row in rows if row["sex"] == sex]
        to_80 = np.concatenate([[0.0], np.cumsum(decades)])
        below.append(np.concatenate([to_80, to_80[-1] + oldest * old_share]))
    return ages, (below[0], below[1])


def read_table(name: str) -> list[dict[str, str]]:
    """Rows of a table in `tables/`, as text; lines that begin with # name its source."""
    text = (resources.files("popsim.patients") / "tables" / name).read_text(encoding="utf-8")
    return list(csv.DictReader(line for line in text.splitlines() if not line.startswith("#")))
