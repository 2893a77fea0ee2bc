"""Predictions and measurements -> the tables of a score. Shares are 0 to 1, concentrations mg/L, times min."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import combinations

import numpy as np
import pandas as pd

from covariates.formula import Formula
from covariates.sheet import DrugModel
from popsim.groups import ALL, members
from popsim.lookup import Lookup
from popsim.parameters import outside_ranges
from popsim.scoring.files import Measured
from popsim.scoring.measures import MEASURES, Resampled, performance, prediction_errors, verdict
from popsim.scoring.predict import Predictions, infusing

INSIDE = (5.0, 95.0)  # percentiles between which 90 % of measurements should lie
PHASES = ("all", "during infusion", "not infusing")
MOST_BINS, FEWEST_IN_BIN = 8, 12
CHECKED = (5.0, 50.0, 95.0)


@dataclass(frozen=True)
class Scored:
    """What was scored: the models that could be asked with their predictions, and why the others could not."""

    measured: Measured
    groups: tuple[tuple[str, Formula], ...]
    models: tuple[DrugModel, ...]
    predictions: tuple[Predictions, ...]
    left_out: dict[str, str]
    seed: int

    @property
    def group_names(self) -> list[str]:
        return [ALL, *(name for name, _ in self.groups)]

    def members(self) -> np.ndarray:
        """(n, groups) bool."""
        people = self.measured.people()
        return members(self.groups, Lookup(people.attributes), len(people))


    def outside(self, model: DrugModel) -> np.ndarray:
        """(n,) bool: who lies outside the people the model was built on, so far as the sheet gives their ranges."""
        marked = outside_ranges(model, Lookup(self.measured.attributes)).values()
        return np.any([np.zeros(len(self.measured.labels), dtype=bool), *marked], axis=0)


def all_tables(scored: Scored) -> dict[str, pd.DataFrame]:
    """Every table of a score, by the name of its file."""
    resampled = Resampled(scored.seed, len(scored.measured.labels))
    predicted = predictions(scored)
    of_patients = patient_scores(predicted)
    return {"scores": scores(scored, of_patients, resampled),
            "score_comparison": comparison(scored, of_patients, resampled),
            "score_patients": of_patients, "score_predictions": predicted, "score_check": visual_check(scored)}


def predictions(scored: Scored) -> pd.DataFrame:
    """One row per model and measurement."""
    measured, parts = scored.measured, []
    phase = np.where(infusing(measured), PHASES[1], PHASES[2])
    for model, found in zip(scored.models, scored.predictions, strict=True):
        table = pd.DataFrame({
            "model": model.name, "patient": measured.labels[measured.patient], "quantity": measured.quantity,
            "phase": phase, "time_min": measured.time_min, "measured": measured.value, "predicted": found.typical,
            "error_percent": prediction_errors(measured.value, found.typical)})
        for name, free in (("", found.spread), ("_with_error", found.with_error)):
            limits = np.full((2, len(table)), np.nan) if free is None else np.nanpercentile(free, INSIDE, axis=0)
            table[f"p05{name}"], table[f"p95{name}"] = limits
        parts.append(table)
    return pd.concat(parts, ignore_index=True)


def patient_scores(predicted: pd.DataFrame) -> pd.DataFrame:
    """One row per model, patient and phase: Varvel's measures, and how many measurements the intervals hold."""
    usable = predicted[predicted["error_percent"].notna()]
    rows = []
    for phase in PHASES:
        of_phase = usable if phase == PHASES[0] else usable[usable["phase"] == phase]
        for (model, patient), part in of_phase.groupby(["model", "patient"], sort=False):
            row = {"model": model, "patient": patient, "phase": phase, "measurements": len(part)}
            row |= performance(part["error_percent"].to_numpy(), part["time_min"].to_numpy())
            for name in ("", "_with_error"):
                known = part[f"p05{name}"].notna()
                inside = (part["measured"] >= part[f"p05{name}"]) & (part["measured"] <= part[f"p95{name}"])
                row[f"inside{name}"] = int(inside.sum()) if known.all() else np.nan
            rows.append(row)
    columns = ("model", "patient", "phase", "measurements", *MEASURES, "inside", "inside_with_error")
    return pd.DataFrame(rows, columns=columns)


