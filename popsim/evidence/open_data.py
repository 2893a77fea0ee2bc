"""Theophylline, indomethacin, cefamandole (open data of R): solver values, and fits through the solver.

The solver gives every predicted concentration; scipy.optimize.least_squares does the fitting.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np

from popsim import solve
from popsim.evidence.mixed_fit import mixed_fit
from popsim.evidence.remifentanil import open_data
from popsim.records import Timeline


def oral(log_ka: float, log_cl: float, log_ke: float, dose: float, times: np.ndarray) -> np.ndarray:
    """One compartment after a dose by mouth, in the units given."""
    ka, cl, ke = np.exp([[log_ka], [log_cl], [log_ke]])
    none = np.zeros((1, 1))
    given = Timeline(none, none, none, oral_mg=np.full((1, 1), dose))
    grid, place = np.unique(times, return_inverse=True)
    return solve.courses_on_grid(solve.disposition({"V1": cl / ke, "CL": cl, "ka": ka}), given, grid)[0][0, place]


def biexponential(log_v1: float, log_cl: float, log_v2: float, log_q2: float, dose: float,
                  times: np.ndarray) -> np.ndarray:
    """Two compartments after a bolus."""
    grid, place = np.unique(times, return_inverse=True)
    return solve.courses_on_grid(_two(log_v1, log_cl, log_v2, log_q2), _bolus(dose), grid)[0][0, place]


def _two(*logs: float):
    return solve.disposition(dict(zip(("V1", "CL", "V2", "Q2"), np.exp(logs)[:, None], strict=True)))


def _bolus(dose: float) -> Timeline:
    return Timeline(np.zeros((1, 1)), np.full((1, 1), dose), np.zeros((1, 1)))


def theophylline_at(hours: str) -> float:
    """mg/L after 4 mg/kg with ln ka 0.46574, ln CL -3.22722, ln ke -2.4547 (per kg, h)."""
    return float(oral(0.46574, -3.22722, -2.4547, 4.0, np.array([float(hours)]))[0])


def theophylline_peak() -> float:
    """Time of its peak, h."""
    times = np.arange(0.0, 4.0, 0.0001)
    return float(times[oral(0.46574, -3.22722, -2.4547, 4.0, times).argmax()])


def _fit(residuals, start: list[float]) -> tuple[np.ndarray, float]:
    """Least-squares estimates and the residual standard deviation."""
    from scipy.optimize import least_squares

    found = least_squares(residuals, start, xtol=1e-14, ftol=1e-14, gtol=1e-14, x_scale="jac")
    return found.x, float(np.sqrt((found.fun**2).sum() / (len(found.fun) - len(start))))


def _theophylline_people() -> list[tuple[float, np.ndarray, np.ndarray]]:
    """Dose (mg/kg), times (h) and concentrations (mg/L) of each subject."""
    rows = open_data("datasets", "Theoph")
    return [(float(part["Dose"].iloc[0]), part["Time"].to_numpy(float), part["conc"].to_numpy(float))
            for _, part in rows.groupby("Subject")]


@lru_cache(maxsize=1)
def _theophylline() -> tuple[dict[str, float], dict[str, float]]:
    """Pooled estimates, and the mean over subjects of their own."""
    parts = _theophylline_people()

    def misfit(logs, some):
        return np.concatenate([oral(logs[1], logs[2], logs[0], dose, time) - conc for dose, time, conc in some])

    start = [-2.5, 0.5, -3.2]
    names = ("ln ke", "ln ka", "ln CL", "sigma")
    pooled, sigma = _fit(lambda logs: misfit(logs, parts), start)
    single = np.mean([_fit(lambda logs, one=one: misfit(logs, [one]), start)[0] for one in parts], axis=0)
    return dict(zip(names, (*pooled, sigma), strict=True)), dict(zip(names[:3], single, strict=True))


def theophylline_fit(what: str, people: str = "pooled") -> float:
    """ln ke, ln ka, ln CL (per h, L/h/kg) or sigma; `people` pooled, or each alone and then the mean."""
    return float(_theophylline()[people != "pooled"][what])


@lru_cache(maxsize=2)
def _two_exponentials(package: str, item: str, time: str, dose: float, start: tuple[float, ...]) -> dict[str, float]:
    rows = open_data(package, item)
    times, conc = rows[time].to_numpy(float), rows["conc"].to_numpy(float)
    logs, sigma = _fit(lambda logs: biexponential(*logs, dose, times) - conc, list(start))
    found = _two(*logs)
    slow, fast = found.rates[0, :2]
    return {"A1": dose * found.weights[0, 1], "lrc1": np.log(fast), "A2": dose * found.weights[0, 0],
            "lrc2": np.log(slow), "sigma": sigma}


def indomethacin_fit(what: str) -> float:
    """A1, A2 (ug/mL), lrc1, lrc2 (ln 1/h), sigma, pooled; the dose of 25 mg (from memory) does not touch them."""
    return float(_two_exponentials("datasets", "Indometh", "time", 25.0, tuple(np.log([7.6, 8.1, 12.0, 6.3])))[what])


def cefamandole_fit(what: str) -> float:
    """A1, A2 (ug/mL), lrc1, lrc2 (ln 1/min), sigma, pooled, 15 mg/kg."""
    return float(_two_exponentials("nlme", "Cefamandole", "Time", 15.0,
                                   tuple(np.log([0.038, 0.002, 0.042, 0.0016])))[what])


@lru_cache(maxsize=1)
def _theophylline_mixed() -> dict[str, float]:
    parts = _theophylline_people()
    fixed, spread, sigma = mixed_fit(lambda logs, i: oral(logs[1], logs[2], logs[0], *parts[i][:2]),
                                     [conc for _, _, conc in parts], [-2.5, 0.5, -3.2], [1, 2])
    return dict(zip(("ln ke", "ln ka", "ln CL", "SD of ln ka", "SD of ln CL", "sigma"), (*fixed, *spread, sigma),
                    strict=True))


def theophylline_mixed(what: str) -> float:
    """Mixed-effects estimates with random ka and CL."""
    return float(_theophylline_mixed()[what])


@lru_cache(maxsize=2)
def _two_exponentials_mixed(package: str, item: str, time: str, start: tuple[float, ...],
                            varying: tuple[int, ...]) -> dict[str, float]:
    """Of A1, lrc1, A2, lrc2, those `varying` with random effects; through volumes and clearances of a unit dose."""
    parts = [(part[time].to_numpy(float), part["conc"].to_numpy(float))
             for _, part in open_data(package, item).groupby("Subject")]

    def predicted(given: np.ndarray, i: int) -> np.ndarray:
        (a, fast), (b, slow) = (given[0], np.exp(given[1])), (given[2], np.exp(given[3]))
        v1, back = 1 / (a + b), (a * slow + b * fast) / (a + b)
        out = fast * slow / back
        forth = fast + slow - back - out
        return biexponential(*np.log([v1, out * v1, forth * v1 / back, forth * v1]), 1.0, parts[i][0])

    fixed, spread, sigma = mixed_fit(predicted, [conc for _, conc in parts], start, varying)
    names = ("A1", "lrc1", "A2", "lrc2")
    return dict(zip((*names, *(f"SD of {names[k]}" for k in varying), "sigma"), (*fixed, *spread, sigma), strict=True))


def indomethacin_mixed(what: str) -> float:
    """Mixed-effects estimates with random A1, lrc1, A2."""
    return float(_two_exponentials_mixed("datasets", "Indometh", "time", (2.8, 0.8, 0.5, -1.3), (0, 1, 2))[what])


def cefamandole_mixed(what: str) -> float:
    """Mixed-effects estimates with all four random."""
    return float(_two_exponentials_mixed("nlme", "Cefamandole", "Time", (310.0, -2.1, 85.0, -4.0), (0, 1, 2, 3))[what])
