"""Kidney equations against reference numbers, at their corners, and by property."""

import csv
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from covariates import body_size, kidney
from covariates.catalogue import EQUATIONS, compute
from covariates.problems import ProblemsError

PUBLISHED = Path(__file__).parents[1] / "published"
KIDNEY = sorted(name for name, equation in EQUATIONS.items() if equation.function.__module__ == "covariates.kidney")

people = st.fixed_dictionaries(
    {
        "weight": st.floats(40, 250),
        "height": st.floats(140, 210),
        "age": st.floats(18, 100),
        "serum_creatinine": st.floats(0.3, 12),
        "sex": st.sampled_from(["female", "male"]),
    }
)


def read(name):
    with open(PUBLISHED / name, encoding="utf-8") as file:
        return list(csv.DictReader(line for line in file if not line.startswith("#")))


# Reference numbers computed independently from the printed equations: tests/published/kidney.csv
@pytest.mark.parametrize("row", read("kidney.csv"), ids=lambda row: f"{row['covariate']}-{row['age']}-{row['sex']}")
def test_reference_numbers(row):
    attributes = {"serum_creatinine": float(row["serum_creatinine"]), "age": float(row["age"]), "sex": row["sex"]}
    if row["weight"]:
        attributes["weight"] = float(row["weight"])
    assert abs(compute(row["covariate"], attributes) - float(row["value"])) <= 0.005


# Cockcroft and Gault 1976 as printed: at 68 years, (140 - 68)/72 = 1 and clearance is weight over creatinine.
def test_cockcroft_gault_at_68_years():
    assert kidney.creatinine_clearance_cockcroft_gault(80, 68, 2.0, "male") == 40.0
    assert kidney.creatinine_clearance_cockcroft_gault(80, 68, 2.0, "female") == pytest.approx(0.85 * 40)


def test_each_cockcroft_gault_uses_the_weight_its_name_says():
    woman = {"weight": 120.0, "height": 165.0, "age": 40.0, "serum_creatinine": 1.1, "sex": "female"}
    # weights of this woman in tests/published/body_size.csv: devine 56.91, adjusted 82.15, janmahasatian 56.94 kg
    for suffix, weight in (("total", 120), ("ideal", 56.91), ("adjusted", 82.15), ("lean", 56.94)):
        expected = 0.85 * 100 * weight / (72 * 1.1)
        value = compute(f"creatinine_clearance_cockcroft_gault_{suffix}", woman)
        assert value == pytest.approx(expected, rel=1e-4), suffix


# CKD-EPI 2021 as printed: at SCr = kappa both powers are 1, and 1.012 is the factor for women.
@pytest.mark.parametrize(("sex", "kappa", "factor"), [("female", 0.7, 1.012), ("male", 0.9, 1.0)])
def test_ckd_epi_at_its_knot(sex, kappa, factor):
    assert kidney.egfr_ckd_epi_2021_per_1_73_m2(60, kappa, sex) == pytest.approx(142 * 0.9938**60 * factor, rel=1e-14)
    below, above = (kidney.egfr_ckd_epi_2021_per_1_73_m2(60, kappa * step, sex) for step in (1 - 1e-9, 1 + 1e-9))
    assert below == pytest.approx(above, rel=1e-8)


# Du Bois surface 2.324 m2 of a man of 120 kg and 175 cm, and 91.69 mL/min/1.73 m2: both in tests/published.
def test_absolute_filtration_is_that_of_the_whole_person():
    man = {"weight": 120.0, "height": 175.0, "age": 50.0, "serum_creatinine": 1.0, "sex": "male"}
    assert compute("egfr_ckd_epi_2021_absolute", man) == pytest.approx(91.69 * 2.324 / 1.73, rel=3e-4)
    assert kidney.egfr_ckd_epi_2021_absolute(60.0, 1.73) == pytest.approx(60.0)


# The printed form by hand: man (137 - 50)(0.285 x 120 + 12.1 x 1.75^2)/(51 x 1.0) = 87 x 71.25625 / 51;
# woman (146 - 50)(0.287 x 120 + 9.74 x 1.65^2)/(60 x 1.0) = 96 x 60.95715 / 60.
def test_salazar_corcoran_by_hand():
    man = kidney.creatinine_clearance_salazar_corcoran(120, 175, 50, 1.0, "male")
    woman = kidney.creatinine_clearance_salazar_corcoran(120, 165, 50, 1.0, "female")
    assert man == pytest.approx(87 * 71.25625 / 51, rel=1e-12)
    assert woman == pytest.approx(96 * 60.95715 / 60, rel=1e-12)


@given(people, st.floats(1.01, 3))
def test_fall_with_creatinine_and_stay_positive(person, factor):
    worse = person | {"serum_creatinine": person["serum_creatinine"] * factor}
    for name in KIDNEY:
        assert 0 < compute(name, worse) < compute(name, person), name


@given(people)
def test_array_equals_scalar(person):
    columns = {name: np.array([value, value]) for name, value in person.items()}
    for name in KIDNEY:
        together, alone = compute(name, columns), compute(name, person)
        assert together.dtype == np.float64 and isinstance(alone, np.float64)
        np.testing.assert_allclose(together, [alone, alone], rtol=1e-14)


def test_creatinine_in_umol_per_l_is_refused():
    for name in KIDNEY:
        with pytest.raises(ProblemsError, match="umol/L"):
            compute(name, {"weight": 70.0, "height": 170.0, "age": 40.0, "serum_creatinine": 80.0, "sex": "male"})


def test_a_negative_ideal_weight_gives_no_clearance():
    child = {"weight": 14.0, "height": 95.0, "age": 3.0, "serum_creatinine": 0.3, "sex": "male"}
    assert body_size.ideal_body_weight_devine(95, "male") < 0
    with pytest.raises(ProblemsError, match="gault_ideal: ideal_body_weight_devine"):
        compute("creatinine_clearance_cockcroft_gault_ideal", child)