def scores(scored: Scored, of_patients: pd.DataFrame, resampled: Resampled) -> pd.DataFrame:
    """One row per model, group and phase: medians over patients with intervals, and the share inside 5 to 95 %."""
    rows, labels, inside = [], scored.measured.labels, scored.members()
    for model in scored.models:
        beyond = scored.outside(model)
        for g, group in enumerate(scored.group_names):
            for phase in PHASES:
                part = of_patients[(of_patients["model"] == model.name) & (of_patients["phase"] == phase)
                                   & of_patients["patient"].isin(labels[inside[:, g]])]
                row = {"model": model.name, "group": group, "phase": phase, "patients": len(part),
                       "measurements": int(part["measurements"].sum()),
                       "outside_model": float(beyond[np.isin(labels, part["patient"])].mean()) if len(part) else np.nan}
                for name in MEASURES:
                    row |= _three(name, resampled.median(part[name].to_numpy(dtype=np.float64)))
                for name in ("inside", "inside_with_error"):
                    hits = part[name].to_numpy(dtype=np.float64)
                    known = np.isfinite(hits)
                    row |= _three(name, resampled.share(hits[known], part["measurements"].to_numpy()[known]))
                rows.append(row)
    return pd.DataFrame(rows)


def _three(name: str, values: tuple[float, float, float]) -> dict[str, float]:
    return dict(zip((name, f"{name}_low", f"{name}_high"), values, strict=True))


def comparison(scored: Scored, of_patients: pd.DataFrame, resampled: Resampled) -> pd.DataFrame:
    """One row per group and pair of models: MDAPE of b minus that of a, paired on the same patients."""
    rows, labels, inside = [], scored.measured.labels, scored.members()
    whole = of_patients[of_patients["phase"] == PHASES[0]]
    by_model = whole.pivot(index="patient", columns="model", values="mdape_percent").reindex(labels)
    for g, group in enumerate(scored.group_names):
        for a, b in combinations([model.name for model in scored.models], 2):
            both = by_model.loc[inside[:, g], [a, b]].dropna() if {a, b} <= set(by_model) else by_model.iloc[:0]
            change = (both[b] - both[a]).to_numpy() if len(both) else np.empty(0)
            row = {"group": group, "model_a": a, "model_b": b, "patients": len(change)}
            row |= _three("difference_percent", resampled.median(change))
            row["b_closer"] = float((change < 0).mean()) if len(change) else np.nan
            said = verdict(row["difference_percent_low"], row["difference_percent_high"], len(change))
            rows.append(row | {"verdict": {"a": a, "b": b}.get(said, said)})
    columns = ("group", "model_a", "model_b", "patients", "difference_percent", "difference_percent_low",
               "difference_percent_high", "b_closer", "verdict")
    return pd.DataFrame(rows, columns=columns)


def visual_check(scored: Scored) -> pd.DataFrame:
    """One row per model, stretch of time and percentile: observed, and 95 % interval of the same in simulated data.

    Corrected for what each sample was predicted to be (Bergstrand and others 2011, AAPS J 13:143-151, from memory), so
    that patients with different doses can be seen together. Measurement error is in it where the sheet has one.
    """
    parts = []
    for model, found in zip(scored.models, scored.predictions, strict=True):
        free = found.spread if found.with_error is None else found.with_error
        if free is not None:
            parts += _checked(model.name, scored.measured, found.typical, free)
    columns = ("model", "from_min", "to_min", "middle_min", "measurements", "percentile", "observed", "simulated",
               "simulated_low", "simulated_high")
    return pd.DataFrame(parts, columns=columns)


