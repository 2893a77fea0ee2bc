"""Adults as a national household survey finds them: sex, age, height, weight and serum creatinine, drawn together.

Age and sex follow the population of the United States; height is normal at a given age and sex; body mass index follows
a Box-Cox distribution whose median and spread move with age; weight = body mass index x height squared; creatinine
follows age and sex, hardly size, with a long upper tail. The constants are in `tables/survey_constants.csv`, fitted to
the published tables beside it by `fit_survey.py`.

Source: Box-Cox distribution with median M, spread S and shape L (Cole and Green 1992, Stat Med 11:1305); figures from
National Center for Health Statistics, Series 3 no. 50 (2025), and the other tables named in `tables/`.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np

from popsim.patients.ages import SEXES, AgeCurve, person_of_luck, read_table
from popsim.streams import normals, uniforms

BMI_LOWEST, BMI_HIGHEST = 12.0, 90.0  # nobody outside is drawn: the tables say nothing about the far tails

KNOT_AGES = (25.0, 35.0, 45.0, 55.0, 65.0, 75.0, 85.0)  # mid-decade; before and after them constants are held

# Within sex and age. Source: NHANES 2017-2018, survey-weighted, age-adjusted correlation of ln BMI with height.
HEIGHT_BMI_CORRELATION = {"male": 0.07, "female": -0.05}
# Source: NHANES 2017-2018 (creatinine under 3 mg/dL, n 4,818): ln creatinine rises by 0.074 ln weight + 0.851 ln
# height; with weight = BMI x height^2 that is 0.074 ln BMI + 0.999 ln height.
CREATININE_ON_LN_BMI, CREATININE_ON_LN_HEIGHT = 0.074, 0.999
# Lengthens the upper tail only, by a cubic. Chosen so that beside the 95th percentiles, which are fitted, the robust SD
# of ln creatinine within sex and decade comes out as in NHANES 2017-2018 (0.15 in the twenties, 0.25 from seventy).
CREATININE_TAIL = 0.05


def candidates(
    seed: int,
    block: int,
    age_limits: tuple[float, float] | None = None,
    sex: str | None = None,
    curve: AgeCurve | None = None,
) -> dict[str, np.ndarray]:
    """One block of 8192 candidates.

    seed, block  key to their luck (see `popsim.streams`)
    age_limits   closed interval of ages (years): drawn from the population within it, nobody wasted
    sex          "female" or "male", likewise
    curve        how ages and sexes are mixed; the nation's if not given

    Returns name -> (8192,) array: `sex` text, `age` years, `weight` kg, `height` cm, `bmi` kg/m2, `serum_creatinine`
    mg/dL, and `possible`, bool: False where the body mass index falls outside 12 to 90 kg/m2 or is not a number.
    Raises ValueError when no adult of 20 to 100 years is within the limits.

    >>> people = candidates(20261201, 0, age_limits=(60.0, 70.0), sex="female")
    >>> people["sex"][0].item(), round(people["age"][0].item(), 2), round(people["weight"][0].item(), 1)
    ('female', 67.15, 54.8)
    """
    female, age = person_of_luck(
        uniforms(seed, "survey.sex", block), uniforms(seed, "survey.age", block), age_limits, sex, curve
    )
    luck = (normals(seed, f"survey.{name}", block) for name in ("height", "bmi", "serum_creatinine"))
    return adults(female, age, body_of_luck(constants(), female, age, *luck))


def adults(female: np.ndarray, age: np.ndarray, body: dict[str, np.ndarray]) -> dict[str, np.ndarray]:
    """The candidates of `candidates`, of their parts."""
    possible = (body["bmi"] >= BMI_LOWEST) & (body["bmi"] <= BMI_HIGHEST)
    return {"sex": np.array(SEXES)[female.astype(np.int64)], "age": age, **body, "possible": possible}


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
    at_age = constants_at(table, female, age)
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


def constants_at(table: dict[str, np.ndarray], female: np.ndarray, age: np.ndarray) -> dict[str, np.ndarray]:
    """The constants of each person, (n,) each."""
    # one line for both sexes: men's knots, then women's a hundred years on; held outside the knots
    place = np.clip(age, KNOT_AGES[0], KNOT_AGES[-1]) + 100.0 * female
    knots = np.concatenate([np.array(KNOT_AGES), np.array(KNOT_AGES) + 100.0])
    return {name: np.interp(place, knots, values) for name, values in table.items()}


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
