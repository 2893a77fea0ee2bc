"""What must hold exactly: closed forms, a theorem, 50-digit arithmetic, a slow general integrator."""

from __future__ import annotations

import numpy as np

from popsim import solve
from popsim.records import Disposition, Timeline
from popsim.scoring.predict import rows_of
from popsim.streams import normals, uniforms

MODELS = 20
DIGITS = 50


def _events(*events: tuple[float, float, float]) -> Timeline:
    """(time, bolus, rate) each."""
    return Timeline(*(np.array([column]) for column in zip(*events, strict=True)))


def _random_models(count: int) -> dict[str, np.ndarray]:
    """Three compartments and effect site over some decades."""
    span = {"V1": (1, 50), "V2": (1, 100), "V3": (1, 500), "CL": (0.05, 5), "Q2": (0.05, 5), "Q3": (0.01, 3),
            "ke0": (0.01, 2)}
    return {name: low * (high / low) ** uniforms(7, f"evidence {name}", 0)[:count]
            for name, (low, high) in span.items()}


def _same(timeline: Timeline, count: int) -> Timeline:
    return rows_of(timeline, np.zeros(count, dtype=np.int64))


REGIMEN = ((0.0, 100.0, 5.0), (30.0, 0.0, 0.0), (45.0, 50.0, 0.0))
TIMES = np.array([0.5, 5.0, 29.0, 44.0, 60.0, 300.0])


def _courses(models: dict[str, np.ndarray], events=REGIMEN, times: np.ndarray = TIMES) -> np.ndarray:
    """Plasma and effect site, (2, models, times)."""
    timeline = _same(_events(*events), len(models["V1"]))
    return np.stack(solve.courses_on_grid(solve.disposition(models), timeline, times))


def _rate_matrix(p: dict[str, float], matrix):
    """State: plasma concentration, two tissue concentrations, effect site, rate of infusion."""
    a = matrix
    a[0, 0] = -(p["CL"] + p["Q2"] + p["Q3"]) / p["V1"]
    a[0, 1], a[0, 2], a[0, 4] = p["Q2"] / p["V1"], p["Q3"] / p["V1"], 1 / p["V1"]
    a[1, 0], a[1, 1] = p["Q2"] / p["V2"], -p["Q2"] / p["V2"]
    a[2, 0], a[2, 2] = p["Q3"] / p["V3"], -p["Q3"] / p["V3"]
    a[3, 0], a[3, 3] = p["ke0"], -p["ke0"]
    return a


def error_against_digits() -> float:
    """Largest relative error of plasma and effect site in random models against a 50-digit matrix exponential."""
    import mpmath

    models = _random_models(MODELS)
    ours = _courses(models)
    worst = 0.0
    with mpmath.workdps(DIGITS):
        for i in range(MODELS):
            exact = {name: mpmath.mpf(float(values[i])) for name, values in models.items()}
            matrix = _rate_matrix(exact, mpmath.zeros(5))
            for k, time in enumerate(TIMES):
                state, now = mpmath.zeros(5, 1), mpmath.mpf(0)
                for at, bolus, rate in REGIMEN:
                    if at > time:
                        break
                    state = mpmath.expm(matrix * (mpmath.mpf(at) - now)) * state
                    state[0] += mpmath.mpf(bolus) / exact["V1"]
                    state[4], now = mpmath.mpf(rate), mpmath.mpf(at)
                state = mpmath.expm(matrix * (mpmath.mpf(float(time)) - now)) * state
                for course, place in ((0, 0), (1, 3)):
                    worst = max(worst, abs(float(ours[course, i, k] / state[place] - 1)))
    return worst


def error_against_integrator() -> float:
    """Largest error against scipy's LSODA at rtol 1e-11, relative to each course's peak."""
    from scipy.integrate import solve_ivp

    models = _random_models(5)
    ours, worst = _courses(models), 0.0
    for i in range(5):
        matrix = _rate_matrix({name: float(values[i]) for name, values in models.items()}, np.zeros((5, 5)))
        state, found = np.zeros(5), []
        edges = [*(at for at, _, _ in REGIMEN), float(TIMES[-1])]
        for (at, bolus, rate), end in zip(REGIMEN, edges[1:], strict=True):
            state[0] += bolus / models["V1"][i]
            state[4] = rate
            wanted = [time for time in TIMES if at <= time < end or time == end == TIMES[-1]]
            stops = sorted({*map(float, wanted), end})
            run = solve_ivp(lambda t, y: matrix @ y, (at, end), state, "LSODA", stops, rtol=1e-11, atol=1e-13)
            found += list(run.y.T[:len(wanted)])
            state = run.y[:, -1].copy()
        for course, place in ((0, 0), (1, 3)):
            exact = np.array(found)[:, place]
            worst = max(worst, float(np.abs(ours[course, i] - exact).max() / exact.max()))
    return worst


