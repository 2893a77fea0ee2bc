"""Counts -> the tables of a run. Shares are 0 to 1, concentrations mg/L, times min, at full precision."""

from __future__ import annotations

import math
from collections.abc import Callable
from functools import partial

import numpy as np
import pandas as pd

from popsim import solve
from popsim.compare import against_reference, all_of_them, between_models, protocol_pairs, quartile_pairs
from popsim.counted import decimal_quantile, decimal_value
from popsim.estimate import MOST_FAILED_PERCENT, mean_error, no_headline, quantile_error, shares_beside, wilson
from popsim.flagged import flag_notes
from popsim.measures import responses, values
from popsim.population_tables import POPULATION_TABLES
from popsim.study_records import Protocol, Study
from popsim.tally import ONE, Findings, Tally, TargetTally, range_names
from popsim.target import in_target_unit

FEW_PATIENTS = 400
RARE_SHARE = 0.1
PERCENTILES = (0.05, 0.25, 0.5, 0.75, 0.95)
PERCENTILE_NAMES = ("p05", "p25", "p50", "p75", "p95")


def attainment(study: Study, tally: Tally) -> pd.DataFrame:
    """One row per model, protocol, group, target.

    Failed and undosed patients stay in the denominator, but have no share of a window: time_below, time_in_range and
    time_above are means over the others. outside_model is empty where the model's people are not known.
    """
    rows = []
    for (m, p, t), counts in tally.targets.items():
        worth = tally.worth((m, p, t))
        low, high = wilson(counts.attained * worth, tally.patients * worth)
        for g, group in enumerate(study.group_names):
            n, failed = int(tally.patients[g]), int(counts.failed[g])
            everyone, judged = n or math.nan, (n - failed) * ONE or math.nan
            rows.append({
                "model": study.models[m].name, "protocol": study.protocols[p].name, "group": group,
                "target": study.targets[t].name, "patients": n, "failed": failed,
                "attained": int(counts.attained[g]) / everyone, "attained_low": low[g], "attained_high": high[g],
                "time_below": int(counts.below[g]) / judged, "time_in_range": int(counts.inside[g]) / judged,
                "time_above": int(counts.above[g]) / judged,
                "ever_far_below": int(counts.far_below[g]) / everyone,
                "ever_far_above": int(counts.far_above[g]) / everyone,
                "outside_model": int(tally.outside[m][g]) / everyone if range_names(study.models[m]) else math.nan,
                "infusion_beyond_model": int(tally.long_infusion[m, p][g]) / everyone,
                "total_beyond_model": int(tally.large_total[m, p][g]) / everyone,
                **_errors(tally, (m, p, t), g, n - failed),
                "ever_below": int(counts.ever_below[g]) / everyone, "ever_above": int(counts.ever_above[g]) / everyone,
                **_by_model(study, tally, m, counts, g, n),
                "mic": mic.mg_per_l if (mic := study.targets[t].mic) else math.nan,
                "note": _note(n, failed)})
    return pd.DataFrame(rows)


def _errors(tally: Tally, key: tuple[int, int, int], g: int, judged: int) -> dict[str, float]:
    """Monte Carlo standard errors of the mean shares of the window."""
    counts, whole, cells = tally.targets[key], judged * ONE or math.nan, {}
    for name, side in (("time_below", "below"), ("time_in_range", "inside"), ("time_above", "above")):
        total, squares = int(getattr(counts, side)[g]), int(getattr(counts, f"{side}_squared")[g])
        worth = (tally.clusters.worth_mean((side, *key), g, squares, ONE, ("judged", *key)) if tally.clusters else 1.0)
        error = float(mean_error(total / whole, squares / whole, judged)) / math.sqrt(worth)
        unknown = tally.clusters and error == 0  # nothing varies: how far people differ is not known
        cells[f"{name}_error"] = math.nan if unknown else error
    return cells