def _checked(model: str, measured: Measured, typical: np.ndarray, free: np.ndarray) -> list[dict]:
    usable = np.flatnonzero((typical > 0) & np.isfinite(free).all(axis=0))
    if len(usable) == 0:
        return []
    times, rows = measured.time_min[usable], []
    edges = _edges(times)
    for j in range(len(edges) - 1):
        within = (times >= edges[j]) & ((times < edges[j + 1]) if j < len(edges) - 2 else (times <= edges[j + 1]))
        columns = usable[within]
        correction = np.median(typical[columns]) / typical[columns]
        observed = np.percentile(measured.value[columns] * correction, CHECKED)
        simulated = np.percentile(free[:, columns] * correction, CHECKED, axis=1)
        for k, percentile in enumerate(CHECKED):
            low, middle, high = np.percentile(simulated[k], [2.5, 50.0, 97.5])
            rows.append({"model": model, "from_min": edges[j], "to_min": edges[j + 1],
                         "middle_min": float(np.median(times[within])), "measurements": len(columns),
                         "percentile": percentile, "observed": observed[k], "simulated": middle,
                         "simulated_low": low, "simulated_high": high})
    return rows


def _edges(times: np.ndarray) -> np.ndarray:
    """Stretches of time with about as many measurements each."""
    bins = min(MOST_BINS, max(len(times) // FEWEST_IN_BIN, 1))
    edges = np.unique(np.quantile(times, np.linspace(0, 1, bins + 1), method="inverted_cdf"))
    return edges if len(edges) > 1 else np.array([edges[0], edges[0]])


def best_model(tables: dict[str, pd.DataFrame], group: str = ALL) -> tuple[str, Sequence[str]]:
    """The model with the lowest median MDAPE in a group, and those it is not clearly closer than."""
    ranked = tables["scores"].query("group == @group and phase == 'all' and mdape_percent.notna()", engine="python")
    if ranked.empty:
        return "", ()
    best = ranked.sort_values("mdape_percent", kind="stable")["model"].iloc[0]
    pairs = tables["score_comparison"]
    pairs = pairs[(pairs["group"] == group) & ((pairs["model_a"] == best) | (pairs["model_b"] == best))]
    unclear = [row.model_b if row.model_a == best else row.model_a for row in pairs.itertuples() if row.verdict != best]
    return str(best), unclear


def notes_of(scored: Scored, tables: dict[str, pd.DataFrame], at_bolus: int) -> list[str]:
    """What a reader must know beside the numbers."""
    notes = [f"{name} was not scored: it {why}." for name, why in scored.left_out.items()]
    for model, found in zip(scored.models, scored.predictions, strict=True):
        if found.spread is None:
            notes.append(f"{model.name}: no between-subject variability published, so no prediction interval of it.")
        elif found.with_error is None:
            notes.append(f"{model.name}: no measurement error published; its intervals show between-subject "
                         "variability alone, and should hold fewer than 90 % of measurements.")
        beyond = int(scored.outside(model).sum())
        if beyond:
            notes.append(f"{model.name}: {beyond} of {len(scored.measured.labels)} patients lie outside the people it "
                         "was built on.")
        nothing = int((~(found.typical > 0)).sum())
        if nothing:
            notes.append(f"{model.name}: {nothing} measurements not scored, since it predicts no drug then or cannot "
                         "compute the patient.")
        if model.measured_in.get("fluid") == "whole blood":
            notes.append(f"{model.name} was built on whole blood; plasma measurements may differ by a constant factor.")
        if model.spread and model.spread_note:
            notes.append(f"{model.name}: {model.spread_note}")
    if at_bolus:
        notes.append(f"{at_bolus} measurements at the time of a bolus are taken as drawn just before it.")
    few = tables["scores"].query("phase == 'all' and 0 < patients < 6")["group"].unique()
    if len(few):
        notes.append(f"Fewer than 6 patients in: {', '.join(few)}. No verdict between models there.")
    return notes
