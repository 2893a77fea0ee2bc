"""Writes the three files of this demo. Nobody was measured: people are drawn from the survey, levels are simulated.

The levels come from propofol_eleveld_2018 with its between-subject variability and a measurement error of 15 %, so the
right answer is known. Run it from this folder: python make.py
"""

from __future__ import annotations

from pathlib import Path

import numpy as np

from covariates.sheet import read_sheet
from popsim import solve
from popsim.lookup import Lookup
from popsim.parameters import individual_parameters
from popsim.patients.draw import blocks
from popsim.patients.population import Population
from popsim.records import Timeline
from popsim.streams import normals
from popsim.study_records import Variability

SEED, PEOPLE, ERROR = 20261201, 36, 0.15
TIMES = (2.0, 5.0, 10.0, 20.0, 30.0, 45.0, 60.0, 75.0, 90.0)
HERE = Path(__file__).parent


def main() -> None:
    population = Population("survey", PEOPLE, limits={"age": (25.0, 88.0), "bmi": (18.5, 50.0)},
                            set={"opioid": True, "venous_sampling": False})
    patients = next(blocks(population, SEED))
    people = {name: np.round(patients.attributes[name], 1) for name in ("age", "weight", "height")}
    people |= {name: patients.attributes[name] for name in ("sex", "opioid", "venous_sampling")}
    lookup = Lookup(people)
    published = Variability(between_subject=True, scale=1.0, from_model=None)
    drawn = individual_parameters(read_sheet("propofol_eleveld_2018"), published, SEED, patients, lookup)
    bolus = np.round(1.5 * people["weight"] / 10) * 10
    rate = np.round(6 * people["weight"] / 10) * 10 / 60
    events = Timeline(np.tile([0.0, 0.5, 60.0], (PEOPLE, 1)), np.zeros((PEOPLE, 3)),
                      np.stack([bolus / 0.5 + rate, rate, np.zeros(PEOPLE)], axis=1))
    plasma, _ = solve.courses_on_grid(solve.disposition(drawn.values), events, np.array(TIMES))
    noise = np.stack([normals(SEED, f"demo error {k}", 0)[:PEOPLE] for k in range(len(TIMES))], axis=1)
    levels = plasma * np.exp(ERROR * noise)
    names = [f"p{k:02d}" for k in range(1, PEOPLE + 1)]
    _write("people.csv", "patient,sex,age,weight,height,opioid,venous_sampling", (
        f"{name},{people['sex'][i]},{people['age'][i]:g},{people['weight'][i]:g},{people['height'][i]:g},true,false"
        for i, name in enumerate(names)))
    _write("given.csv", "patient,at,amount,over,rate,until", (
        line for i, name in enumerate(names)
        for line in (f"{name},0 min,{bolus[i]:g} mg,30 s,,", f"{name},0 min,,,{rate[i] * 60:g} mg/h,60 min")))
    _write("measured.csv", "patient,at,quantity,value", (
        f"{name},{time:g} min,plasma,{levels[i, k]:.3g} ug/mL"
        for i, name in enumerate(names) for k, time in enumerate(TIMES)))


def _write(name: str, header: str, lines) -> None:
    (HERE / name).write_text("\n".join([header, *lines]) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