def _by_model(study: Study, tally: Tally, m: int, counts: TargetTally, g: int, patients: int) -> dict[str, float]:
    """Attainment among those inside and outside the people the model was built on; empty where there are none."""
    if not range_names(study.models[m]):
        return {"attained_inside_model": math.nan, "attained_outside_model": math.nan}
    outside, attained_outside = int(tally.outside[m][g]), int(counts.attained_outside[g])
    return {"attained_inside_model": (int(counts.attained[g]) - attained_outside) / (patients - outside or math.nan),
            "attained_outside_model": attained_outside / (outside or math.nan)}


def _note(patients: int, failed: int) -> str:
    if patients == 0:
        return "no patients in this group"
    if no_headline(failed, patients):
        return f"{_patients(failed)} failed or went without a dose, over {MOST_FAILED_PERCENT} %: no headline"
    return f"under {FEW_PATIENTS} patients" if patients < FEW_PATIENTS else ""


def over_time(study: Study, tally: Tally) -> pd.DataFrame:
    """One row per model, protocol, group, target and time: shares of patients, percentiles of the course quantity.

    p05_error and so on are Monte Carlo standard errors: the luck of drawing patients, which says nothing about the
    model. Failed and undosed patients are left out, as they are of the mean times. An area, peak, trough or average has
    the percentiles of plasma and no shares; of several MICs only the first has rows.
    """
    grid, parts = study.grid_min(), []
    for (m, p, t), counts in tally.targets.items():
        if not study.targets[t].over_time:
            continue
        for g, group in enumerate(study.group_names):
            solved = counts.over_time[g].sum(axis=1)
            quantiles, errors = _percentiles(study, m, t, counts.bins[g], tally.clusters is None)
            with np.errstate(invalid="ignore"):
                shares = counts.over_time[g] / solved[:, None]
            if study.targets[t].summary:
                shares = np.full_like(shares, np.nan)
            parts.append(pd.DataFrame({
                "model": study.models[m].name, "protocol": study.protocols[p].name, "group": group,
                "target": study.targets[t].name, "time_min": grid,
                "below": shares[:, 0], "in_range": shares[:, 1], "above": shares[:, 2],
                **{name: quantiles[:, k] for k, name in enumerate(PERCENTILE_NAMES)},
                **{f"{name}_error": errors[:, k] for k, name in enumerate(PERCENTILE_NAMES)}}))
    return pd.concat(parts, ignore_index=True)


def _percentiles(study: Study, m: int, t: int, bins: np.ndarray, independent: bool) -> tuple[np.ndarray, np.ndarray]:
    """PERCENTILES of the course quantity and their Monte Carlo errors as `quantile_error` has them, (times, 5) each."""
    target = study.targets[t]
    beside = np.array([shares_beside(share, int(bins[0].sum())) for share in PERCENTILES])
    found = solve.percentiles_from_bins(bins, [*PERCENTILES, *np.clip(beside, 0.0, 1.0).ravel()])
    if target.quantity != "effect":  # counted as the solver's concentrations, of which it is monotone
        found = in_target_unit(target, study.models[m], {}, found)
    quantiles, ends = np.split(found, [len(PERCENTILES)], axis=1)
    known = independent & (beside[:, 0] >= 0) & (beside[:, 1] <= 1)
    with np.errstate(invalid="ignore"):  # both ends may be beyond what is counted
        errors = (ends[:, 1::2] - ends[:, ::2]) / 2
    return quantiles, np.where(known, errors, np.nan)


COMPARISON_COLUMNS = ("model", "group", "target", "protocol_a", "protocol_b", "patients", "failed", "attained_a",
                      "attained_b", "difference", "difference_low", "difference_high", "only_a", "only_b", "both",
                      "neither", "verdict", "better", "median_gain", "median_gain_low", "median_gain_high")
GROUP_COLUMNS = ("model", "protocol", "target", "group", "reference", "patients", "reference_patients", "attained",
                 "reference_attained", "difference", "difference_low", "difference_high", "failed", "reference_failed",
                 "note")


