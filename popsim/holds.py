"""Further findings in sentences, the same for terminal and report: does the answer hold, each patient's own numbers,
cumulative fractions of response, the spread between models."""

from __future__ import annotations

import math

import pandas as pd

from covariates.units import to_unit
from popsim.study_records import Study, Target
from popsim.words import clock, percent, points, unit_of

REACHED = {"first_reached_min": ("reaches the range", "by", "the window"),
           "recovery_min": ("recovers from the last dose", "within", "the run")}


def holds(study: Study, tables: dict[str, pd.DataFrame]) -> list[str]:
    """One sentence per way of asking again: in which groups the answer is another one, and by how much all patients."""
    table = tables.get("robustness")
    if table is None or len(table) == 0:
        return []
    lines = []
    for asked, rows in table[table["asked"] != "as written"].groupby("asked", sort=False):
        other = rows[rows["same_answer"] == "no"]
        everyone = rows[rows["group"] == "all"]
        if len(study.protocols) == 1:
            lines.append(f"{asked}: " + "; ".join(_attained(study, row) for row in everyone.itertuples()))
        elif len(other) == 0:
            lines.append(f"{asked}: the same answer everywhere")
        else:
            which = "; ".join(_other(study, row) for row in list(other.itertuples())[:3])
            more = f"; and {len(other) - 3} more in robustness.csv" if len(other) > 3 else ""
            lines.append(f"{asked}: another answer in {len(other)} of {len(rows)} comparisons: {which}{more}")
    return lines


def _attained(study: Study, row) -> str:
    of = f"{row.target}: " if len(study.targets) > 1 else ""
    return (f"{of}{percent(row.attained_a)} % of all attain "
            f"({percent(row.attained_low)} to {percent(row.attained_high)} %)")


def _other(study: Study, row) -> str:
    of = f", {row.target}" if len(study.targets) > 1 else ""
    pair = f', "{row.protocol_b}" minus "{row.protocol_a}"' if len(study.protocols) > 2 else ""
    verdict = row.verdict
    if verdict == "better":
        verdict = f'"{row.protocol_b if row.difference > 0 else row.protocol_a}" is better'
    return f'"{row.group}"{of}{pair}: {points(row.difference)} points' + (f" ({verdict})" if verdict else "")


def _under(study: Study, model: str) -> str:
    return f" ({model})" if len(study.models) > 1 else ""


def numbers(tables: dict[str, pd.DataFrame], model: str, target: Target) -> list[str]:
    """Median and middle 90 % of each patient's own numbers among all patients, protocol by protocol."""
    table = tables.get("values")
    if table is None:
        return []
    name = target.mic.family if target.mic else target.name
    rows = table[(table["model"] == model) & (table["target"] == name) & (table["group"] == "all")]
    return [f'"{row.protocol}": {_said(target, row)}' for row in rows.itertuples()
            if row.patients and target.over_time]


def _said(target: Target, row) -> str:
    if row.measure in REACHED:
        reached, before, end = REACHED[row.measure]
        shares = [(row.p50, "half of the patients"), (row.p95, "95 %")]
        if row.p50 == row.p95:
            shares = [(row.p95, "95 % of the patients")]
        when = [f"{before} {_minutes(value)} in {patients}" for value, patients in shares if math.isfinite(value)]
        never = [f"not by the end of {end} in {percent(row.never)} %"] if row.never else []
        return f"{reached} {', '.join(when + never)}"
    if row.measure == "of_steady_state":
        return (f"the window has {percent(row.p50, 0)} % of its value at steady state (median; "
                f"{percent(row.p05, 0)} to {percent(row.p95, 0)} %)")
    kind = "area" if target.summary == "area_under_curve" else "concentration"
    if target.quantity == "response":
        error = "" if math.isnan(row.mean_error) else f" (Monte Carlo error {percent(row.mean_error)})"
        return f"mean probability of response {percent(row.mean)} %{error}"
    if target.quantity == "effect":
        low, half, high = (f"{value:.3g}" for value in (row.p05, row.p50, row.p95))
        return f"median {half} (5 to 95 %: {low} to {high})"
    low, half, high = (f"{to_unit(value, target.unit, kind):.3g}" for value in (row.p05, row.p50, row.p95))
    return f"median {half} {target.unit} (5 to 95 %: {low} to {high})"


