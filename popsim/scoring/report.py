"""The report and the record of a score."""

from __future__ import annotations

import hashlib
from pathlib import Path
from typing import Any

import pandas as pd

from covariates.sheet import shipped_sheets
from popsim.page import inlined, write_page
from popsim.pictures.shown import Picture
from popsim.provenance import sheet_record, surroundings
from popsim.scoring.tables import PHASES, Scored
from popsim.scoring.words import INTERVALS_SAY, MEASURES_SAY, SCORE_CAUTIONS, answer, inside, interval, number
from popsim.words import percent


def score_record(scored: Scored, files: tuple[Path, Path, Path], replicates: int, notes: list[str]) -> dict[str, Any]:
    """What record.json holds of a score: enough to repeat it."""
    measured = scored.measured
    shipped = shipped_sheets()
    names = [f"--model {model.name}{'' if model.name in shipped else '.toml'}" for model in scored.models]
    kinds = ("people", "given", "measured")
    options = " ".join(f"--{kind} {path.name}" for kind, path in zip(kinds, files, strict=True))
    return {
        "command": f"popsim score {options} {' '.join(names)} --replicates {replicates} --seed {scored.seed}",
        "seed": scored.seed,
        "replicates": replicates,
        "files": [{"name": path.name, "digest_sha256": hashlib.sha256(path.read_bytes()).hexdigest()}
                  for path in files],
        "counts": {"patients": len(measured.labels), "measurements": len(measured.value)},
        "groups": {name: where.text for name, where in scored.groups},
        "models": [sheet_record(model) for model in scored.models],
        "not_scored": scored.left_out,
        "notes": notes,
        "cautions": list(SCORE_CAUTIONS),
        **surroundings(),
    }


def write_score_report(scored: Scored, tables: dict[str, pd.DataFrame], record: dict[str, Any],
                       pictures: list[Picture], path: Path) -> None:
    """Write the report to `path`; the pictures' files stand in the same folder."""
    scores = tables["scores"]
    write_page(
        path, "score.html.j2",
        percent=percent,
        number=number,
        interval=interval,
        inside=inside,
        drug=scored.models[0].drug,
        record=record,
        models=scored.models,
        sentences=[answer(scored, tables, group) for group in scored.group_names],
        groups=[(group, list(scores.query("group == @group and phase == 'all'").itertuples()))
                for group in scored.group_names],
        phases=[(phase, list(scores.query("group == 'all' and phase == @phase").itertuples())) for phase in PHASES],
        pairs=list(tables["score_comparison"].itertuples()),
        intervals_say=INTERVALS_SAY,
        measures_say=MEASURES_SAY,
        pictures=inlined(pictures, path.parent),
    )