def superposition() -> float:
    """Two doses together against the sum of each alone: largest relative difference in random models."""
    models = _random_models(MODELS)
    apart = _courses(models, REGIMEN[:2]) + _courses(models, REGIMEN[2:])
    return float(np.abs(_courses(models) / np.where(apart > 0, apart, 1) - 1)[apart > 0].max())


def area_of_a_dose() -> float:
    """Area after a dose, over all time, against dose / CL: largest relative difference in random models."""
    models = _random_models(MODELS)
    timeline = _same(_events((0.0, 100.0, 0.0)), MODELS)
    found, _ = solve.area_under_curve(solve.disposition(models), timeline, "plasma", np.zeros(MODELS),
                                      np.full(MODELS, 1e7))
    return float(np.abs(found * models["CL"] / 100.0 - 1).max())


def share_of_a_decay() -> float:
    """Share of 0 to 60 min that 10 exp(-0.05 t) spends from 2 to 5, against ln(5/2) / 0.05 / 60."""
    one = solve.disposition({"V1": np.full(1, 10.0), "CL": np.full(1, 0.5)})
    course = solve.window_course(one, _events((0.0, 100.0, 0.0)), "plasma", np.full(1, 2.0), np.full(1, 5.0),
                                 np.zeros(1), np.full(1, 60.0))
    return float(abs(course.inside[0] - np.log(2.5) / 0.05 / 60))


def lognormal_attainment() -> float:
    """Share of 8,192 people between 8 and 12.5 mg/L at steady state, CL lognormal with SD 0.3 about 0.5 L/min at
    5 mg/min, less the normal probability, in points."""
    from math import erf, log, sqrt

    luck = normals(7, "evidence attainment", 0)
    n = len(luck)
    many = solve.disposition({"V1": np.ones(n), "CL": 0.5 * np.exp(0.3 * luck)})
    course = solve.window_course(many, _same(_events((0.0, 0.0, 5.0)), n), "plasma", np.full(n, 8.0),
                                 np.full(n, 12.5), np.full(n, 900.0), np.full(n, 1000.0))
    exact = sum(sign * 0.5 * (1 + erf(log(limit / 10) / 0.3 / sqrt(2))) for limit, sign in ((12.5, 1), (8.0, -1)))
    return float(abs((course.inside > 0.5).mean() - exact) * 100)


def theorem_on_spread() -> float:
    """Largest ratio of SD / mean of a regimen to the largest SD / mean of a bolus up to that time; at most 1.

    In 500 people, for regimens given alike to all. Holds exactly for a finite set of people. Boluses are followed
    every 1 s, so that up to 0.1 % may be missing.
    """
    n = 500
    typical = {"V1": 5.0, "V2": 10.0, "V3": 5.4, "CL": 2.6, "Q2": 2.0, "Q3": 0.08}
    models = {name: value * np.exp(0.4 * normals(7, f"evidence spread {name}", 0)[:n])
              for name, value in typical.items()}
    people, times = solve.disposition(models), np.arange(1, 3601) / 60.0

    def spread(*events: tuple[float, float, float]) -> np.ndarray:
        plasma = _plasma(people, events, times)
        with np.errstate(invalid="ignore"):
            return np.nan_to_num(plasma.std(axis=0) / plasma.mean(axis=0))

    most = np.maximum.accumulate(spread((0.0, 1.0, 0.0)))
    at_once = np.std(1 / models["V1"]) / np.mean(1 / models["V1"])
    regimens = (((0.0, 0.0, 1.0),), ((0.0, 5.0, 1.0), (20.0, 0.0, 0.0)), ((0.0, 1.0, 0.0), (30.0, 1.0, 0.0)),
                ((0.0, 0.0, 2.0), (5.0, 0.0, 0.0), (40.0, 3.0, 0.0)))
    return float(max((spread(*events) / np.maximum(most, at_once)).max() for events in regimens))


def _plasma(people: Disposition, events: tuple[tuple[float, float, float], ...], times: np.ndarray) -> np.ndarray:
    return solve.courses_on_grid(people, _same(_events(*events), len(people)), times)[0]