def comparison(study: Study, tally: Tally) -> pd.DataFrame:
    return pd.DataFrame(protocol_pairs(study, tally), columns=list(COMPARISON_COLUMNS))


def groups(study: Study, tally: Tally) -> pd.DataFrame:
    return pd.DataFrame(against_reference(study, tally), columns=list(GROUP_COLUMNS))


def doses(study: Study, tally: Tally) -> pd.DataFrame:
    """What they really receive until the run's end, by protocol and group; doses to four significant digits.

    Columns ending in _error are Monte Carlo standard errors; none for a list that is drawn from again and again.
    """
    rows, independent = [], tally.clusters is None
    for p, protocol in enumerate(study.protocols):
        counts = tally.doses[p]
        for g, group in enumerate(study.group_names):
            n = int(tally.patients[g])
            row: dict = {"protocol": protocol.name, "group": group, "patients": n}
            for measure, keys in counts.doses.items():
                for name, share in zip(PERCENTILE_NAMES, PERCENTILES, strict=True):
                    row |= _quantile(f"{measure}_{name}", partial(decimal_quantile, keys[g]), share, n, independent)
            shares = {name: int(counted[g]) / n if n else math.nan for name, counted in counts.counts.items()}
            vials, squares = shares.pop("vials"), shares.pop("vials_squared")
            error = float(mean_error(vials, squares, n)) if independent else math.nan
            row |= {f"share_{name}": share for name, share in shares.items()}
            rows.append(row | _prepared(protocol, counts.doses["total_mg"][g], (vials, error), independent))
    return pd.DataFrame(rows)


def _quantile(name: str, quantile: Callable[[float], float], share: float, n: int, independent: bool) -> dict:
    return {name: quantile(share), f"{name}_error": quantile_error(quantile, share, n) if independent else math.nan}


def _prepared(protocol: Protocol, counted: np.ndarray, vials: tuple[float, float], independent: bool) -> dict:
    """Volumes and vials from the same quantiles, and the mean left over in opened vials; empty where the study gives
    no strength or vial. vials_p05 ... and waste_ml_mean: containers are shared by all administrations of a patient;
    vials_each_mean and waste_each_ml_mean: each administration opens its own. `vials`: mean of those and its error."""
    cells: dict = {}

    def volume_ml(share: float) -> float:
        return decimal_quantile(counted, share) / (protocol.strength_mg_per_ml or math.nan)

    def whole_vials(share: float) -> float:
        volume = volume_ml(share)
        whole = protocol.vial_ml is not None and not math.isnan(volume)
        return math.ceil(volume / protocol.vial_ml - 1e-9) if whole else math.nan

    for name, share in (("p05", 0.05), ("p50", 0.5), ("p95", 0.95)):
        for what, quantile in (("volume_ml", volume_ml), ("vials", whole_vials)):
            cells |= _quantile(f"{what}_{name}", quantile, share, int(counted.sum()), independent)
    cells["waste_ml_mean"], error = _mean_waste_ml(protocol, counted)
    cells["waste_ml_mean_error"] = error if independent else math.nan
    has_vials = protocol.strength_mg_per_ml is not None and protocol.vial_ml is not None and counted.any()
    vials_mean, error = vials
    cells["vials_each_mean"] = vials_mean if has_vials else math.nan
    cells["vials_each_mean_error"] = error if has_vials else math.nan
    cells["waste_each_ml_mean"] = (vials_mean * protocol.vial_ml - _mean_volume_ml(protocol, counted) if has_vials
                                   else math.nan)
    return cells


def _mean_volume_ml(protocol: Protocol, counted: np.ndarray) -> float:
    keys = np.flatnonzero(counted)
    whole = math.fsum(int(counted[key]) * decimal_value(int(key)) for key in keys)
    return whole / int(counted.sum()) / protocol.strength_mg_per_ml


