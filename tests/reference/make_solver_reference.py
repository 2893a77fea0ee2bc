"""Writes solver_reference.csv: plasma and effect site rounded to the nearest double.

The linear system (three compartments, effect site, depot, constant input) goes through mpmath's matrix exponential at
150 digits, without hybrid rates or weights: nothing is shared with popsim.
Run: python make_solver_reference.py FILE [SETS]: 1,000 parameter sets unless SETS says otherwise; about 0.1 s a set.
Every set has luck of its own: a longer file begins, in each family, with the sets of a shorter one.
"""

from __future__ import annotations

import csv
import math
import random
import sys
from collections.abc import Iterator

import mpmath as mp

DIGITS = 150
COLUMNS = ["family", "set", "V1", "CL", "V2", "Q2", "V3", "Q3", "ke0", "ka", "bolus_mg", "oral_mg",
           "rate_mg_per_min", "until_min", "time_min", "plasma", "effect_site"]  # fmt: skip
NAMES = COLUMNS[2:10]
SETS = 1000
TIMES_PER_SET = 3


def rate_matrix(p: dict[str, float]) -> mp.matrix:
    """d/dt of (C1, C2, C3, Ce, depot, input rate), the mass balances written down as they stand."""
    v1, cl, v2, q2, v3, q3, ke0, ka = (mp.mpf(p[name]) for name in NAMES)
    return mp.matrix([
        [-(cl + q2 + q3) / v1, q2 / v1, q3 / v1, 0, ka / v1, 1 / v1],
        [q2 / v2, -q2 / v2, 0, 0, 0, 0],
        [q3 / v3, 0, -q3 / v3, 0, 0, 0],
        [ke0, 0, 0, -ke0, 0, 0],
        [0, 0, 0, 0, -ka, 0],
        [0, 0, 0, 0, 0, 0],
    ])  # fmt: skip


def course(p: dict[str, float], bolus: float, oral: float, rate: float, until: float,
           time: float) -> tuple[float, float]:  # fmt: skip
    """Plasma and effect site at `time` after a bolus and a dose in the depot at 0 and an infusion from 0 to `until`."""
    with mp.workdps(DIGITS):
        matrix = rate_matrix(p)
        state = mp.matrix([mp.mpf(bolus) / mp.mpf(p["V1"]), 0, 0, 0, oral, rate])
        first = min(time, until)
        state = mp.expm(matrix * mp.mpf(first)) * state
        if time > until:
            state[5] = 0
            state = mp.expm(matrix * (mp.mpf(time) - mp.mpf(until))) * state
        return float(state[0]), float(state[3])


def hybrid_rates(p: dict[str, float]) -> list[float]:
    """Eigenvalues of the three compartments, ascending: only to choose awkward sets and sensible times."""
    with mp.workdps(DIGITS):
        values, _ = mp.eig(-rate_matrix(p)[:3, :3])
        return sorted(abs(float(mp.re(value))) for value in values)


def log_uniform(luck: random.Random, low: float, high: float) -> float:
    return 10.0 ** luck.uniform(low, high)


def shipped_like(luck: random.Random, number: int) -> dict[str, float]:
    """Of the size of published anaesthetic and antibiotic models; every third with fewer compartments."""
    p = {"V1": luck.uniform(2, 20), "CL": luck.uniform(0.05, 3), "V2": luck.uniform(5, 50), "Q2": luck.uniform(0.1, 3),
         "V3": luck.uniform(20, 400), "Q3": luck.uniform(0.05, 2), "ke0": luck.uniform(0.05, 1), "ka": 0.0}  # fmt: skip
    if number % 3 == 0:
        p["Q3"] = 0.0
    if number % 6 == 0:
        p["Q2"] = 0.0
    return p


def twelve_decades(luck: random.Random, number: int) -> dict[str, float]:
    """Volumes and flows over six decades each: rates over twelve."""
    p = {name: log_uniform(luck, -6, 6) if name == "ke0" else log_uniform(luck, -3, 3) for name in NAMES}
    return {**p, "ka": 0.0}


def near_coincident(luck: random.Random, number: int) -> dict[str, float]:
    """ke0 on or beside a hybrid rate; in half of the sets k31 on or beside k21 as well."""
    p = shipped_like(luck, 1)
    aside = [0.0, 1e-15, 1e-13, 1e-11, 1e-9, 1e-7, 1e-5, 1e-3][number % 8]
    if number % 2:
        p["V3"] = p["Q3"] / (p["Q2"] / p["V2"]) * (1 + aside)
    p["ke0"] = hybrid_rates(p)[number % 3] * (1 + aside)
    return p


