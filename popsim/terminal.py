"""The summary on the terminal: 80 columns, plain ASCII, every number as it stands in the tables."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterable

import pandas as pd

from covariates.sheet import DrugModel
from popsim.cautions import CAUTIONS
from popsim.estimate import no_headline
from popsim.holds import further, numbers
from popsim.screen import WIDTH, wrapped
from popsim.study_records import Study, Target
from popsim.words import finding, per_kg_line, percent, points, shares_of, sides_line, target_line


def summary(study: Study, tables: dict[str, pd.DataFrame], notes: Iterable[str], bold: bool = False) -> str:
    """What a run found, for a person: who, what, the answer per group, the table, the cautions."""
    def heading(text: str) -> str:
        return f"\033[1m{text}\033[0m" if bold else text

    lines = [*(heading(line) for line in wrapped(study.title)), *wrapped(study.question), ""]
    patients = int(tables["attainment"]["patients"].max())
    lines += wrapped(f"{patients:,} virtual patients; {', '.join(model.name for model in study.models)}", "Who     ")
    for protocol in study.protocols:
        lines += wrapped(f'"{protocol.name}", {per_kg_line(protocol)}', "Gives   ")
    for target in study.targets:
        lines += wrapped(target_line(target), "Target  ")
    for model in study.models:
        for target in study.targets:
            lines += ["", *_one_target(study, tables, model, target, heading)]
    for title, sentences in further(study, tables):
        lines += ["", heading(title), *(line for sentence in sentences for line in wrapped(sentence, "- "))]
    lines += ["", heading("Outside the people the model was built on")]
    for model in study.models:
        lines += _outside(study, tables["attainment"], model)
    notes = list(notes)
    if notes:
        lines += ["", heading("Note"), *(line for note in notes for line in wrapped(note, "- "))]
    lines += ["", heading("Caution"), *(line for caution in CAUTIONS for line in wrapped(caution, "- "))]
    return "\n".join(line.rstrip() for line in lines)


def _one_target(study: Study, tables: dict[str, pd.DataFrame], model: DrugModel, target: Target,
                heading: Callable[[str], str]) -> list[str]:
    attainment, pairs = (table[(table["model"] == model.name) & (table["target"] == target.name)]
                         for table in (tables["attainment"], tables["comparison"]))
    of = f" under {model.name}" if len(study.models) > 1 else ""
    what = f"{target.name}{of}" if len(study.targets) > 1 else f"Answer{of}"
    lines = [heading(line) for line in wrapped(what)]
    for group in study.group_names:
        sentence = finding(tables["comparison"], tables["attainment"], group, target.name, model.name)
        lines += wrapped(sentence, "- ")
    lines += ["", heading(f"Attained, with 95 % simulation interval; {shares_of(target)} (%)")]
    lines += wrapped(sides_line(target, model))
    lines += _attainment_table(attainment, study.group_names)
    own = numbers(tables, model.name, target)
    if own:
        lines += ["", heading("Each patient's own numbers, all patients")]
        lines += [line for one in own for line in wrapped(one, "- ")]
    if len(pairs):
        lines += ["", heading("Same patients, difference in attainment (percentage points)"), *_pair_table(pairs)]
    return lines


def _attainment_table(rows: pd.DataFrame, groups: tuple[str, ...]) -> list[str]:
    """Group by group, so that the protocols stand under each other."""
    rows = rows.sort_values("group", key=lambda names: names.map(groups.index), kind="stable")
    n_width = len(str(rows["patients"].max()))
    group_width, protocol_width = _widths(rows["group"], rows["protocol"], WIDTH - n_width - 44)
    lines = [f"{'group':<{group_width}} {'protocol':<{protocol_width}} {'n':>{n_width}}  {'attained':<22}"
             f" {'below':>5} {'in':>5} {'above':>5}"]
    previous = None
    for row in rows.itertuples():
        attained = f"{percent(row.attained):>5} ({percent(row.attained_low)} to {percent(row.attained_high)})"
        if row.patients == 0 or no_headline(row.failed, row.patients):
            attained = "no headline" if row.patients else "no patients"
        before, group = _group_cell(row.group if row.group != previous else "", group_width)
        lines += before
        lines.append(f"{group:<{group_width}} {_cut(row.protocol, protocol_width):<{protocol_width}}"
                     f" {row.patients:>{n_width}}  {attained:<22} {percent(row.time_below):>5}"
                     f" {percent(row.time_in_range):>5} {percent(row.time_above):>5}")
        previous = row.group
    for note in sorted({f"{row.group}: {row.note}" for row in rows.itertuples() if row.note}):
        lines += wrapped(note, "  ! ")
    return lines


def _pair_table(rows: pd.DataFrame) -> list[str]:
    lines = []
    for (a, b), pairs in rows.groupby(["protocol_a", "protocol_b"], sort=False):
        lines += wrapped(f'second "{b}" minus first "{a}"; share attaining with only one of them')
        width = min(max(len(group) for group in ("group", *pairs["group"])), 20)
        lines.append(f"{'group':<{width}} {'difference':<24} {'first':>5} {'second':>6}")
        for row in pairs.itertuples():
            before, group = _group_cell(row.group, width)
            lines += before
            lines.append(f"{group:<{width}} {_interval_cell(row):<24}"
                         f" {percent(row.only_a):>5} {percent(row.only_b):>6}  {_verdict_cell(row)}")
    return lines


def _interval_cell(row) -> str:
    if no_headline(row.failed, row.patients):
        return "  no headline"
    if row.patients == 0:
        return "  no patients"
    return f"{points(row.difference):>5} ({points(row.difference_low)} to {points(row.difference_high)})"


def _verdict_cell(row) -> str:
    """The verdict, and for "better" which of the two."""
    if row.verdict != "better":
        return row.verdict
    return "second is better" if row.difference > 0 else "first is better"


def _outside(study: Study, attainment: pd.DataFrame, model: DrugModel) -> list[str]:
    rows = attainment[(attainment["model"] == model.name) & (attainment["target"] == study.targets[0].name)]
    if rows["outside_model"].isna().all():
        lines = wrapped(f"{model.name}: not known, the sheet gives no ranges of its people", "  ")
    else:
        groups = rows[(rows["protocol"] == study.protocols[0].name) & (rows["patients"] > 0)]
        width = min(groups["group"].str.len().max(), WIDTH - 14)
        lines = [f"  {model.name}", *(f"    {_cut(row.group, width):<{width}}  {percent(row.outside_model):>5} %"
                                      for row in groups.itertuples())]
    for row in rows[rows["group"] == "all"].itertuples():
        if row.infusion_beyond_model > 0:
            lines += wrapped(f'"{row.protocol}" infuses longer than the {model.built_on.longest_infusion_min:g} min '
                              f"studied in {percent(row.infusion_beyond_model)} % of patients", "  ")
        if row.total_beyond_model > 0:
            lines += wrapped(f'"{row.protocol}" gives more in all than the {model.built_on.largest_total.text} studied '
                              f"to {percent(row.total_beyond_model)} % of patients", "  ")
    return lines


def _widths(groups: pd.Series, protocols: pd.Series, room: int) -> tuple[int, int]:
    """Column widths: protocols are to be whole, since groups that are too long get a line of their own."""
    protocol = min(max(8, protocols.str.len().max()), room - 5)
    return max(5, min(groups.str.len().max(), room - protocol)), protocol


def _group_cell(group: str, width: int) -> tuple[list[str], str]:
    """A group's name: lines before the row where it is longer than its column, else the cell."""
    return (wrapped(group), "") if len(group) > width else ([], group)


def _cut(text: str, width: int) -> str:
    return text if len(text) <= width else text[:width - 2] + ".."


def as_json_text(study: Study, tables: dict[str, pd.DataFrame], notes: Iterable[str]) -> str:
    """The numbers of the summary for programs: rows of the tables as they stand in the CSV files; NaN is null."""
    shown = {name: tables[name].astype(object).where(tables[name].notna(), None).to_dict(orient="records")
             for name in tables if name != "over_time"}
    return json.dumps({"title": study.title, "question": study.question, "seed": study.seed, **shown,
                       "notes": list(notes), "cautions": list(CAUTIONS)}, indent=2, ensure_ascii=False)