def _mean_waste_ml(protocol: Protocol, counted: np.ndarray) -> tuple[float, float]:
    """Mean and its error. Patients are counted by total mg; each opens whole vials of their own."""
    if protocol.strength_mg_per_ml is None or protocol.vial_ml is None or not counted.any():
        return math.nan, math.nan
    keys = np.flatnonzero(counted)
    volume = np.array([decimal_value(int(key)) for key in keys]) / protocol.strength_mg_per_ml
    waste = np.ceil(volume / protocol.vial_ml - 1e-9) * protocol.vial_ml - volume
    n = int(counted.sum())
    mean = math.fsum(counted[keys] * waste) / n
    return mean, float(mean_error(mean, math.fsum(counted[keys] * waste**2) / n, n))


TABLES = {"attainment": attainment, "over_time": over_time, "comparison": comparison, "groups": groups, "doses": doses,
          **POPULATION_TABLES}
WHERE_ASKED = {"values": values, "responses": responses, "quartiles": quartile_pairs, "together": all_of_them,
               "models": between_models}


def all_tables(study: Study, tally: Tally) -> dict[str, pd.DataFrame]:
    """Every table of a run that has no row per patient, by name; those of WHERE_ASKED where they have rows."""
    tables = {name: build(study, tally) for name, build in TABLES.items()}
    asked = {name: pd.DataFrame(rows(study, tally)) for name, rows in WHERE_ASKED.items()}
    return tables | {name: table for name, table in asked.items() if len(table)}


def notes_of(findings: Findings, tables: dict[str, pd.DataFrame]) -> list[str]:
    """What a reader must know beside the numbers: warnings, who could not be simulated, doses that cannot be given."""
    study, tally = findings.study, findings.tally
    notes = list(study.warnings)
    for name, factor in study.population.scale.items():
        notes.append(f"Every patient's {name.replace('_', ' ')} is multiplied by {factor:g}.")
    if findings.share_eligible < RARE_SHARE and study.population.source in ("survey", "described"):
        notes.append(f"These patients are rare: {100 * findings.share_eligible:.2g} % of those within the limits "
                     "of age and sex.")
    if findings.rows_skipped:
        notes.append(f"{findings.rows_skipped} rows of the list were skipped because they could not be used.")
    if tally.clusters:
        notes.append("Where counts of draws cannot tell how far people differ, intervals and simulation errors are "
                     "left empty: of quantiles, median gains, means in values.csv and doses.csv, cells of age and "
                     "weight.")
    notes += flag_notes(study, tally.flags, int(tally.patients[0]))
    for (m, code), count in sorted(tally.statuses.items()):
        notes.append(f"{study.models[m].name}: {_patients(count)} could not be simulated or judged "
                     f"({solve.STATUS[code]}): not attained.")
    for p, protocol in enumerate(study.protocols):
        for name, what in (("impossible", "with a dose that comes out as zero"),
                           ("too_fast", "with an infusion faster than the pump can give, simulated as written"),
                           ("undosed", "without any dose")):
            count = int(tally.doses[p].counts[name][0])
            if count:
                notes.append(f'"{protocol.name}": {_patients(count)} {what}.')
    lender, varies = study.variability.from_model, study.variability.between_subject
    for model in (study.models if lender is None else (lender,)) if varies else ():
        if model.spread_note:
            notes.append(f"{model.name}: {model.spread_note}")
    few = sorted(set(tables["attainment"].query("0 < patients < @FEW_PATIENTS")["group"]))
    if few:
        notes.append(f"Fewer than {FEW_PATIENTS} patients in: {', '.join(few)}.")
    overlapping = sorted(set(tables["groups"].query("note != ''")["group"]))
    if overlapping:
        notes.append(f'No difference to the reference group "{study.reference}" for groups that share patients with '
                     f"it: {', '.join(overlapping)}.")
    return notes


def _patients(count: int) -> str:
    return f"{count} patient" if count == 1 else f"{count} patients"
