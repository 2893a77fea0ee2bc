"""The report of a run: one HTML file that needs nothing else, for a committee to read and print.

Every number is a cell of the run's tables or a count of its record, written as on the terminal.
"""

from __future__ import annotations

from base64 import b64encode
from hashlib import sha256
from importlib import resources
from pathlib import Path
from typing import Any

import pandas as pd
from markupsafe import Markup

from covariates.sheet import DrugModel
from covariates.units import to_unit
from popsim.finished import own_site
from popsim.headlines import has_headline, rows_where
from popsim.holds import further, numbers
from popsim.page import inlined, write_page
from popsim.pictures.shown import INTERVALS_SAY, Picture
from popsim.population_tally import LEAN
from popsim.study_records import Protocol, Study, Target
from popsim.ward_card import card_lines, describe, example_people, step_as_written
from popsim.words import clock, finding, per_kg_line, percent, points, shares_of, sides_line, target_line

ATTRIBUTE_UNITS = {"age": "years", "weight": "kg", "height": "cm", "bmi": "kg/m2"}
MEASURES = {"age": ("Age", "years"), "weight": ("Weight", "kg"), "height": ("Height", "cm"), "bmi": ("BMI", "kg/m2"),
            LEAN: ("Lean mass", "kg")}
ASKED = ["asked", "protocol_a", "protocol_b", "attained_a", "attained_b", "difference", "difference_low",
         "difference_high", "same_answer"]
CHANGED = ("capped", "floored", "rounded", "impossible", "undosed")  # what can befall a dose, as doses.csv counts it
SOURCES = {"survey": "adults drawn as a national household survey of the United States finds them",
           "list": "the people of a list",
           "described": "people drawn as summary figures describe them",
           "lattice": "the points of a lattice, not a population"}


def write_report(study: Study, tables: dict[str, pd.DataFrame], record: dict[str, Any], pictures: list[Picture],
                 path: Path) -> None:
    """Write the report to `path`; the pictures' files stand in the same folder."""
    script = (resources.files("popsim") / "templates" / "report.js").read_text(encoding="utf-8")
    drawn = inlined(pictures, path.parent)
    write_page(
        path, "report.html.j2",
        percent=percent,
        points=points,
        interval=_interval,
        study=study,
        record=record,
        intervals_say=INTERVALS_SAY,
        targets=[target_line(target) for target in study.targets],
        further=further(study, tables),
        answers=[_answer(study, tables, model, target) for model in study.models for target in study.targets],
        script=Markup(script),  # our own; the browser runs it by its digest and runs no other
        script_digest=f"sha256-{b64encode(sha256(script.encode()).digest()).decode()}",
        pictures=[one for one in drawn if not _of_models(one)],
        who=_who(study, record),
        measures=MEASURES.values(),
        people=_groups_of_people(study, tables, record),
        ward=_cards(study),
        doses=[_doses(protocol, tables["doses"]) for protocol in study.protocols],
        models=[_model(model, found) for model, found in zip(study.models, record["models"], strict=True)],
        left_out=_left_out(study, tables, record),
        sensitivity=_sensitivity(study, tables, [one for one in drawn if _of_models(one)]),
        run_end=clock(study.until_min),
    )


def _interval(low: float, high: float, show=percent) -> str:
    return f"{show(low)} to {show(high)}"


def _answer(study: Study, tables: dict[str, pd.DataFrame], model: DrugModel, target: Target) -> dict[str, Any]:
    """The sentences and tables of one model and one target."""
    attainment, pairs, against = (rows_where(tables[name], model=model.name, target=target.name)
                                  for name in ("attainment", "comparison", "groups"))
    by_group = [(group, rows_where(attainment, group=group)) for group in study.group_names]
    sides = ("", "") if target.quantity != "effect" or model.effect is None else (
        model.effect.low_means, model.effect.high_means)
    return {
        "title": _about(study, model, target),
        "numbers": numbers(tables, model.name, target),
        "sentences": [finding(pairs, attainment, group, target.name, model.name) for group in study.group_names],
        "attainment": [(group, [(row, has_headline(row)) for row in rows.itertuples()]) for group, rows in by_group],
        "sides": sides,
        "sides_line": sides_line(target, model),
        "shares_of": shares_of(target),
        "pairs": [(a, b, [(row, all(has_headline(one) for one in attainment.itertuples()
                                    if one.group == row.group and one.protocol in (a, b)))
                          for row in rows.itertuples()])
                  for (a, b), rows in pairs.groupby(["protocol_a", "protocol_b"], sort=False)],
        "against": list(against.itertuples()),
    }


def _about(study: Study, model: DrugModel, target: Target) -> str:
    """What tells one answer from the others; empty where there is only one."""
    parts = [target.name] * (len(study.targets) > 1) + [f"under {model.name}"] * (len(study.models) > 1)
    return " ".join(parts)


