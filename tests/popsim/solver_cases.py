"""Patients and timelines that several solver tests share."""

from __future__ import annotations

import dataclasses
import os

import numpy as np

from popsim import solve
from popsim.records import Disposition, Timeline

# compiled code runs many examples; as plain Python (NUMBA_DISABLE_JIT=1) or bounds-checked, few
SLOW = os.environ.get("NUMBA_DISABLE_JIT") == "1" or os.environ.get("NUMBA_BOUNDSCHECK") == "1"
EXAMPLES = 20 if SLOW else 60

# three compartments and an effect site of the size of published anaesthetic models (rounded; L, L/min, 1/min)
PROPOFOL = {"V1": 6.3, "CL": 1.8, "V2": 25.0, "Q2": 1.7, "V3": 270.0, "Q3": 1.1, "ke0": 0.15}
REMIFENTANIL = {"V1": 5.1, "CL": 2.6, "V2": 9.8, "Q2": 2.05, "V3": 5.4, "Q3": 0.076, "ke0": 0.6}
NAMES = tuple(PROPOFOL)


def rows_of(record, rows):
    """The same record (Disposition, Timeline) for some of its patients."""
    return dataclasses.replace(record, **{f.name: getattr(record, f.name)[rows] for f in dataclasses.fields(record)})


def people(*parameters: dict[str, float]) -> Disposition:
    return solve.disposition({name: np.array([p[name] for p in parameters]) for name in parameters[0]})


def varied(n: int, seed: int = 7) -> dict[str, np.ndarray]:
    """n patients scattered around PROPOFOL."""
    luck = np.random.default_rng(seed)
    return {name: value * np.exp(0.4 * luck.standard_normal(n)) for name, value in PROPOFOL.items()}


def timeline(*events: tuple[float, float, float], n: int = 1) -> Timeline:
    """The same (time, bolus, rate) for n patients, with two columns of padding."""
    rows = np.array([*events, (np.inf, 0.0, 0.0), (np.inf, 0.0, 0.0)]).T
    return Timeline(*(np.tile(row, (n, 1)) for row in rows))


def window(disposition: Disposition, line: Timeline, which: str, low: float, high: float, start: float, end: float):
    n = len(disposition)
    return solve.window_course(disposition, line, which, *(np.full(n, x) for x in (low, high, start, end)))


def rate_matrix(p: dict[str, float]) -> np.ndarray:
    """d/dt of (C1, C2, C3, Ce, input rate)."""
    v1, cl, v2, q2, v3, q3, ke0 = (p[name] for name in NAMES)
    return np.array([
        [-(cl + q2 + q3) / v1, q2 / v1, q3 / v1, 0.0, 1 / v1],
        [q2 / v2, -q2 / v2, 0.0, 0.0, 0.0],
        [q3 / v3, 0.0, -q3 / v3, 0.0, 0.0],
        [ke0, 0.0, 0.0, -ke0, 0.0],
        [0.0] * 5,
    ])  # fmt: skip
