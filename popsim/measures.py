"""Each patient's own numbers (areas, peaks, times to reach, recovery) and cumulative fractions of response, as rows."""

from __future__ import annotations

import math

import numpy as np

from popsim.counted import QUANTILES, key_of_rank, measure_value
from popsim.estimate import Z95, mean_error, quantile_ranks
from popsim.study_records import Study, Target
from popsim.tally import ONE, Tally


def values(study: Study, tally: Tally) -> list[dict]:
    """One row per model, protocol, group, target and measure: mean and quantiles over patients, each with its Monte
    Carlo error (mean: standard error; quantile: 95 % interval).

    Never counts as infinite: it moves quantiles, and leaves the mean empty. Values to three significant digits. No
    errors for a list that is drawn from again and again: only each person's own counts would tell them.
    """
    rows = []
    for (m, p, t), counts in tally.targets.items():
        target = study.targets[t]
        for measure, counted in counts.measures.items() if target.over_time else ():
            for g, group in enumerate(study.group_names):
                rows.append({"model": study.models[m].name, "protocol": study.protocols[p].name, "group": group,
                             "target": target.mic.family if target.mic else target.name, "measure": measure,
                             "unit": measure_unit(target, measure), **_described(counted[g], tally.clusters is None)})
    return rows


def measure_unit(target: Target, measure: str) -> str:
    """The unit of a measure in the tables."""
    if measure == "of_steady_state":
        return ""
    if measure.endswith("_min"):
        return "min"
    if target.summary == "area_under_curve":
        return "mg.min/L"
    return "" if target.quantity in ("effect", "response") else "mg/L"


def _described(counted: np.ndarray, independent: bool) -> dict[str, float]:
    n, never = int(counted.sum()), int(counted[-1])
    cells: dict[str, float] = {"patients": n, "never": never / n if n else math.nan, "mean": math.nan,
                               "mean_error": math.nan}
    if n and not never:
        keys = np.flatnonzero(counted)
        found = np.array([measure_value(int(key)) for key in keys])
        cells["mean"] = math.fsum(counted[keys] * found) / n
        if independent:
            cells["mean_error"] = float(mean_error(cells["mean"], math.fsum(counted[keys] * found**2) / n, n))
    for name, share in QUANTILES.items():
        for end, rank in zip(("", "_low", "_high"), quantile_ranks(share, n), strict=True):
            known = n and (independent or not end)
            cells[name + end] = measure_value(key_of_rank(counted, rank)) if known else math.nan
    return cells


def responses(study: Study, tally: Tally) -> list[dict]:
    """One row per model, protocol, group and target with isolates: the cumulative fraction of response, which is the
    mean over patients of the share of isolates against which they attain the target, with its 95 % interval."""
    rows = []
    for (m, p, family), counts in tally.responses.items():
        for g, group in enumerate(study.group_names):
            n = int(tally.patients[g])
            whole = n * ONE or math.nan
            mean = int(counts.total[g]) / whole
            squares = int(counts.squared[g])
            worth = tally.clusters.worth_mean(("response", m, p, family), g, squares, ONE) if tally.clusters else 1.0
            half = Z95 * float(mean_error(mean, squares / whole, n)) / math.sqrt(worth)
            if tally.clusters and half == 0:  # nothing varies: how far people differ is not known
                half = math.nan
            rows.append({"model": study.models[m].name, "protocol": study.protocols[p].name, "group": group,
                         "target": family, "patients": n, "response": mean,
                         "response_low": mean - half, "response_high": mean + half})
    return rows