def _who(study: Study, record: dict[str, Any]) -> list[str]:
    """The population in sentences."""
    population, counts = study.population, record["counts"]
    limits = [f"{_called(name)} {_range(low, high, ATTRIBUTE_UNITS[name])}"
              for name, (low, high) in population.limits.items()]
    limits += [f"only {population.sex}"] if population.sex is not None else []
    limits += [population.where.text] if population.where is not None else []
    lines = [f"{counts['patients']:,} virtual patients: {SOURCES[population.source]}."]
    if limits:
        lines.append(f"Eligible: {'; '.join(limits)}. Of {counts['candidates_seen']:,} candidates "
                     f"{counts['candidates_eligible']:,} were eligible.")
    if population.set:
        lines.append("Set for everyone: " + ", ".join(
            f"{name.replace('_', ' ')} {'yes' if value is True else 'no' if value is False else f'{value:g}'}"
            for name, value in population.set.items()) + ".")
    lines += [f"Every {_called(name)} is multiplied by {factor:g}." for name, factor in population.scale.items()]
    return lines + [_spread_line(study)]


def _spread_line(study: Study) -> str:
    variability = study.variability
    if not variability.between_subject:
        return "Typical patients: no between-subject variability."
    lender = f", borrowed from {variability.from_model.name}" if variability.from_model else ""
    factor = f", times {variability.scale:g}" if variability.scale != 1 else ""
    own = f", but {' and '.join(variability.own)} as the study says" if variability.own else ""
    return f"Between-subject variability as published{lender}{own}{factor}."


def _called(name: str) -> str:
    return "body mass index" if name == "bmi" else name.replace("_", " ")


def _range(low: float, high: float, unit: str) -> str:
    if low == float("-inf"):
        return f"up to {high:g} {unit}"
    return f"from {low:g} {unit}" if high == float("inf") else f"{low:g} to {high:g} {unit}"


def _groups_of_people(study: Study, tables: dict[str, pd.DataFrame], record: dict[str, Any]) -> list[dict[str, Any]]:
    """For each group: its condition, its size, quantiles of its people, and for each model the share outside it."""
    conditions = {"all": "everyone"} | {name: where.text for name, where in study.groups}
    people = tables["people"].set_index("group")
    first = rows_where(tables["attainment"], protocol=study.protocols[0].name, target=study.targets[0].name)
    return [{"group": group, "where": conditions[group], "patients": record["counts"]["groups"][group],
             "female": people.loc[group, "female"],
             "cells": [_quantiles_cell(people.loc[group], measure) for measure in MEASURES],
             "outside": [rows_where(first, model=model.name, group=group).iloc[0].outside_model
                         for model in study.models]}
            for group in study.group_names]


def _quantiles_cell(row: pd.Series, measure: str) -> tuple[str, str]:
    """Median, and the 5th and 95th percentile: "48.6", "23.0 to 79.3"."""
    low, median, high = (row[f"{measure}_{name}"] for name in ("p05", "p50", "p95"))
    return ("-", "") if pd.isna(median) else (f"{median:.1f}", f"{low:.1f} to {high:.1f}")


def _cards(study: Study) -> dict[str, Any]:
    """Every protocol, step by step, with what each example person is given of it."""
    labels, attributes = example_people(study)
    cards = []
    for protocol in study.protocols:
        steps = []
        for step, lines in zip(protocol.steps, card_lines(study, protocol, attributes), strict=True):
            times = {line.when for line in lines if line is not None}
            steps.append({"written": step_as_written(step), "when": times.pop() if len(times) == 1 else "",
                          "lines": lines})
        cards.append({"protocol": protocol, "scaled": per_kg_line(protocol), "steps": steps})
    return {"people": [(label, describe(attributes, i)) for i, label in enumerate(labels)], "cards": cards}


def _doses(protocol: Protocol, doses: pd.DataFrame) -> dict[str, Any]:
    """Doses received, in the mass unit that the protocol's first step is written in."""
    first = protocol.steps[0].variants[0].amount or protocol.steps[0].variants[0].rate
    unit = first.unit.split("/")[0] if first else "mg"  # a loading dose is computed in mg
    rows = rows_where(doses, protocol=protocol.name)
    shares = [name for name in CHANGED if (rows[f"share_{name}"] > 0).any()]
    columns = [f"Total, {unit}", f"{unit}/kg total weight", f"{unit}/kg lean weight"]
    columns += ["Volume, mL"] * (protocol.strength_mg_per_ml is not None)
    columns += ["Containers"] * (protocol.vial_ml is not None)
    cells = []
    for row in rows.itertuples():
        line = [_three(row, measure, unit) for measure in ("total_mg", "mg_per_kg_total", "mg_per_kg_lean")]
        line += [_three(row, "volume_ml")] * (protocol.strength_mg_per_ml is not None)
        line += [_three(row, "vials")] * (protocol.vial_ml is not None)
        cells.append((row.group, line + [f"{percent(getattr(row, f'share_{name}'))} %" for name in shares]))
    return {"name": protocol.name, "columns": columns + [name.capitalize() for name in shares], "rows": cells}


