"""How fast patients are drawn, in seconds of one processor, with six lognormal parameters; and the memory it needs.

Run `python tests/benchmarks/patients.py`; figures drift from machine to machine.
"""

from __future__ import annotations

import time
import tracemalloc
from dataclasses import replace

import numpy as np

from covariates.sheet import read_sheet
from popsim.lookup import Lookup
from popsim.parameters import individual_parameters, random_effects
from popsim.patients.described import Described, fit_marginal
from popsim.patients.draw import blocks
from popsim.patients.population import Population
from popsim.study_records import Variability

COUNT = 1_000_000
SIX = ("V1", "V2", "V3", "CL", "Q2", "Q3")


def described() -> Described:
    age, height = (
        fit_marginal(figures, low, high, 1.0)
        for figures, low, high in (
            ({"mean": 64.0, "sd": 11.0}, 18.0, 95.0),
            ({"mean": 170.0, "sd": 10.0}, 100.0, 250.0),
        )
    )
    weight = fit_marginal({"median": 88.0, "p25": 75.0, "p75": 103.0}, 30.0, 300.0, None)
    return Described(0.45, {"age": (age, age), "height": (height, height), "weight": (weight, weight)})


def main() -> None:
    minto = read_sheet("remifentanil_minto_1997")
    six = replace(minto, printed_spread={name: minto.printed_spread[name] for name in SIX})
    own = Variability(True, 1.0, None)
    populations = {
        "survey": Population("survey", COUNT),
        "women over 80, BMI 45 and over": Population(
            "survey", COUNT, limits={"age": (80.0, np.inf), "bmi": (45.0, np.inf)}, sex="female"
        ),
        "described": Population("described", COUNT, described=described()),
    }
    for name, population in populations.items():
        for what in ("patients", "and six random effects", "and six individual parameters"):
            started = time.process_time()
            for patients in blocks(population, 1):
                if what == "and six random effects":
                    {one: np.exp(effect) for one, effect in random_effects(six, own, 1, patients).items()}
                elif what == "and six individual parameters":
                    individual_parameters(six, own, 1, patients, Lookup(patients.attributes))
            rate = COUNT / (time.process_time() - started) / 1e6
            print(f"{name:<32}{what:<32}{rate:6.2f} million a second")
    for count in (100_000, 1_000_000):
        tracemalloc.start()
        for patients in blocks(Population("survey", count), 1):
            random_effects(six, own, 1, patients)
        print(f"{count:>9,} patients: {tracemalloc.get_traced_memory()[1] / 2**20:.1f} MB at most")
        tracemalloc.stop()


if __name__ == "__main__":
    main()