def tiny_flow(luck: random.Random, number: int) -> dict[str, float]:
    """A compartment that hardly exchanges; often with its rate on or beside CL/V1, and ke0 there too."""
    p = shipped_like(luck, 1)
    p["Q3"] = p["CL"] * log_uniform(luck, -20, -6)
    p["V3"] = p["Q3"] / log_uniform(luck, -3, 1)
    if number % 2:
        p["V3"] = p["Q3"] * p["V1"] / p["CL"] * (1 + luck.choice([0.0, 1e-12, 1e-6]))
    if number % 3 == 0:
        p["Q2"] = p["CL"] * log_uniform(luck, -20, -6)
    if number % 5 == 0:
        p["ke0"] = p["CL"] / p["V1"]
    return p


def meeting(luck: random.Random, number: int) -> dict[str, float]:
    """Two compartments that hardly exchange, both with their rate beside CL/V1, closer than they can be told apart."""
    p = shipped_like(luck, 1)
    elimination = p["CL"] / p["V1"]
    for flow, volume in (("Q2", "V2"), ("Q3", "V3")):
        p[flow] = p["CL"] * log_uniform(luck, -16, -2)
        apart = luck.choice([0.0, 1e-15, 1.0, 1.0]) * luck.uniform(-2, 2) * (p[flow] / p["CL"]) ** 0.5
        p[volume] = p[flow] / (elimination * (1 + min(apart, 0.5)))
    p["ke0"] = elimination * (1 + luck.choice([0.0, 1e-12, 1e-6]))
    return p


def absorbed(luck: random.Random, number: int) -> dict[str, float]:
    """Taken by mouth; ka of the size of published models."""
    return {**shipped_like(luck, number), "ka": log_uniform(luck, -3, 0)}


def absorbed_decades(luck: random.Random, number: int) -> dict[str, float]:
    """Taken by mouth, all rates over twelve decades."""
    return {**twelve_decades(luck, number), "ka": log_uniform(luck, -6, 6)}


def absorbed_coincident(luck: random.Random, number: int) -> dict[str, float]:
    """ka on or beside a hybrid rate; in two of three sets ke0 beside it too, and often k31 beside k21."""
    p = near_coincident(luck, number)
    aside = luck.choice([0.0, 1e-15, 1e-13, 1e-11, 1e-9, 1e-7, 1e-5, 1e-3])
    p["ka"] = hybrid_rates(p)[(number if number % 3 else number + 1) % 3] * (1 + aside)
    return p


FAMILIES = {family.__name__: family for family in (
    shipped_like, twelve_decades, near_coincident, tiny_flow, meeting, absorbed, absorbed_decades,
    absorbed_coincident)}  # fmt: skip


def rows(sets: int) -> Iterator[list[str]]:
    for name, family in FAMILIES.items():
        for number in range(sets // len(FAMILIES)):
            luck = random.Random(f"{name} {number}")
            p = family(luck, number)
            rates = [rate for rate in hybrid_rates(p) if rate > 1e-30]
            slowest = min(rates[0], p["ke0"], p["ka"] or math.inf)
            low, high = math.log10(0.01 / max(rates)), math.log10(10 / slowest)
            times = sorted(log_uniform(luck, low, high) for _ in range(TIMES_PER_SET))
            bolus, rate, until = [(100.0, 0.0, 0.0), (0.0, 10.0, times[1] * 0.9), (100.0, 10.0, times[0])][number % 3]
            oral = 100.0 if p["ka"] > 0 else 0.0
            if oral > 0 and number % 2:
                bolus, rate, until = 0.0, 0.0, 0.0
            for time in times:
                values = course(p, bolus, oral, rate, until, time)
                numbers = [*p.values(), bolus, oral, rate, until, time, *values]
                yield [name, str(number), *(repr(float(value)) for value in numbers)]


def main() -> None:
    with open(sys.argv[1], "w", newline="", encoding="utf-8") as file:
        file.write("# Exact courses of three-compartment models, effect site, depot, by mpmath's matrix exponential\n")
        file.write(f"# at {DIGITS} digits: written by make_solver_reference.py. "
                   "L, L/min, 1/min, mg, mg/min, min, mg/L.\n")
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(COLUMNS)
        writer.writerows(rows(int(sys.argv[2]) if len(sys.argv) > 2 else SETS))


if __name__ == "__main__":
    main()