def _three(row, measure: str, unit: str | None = None) -> str:
    """Median with the 5th and 95th percentile: "684.1 (467 to 1070)"."""
    low, median, high = (getattr(row, f"{measure}_{name}") for name in ("p05", "p50", "p95"))
    if pd.isna(median):
        return "-"
    low, median, high = (f"{to_unit(value, unit, 'mass') if unit else value:.4g}" for value in (low, median, high))
    return f"{median} ({low} to {high})"


def _model(model: DrugModel, found: dict[str, Any]) -> dict[str, Any]:
    built_on = model.built_on
    limits = [f"{_called(name)} {limit.text}" for name, limit in built_on.ranges.items()]
    if built_on.longest_infusion_min is not None:
        limits.append(f"infusions up to {clock(built_on.longest_infusion_min)}")
    return {"model": model, "limits": limits, "spread": found["spread_sd_of_ln"],
            "forms": found["spread_not_lognormal"], "doi": str(model.source.get("doi") or ""),
            "further": model.source.get("further") or ()}


def _left_out(study: Study, tables: dict[str, pd.DataFrame], record: dict[str, Any]) -> dict[str, Any]:
    """Who could not be simulated, who gets an impossible dose or none, who lies outside a model and by what, whose
    infusion is longer than was studied."""
    counts, total = record["counts"], record["counts"]["patients"]
    everyone = rows_where(tables["attainment"], group="all", target=study.targets[0].name)
    longest = {model.name: model.built_on.longest_infusion_min for model in study.models}
    return {
        "failed": counts["not_simulated"],
        "skipped": counts["list_rows_skipped"],
        "doses": [(row.protocol, what, share) for row in rows_where(tables["doses"], group="all").itertuples()
                  for what, share in (("get a dose that comes out as zero", row.share_impossible),
                                      ("get no dose at all", row.share_undosed)) if share > 0],
        "by": [(one["model"], _called(one["attribute"]),
                [(group, number / max(counts["groups"][group], 1)) for group, number in one["patients"].items()])
               for one in counts["outside_by"]],
        "groups": list(study.group_names),
        "total": total,
        "long": [(row.model, row.protocol, clock(longest[row.model]), row.infusion_beyond_model)
                 for row in everyone.itertuples() if row.infusion_beyond_model > 0],
    }


def _of_models(drawn: dict[str, Any]) -> bool:
    return drawn["picture"].file_name.startswith("models_compared")


def _sensitivity(study: Study, tables: dict[str, pd.DataFrame], pictures: list[dict[str, Any]]) -> dict[str, Any]:
    """What other models, and other ways of asking where the run has them, make of the answer."""
    lines, several, asked = [], len(study.models) > 1, tables.get("robustness")
    if not several and asked is None:
        lines.append("Judged under one published model alone: this run does not tell how far the answer leans on it. "
                     "[drug] repeat_with asks other models of the same people.")
    if several:
        lines.append("The same patients and protocols under each model. What the models differ by is no interval: more "
                     "models could lie further apart.")
    if several and any(own_site(target) for target in study.targets):
        lines.append("Effect sites of different models are different sites: no spread between models is given.")
    changed = [] if asked is None else [row for row in asked.itertuples() if row.same_answer == "no"]
    lines += [f'The answer changes in the group "{row.group}", {row.asked} ({row.target}).' for row in changed]
    return {"lines": lines, "pictures": pictures,
            "models": [_under_models(study, tables["attainment"], target) for target in study.targets if several],
            "asked": [] if asked is None else list(rows_where(asked, group="all").reindex(columns=ASKED).itertuples())}


def _under_models(study: Study, attainment: pd.DataFrame, target: Target) -> dict[str, Any]:
    """Attainment of one target under each model, with the points between the lowest and the highest."""
    rows, spread = [], not own_site(target)
    for group in study.group_names:
        for protocol in study.protocols:
            found = rows_where(attainment, target=target.name, group=group, protocol=protocol.name)
            fine = [has_headline(row) for row in found.itertuples()]
            rows.append({"group": group, "protocol": protocol.name,
                         "cells": [percent(row.attained) if ok else "no headline"
                                   for row, ok in zip(found.itertuples(), fine, strict=True)],
                         "spread": f"{100 * (found['attained'].max() - found['attained'].min()):.1f}"
                         if all(fine) else "-"})
    return {"title": target.name if len(study.targets) > 1 else "", "spread": spread, "rows": rows}
