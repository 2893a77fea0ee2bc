"""What a score says, in sentences and on the terminal: 80 columns, every number as it stands in the tables."""

from __future__ import annotations

import json
import math

import pandas as pd

from popsim.cautions import CAUTIONS
from popsim.scoring.tables import PHASES, Scored, best_model
from popsim.screen import wrapped
from popsim.words import percent

INTERVALS_SAY = ("95 % intervals from resampling these patients: how far other patients like them could move a number. "
                 "They say nothing of patients unlike them.")
SCORE_CAUTIONS = (*CAUTIONS[:2], INTERVALS_SAY, CAUTIONS[3])  # the third is about virtual patients
MEASURES_SAY = ("MDPE: median prediction error (below 0: measured lower than predicted). MDAPE: median absolute error. "
                "Both per patient, then the median over patients, in %.")


def number(value: float, digits: int = 1) -> str:
    """One decimal, none from 100 on."""
    return "-" if math.isnan(value) else f"{value:.{digits if abs(value) < 100 else 0}f}"


def interval(row, name: str) -> str:
    """"12.3 (10.1 to 15.0)"."""
    low, high = getattr(row, f"{name}_low"), getattr(row, f"{name}_high")
    said = number(getattr(row, name))
    return said if math.isnan(low) else f"{said} ({number(low)} to {number(high)})"


def answer(scored: Scored, tables: dict[str, pd.DataFrame], group: str) -> str:
    """Which model serves a group best, in one sentence."""
    where = "Among all patients" if group == "all" else f'In the group "{group}"'
    best, unclear = best_model(tables, group)
    if not best:
        return f"{where}: no patients to score."
    row = next(tables["scores"].query("group == @group and phase == 'all' and model == @best").itertuples())
    said = f"{best}, median absolute error {interval(row, 'mdape_percent')} %"
    if len(scored.models) == 1:
        return f"{where}: {said}; no other model to compare it with."
    if unclear:
        return f"{where} we cannot tell which model predicts best: the closest is {said}, not clearly closer than " \
               f"{', '.join(unclear)}."
    return f"{where}, {said}, predicts best: clearly closer than every other model in the same patients."


def summary(scored: Scored, tables: dict[str, pd.DataFrame], notes: list[str]) -> str:
    """What a score found, for a person at a terminal."""
    count = len(scored.measured.labels)
    lines = wrapped(f"Which published model of {scored.models[0].drug} predicts these patients?")
    lines += wrapped(f"{count} patients, {len(scored.measured.value)} measurements; "
                      f"{', '.join(model.name for model in scored.models)}")
    lines += ["", "Answer", *(line for group in scored.group_names
                              for line in wrapped(answer(scored, tables, group), "- "))]
    lines += ["", "Bias and inaccuracy (%), share of measurements inside the 5 to 95 % interval (%)",
              f"{'group':<14} {'model':<25} {'n':>3} {'MDPE':>6} {'MDAPE (95 % interval)':<21} {'in':>5}"]
    width = 25
    for group in scored.group_names:
        rows = tables["scores"].query("group == @group and phase == 'all'")
        for k, row in enumerate(rows.itertuples()):
            lines.append(f"{_cut(group if k == 0 else '', 14):<14} {_cut(row.model, width):<{width}} {row.patients:>3} "
                         f"{number(row.mdpe_percent):>6} {interval(row, 'mdape_percent'):<21} {inside(row):>5}")
    lines += ["", "By phase, all patients (%)",
              f"{'phase':<16} {'model':<25} {'n':>4} {'MDPE':>6} {'MDAPE':>6} {'wobble':>6} {'per hour':>8}"]
    for phase in PHASES:
        rows = tables["scores"].query("group == 'all' and phase == @phase")
        for k, row in enumerate(rows.itertuples()):
            lines.append(f"{phase if k == 0 else '':<16} {_cut(row.model, width):<{width}} {row.measurements:>4} "
                         f"{number(row.mdpe_percent):>6} {number(row.mdape_percent):>6} "
                         f"{number(row.wobble_percent):>6} {number(row.divergence_percent_per_h):>8}")
    lines += ["", *wrapped(f"{MEASURES_SAY} per hour: divergence, the slope of absolute error on time."),
              *wrapped("In: with measurement error; * the sheet has none, so without it.")]
    if notes:
        lines += ["", "Note", *(line for note in notes for line in wrapped(note, "- "))]
    lines += ["", "Caution", *(line for caution in SCORE_CAUTIONS for line in wrapped(caution, "- "))]
    return "\n".join(line.rstrip() for line in lines)


def inside(row) -> str:
    """The share inside, with measurement error where the sheet has one; else marked as without."""
    if not math.isnan(row.inside_with_error):
        return percent(row.inside_with_error)
    return "-" if math.isnan(row.inside) else f"{percent(row.inside)}*"


def _cut(text: str, width: int) -> str:
    return text if len(text) <= width else text[:width - 2] + ".."


def as_json_text(scored: Scored, tables: dict[str, pd.DataFrame], notes: list[str]) -> str:
    """The numbers of the summary for programs; NaN is null."""
    shown = {name: tables[name].astype(object).where(tables[name].notna(), None).to_dict(orient="records")
             for name in ("scores", "score_comparison")}
    best = {group: dict(zip(("model", "not_clearly_closer_than"), best_model(tables, group), strict=True))
            for group in scored.group_names}
    return json.dumps({"best": best, **shown, "notes": notes, "cautions": list(SCORE_CAUTIONS)}, indent=2,
                      ensure_ascii=False)