def _minutes(value: float) -> str:
    """Three significant digits, of seconds below a minute."""
    return clock(float(f"{value * 60:.3g}") / 60 if value < 1 else float(f"{value:.3g}"))


def responses(study: Study, tables: dict[str, pd.DataFrame]) -> list[str]:
    """Cumulative fractions of response of all patients."""
    table = tables.get("responses")
    if table is None:
        return []
    return [f'{row.target}, "{row.protocol}"{_under(study, row.model)}: {percent(row.response)} % '
            f"({percent(row.response_low)} to {percent(row.response_high)} %)"
            for row in table[table["group"] == "all"].itertuples()]


def between_models(tables: dict[str, pd.DataFrame]) -> list[str]:
    """The spread of attainment between models beside the simulation interval, of all patients."""
    table = tables.get("models")
    if table is None:
        return []
    return [f'{row.target}, "{row.protocol}": {percent(row.lowest)} % ({row.lowest_model}) to {percent(row.highest)} % '
            f"({row.highest_model}); the simulation interval is {percent(row.simulation_interval)} points wide"
            for row in table[table["group"] == "all"].itertuples()]


def together(study: Study, tables: dict[str, pd.DataFrame]) -> list[str]:
    """Who attains all targets at once, in every group: a sentence per protocol."""
    table = tables.get("together")
    if table is None:
        return []
    return [f'"{protocol}"{_under(study, model)}: ' + "; ".join(
                f"{percent(row.attained)} % ({percent(row.attained_low)} to {percent(row.attained_high)} %) "
                + ("of all" if row.group == "all" else f'in "{row.group}"') for row in rows.itertuples())
            for (model, protocol), rows in table[table["patients"] > 0].groupby(["model", "protocol"], sort=False)]


def gains(study: Study, tables: dict[str, pd.DataFrame]) -> list[str]:
    """For each pair and covariate the quarters that gain most and least from the second protocol."""
    table = tables.get("quartiles")
    if table is None:
        return []
    lines = []
    for (model, target, a, b, covariate), rows in table[table["patients"] > 0].groupby(
            ["model", "target", "protocol_a", "protocol_b", "covariate"], sort=False):
        least, most = rows.loc[rows["difference"].idxmin()], rows.loc[rows["difference"].idxmax()]
        of = f"{target}, " if len(study.targets) > 1 else ""
        by = "BMI" if covariate == "bmi" else covariate.replace("_", " ")
        lines.append(f'{of}"{b}" minus "{a}"{_under(study, model)}, by {by}: {points(least.difference)} points in '
                     f"{_quarter(least)}, {points(most.difference)} in {_quarter(most)}")
    return lines


def _quarter(row: pd.Series) -> str:
    unit = unit_of(row.covariate)
    if math.isinf(row.above):
        return f"the lowest quarter (up to {row.up_to:.3g} {unit})"
    if math.isinf(row.up_to):
        return f"the highest quarter (above {row.above:.3g} {unit})"
    return f"the quarter from {row.above:.3g} to {row.up_to:.3g} {unit}"


MOST_GAINS = 8  # lines in a summary; all stand in quartiles.csv


def _few_gains(study: Study, tables: dict[str, pd.DataFrame]) -> list[str]:
    lines = gains(study, tables)
    return lines if len(lines) <= MOST_GAINS else [*lines[:MOST_GAINS], "all others: quartiles.csv"]


FURTHER = (("All targets at once", together),
           ("Who gains and who loses", _few_gains),
           ("Does the answer hold?", holds),
           ("Cumulative fraction of response", responses),
           ("Between models: how far the answer leans on the model", lambda study, tables: between_models(tables)))


def further(study: Study, tables: dict[str, pd.DataFrame]) -> list[tuple[str, list[str]]]:
    """Headings with their sentences; only those that have any."""
    return [(title, lines) for title, build in FURTHER if (lines := build(study, tables))]
