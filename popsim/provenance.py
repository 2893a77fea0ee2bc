"""The record of a run: enough to repeat it to the last bit on the same kind of machine and versions."""

from __future__ import annotations

import platform
from dataclasses import fields, is_dataclass
from importlib.metadata import version
from pathlib import Path
from typing import Any

from covariates.formula import Formula
from covariates.sheet import DrugModel
from covariates.units import Quantity
from popsim import solve
from popsim.cautions import CAUTIONS
from popsim.parameters import forms_used, spread_used
from popsim.study_records import Study
from popsim.tally import Findings

PACKAGES = ("popsim", "numpy", "scipy", "pandas", "numba", "matplotlib", "jinja2", "pydantic")


def record_of(findings: Findings, command: str, notes: list[str]) -> dict[str, Any]:
    """Everything record.json holds. Timings stand here and nowhere else."""
    study, tally = findings.study, findings.tally
    return {
        "title": study.title,
        "question": study.question,
        "seed": study.seed,
        "command": command,
        "study_file": study.path.name,
        "study_digest_sha256": study.digest,
        "study": plain(study),
        "models": [_model_record(study, model) for model in study.models],
        "counts": {
            "patients": int(tally.patients[0]),
            "candidates_seen": findings.candidates_seen,
            "candidates_eligible": findings.candidates_eligible,
            "share_eligible": findings.share_eligible,
            "list_rows_skipped": findings.rows_skipped,
            "groups": {name: int(count) for name, count in zip(study.group_names, tally.patients, strict=True)},
            "not_simulated": [{"model": study.models[m].name, "reason": solve.STATUS[code], "patients": count,
                               "first_of_them": tally.failing[m, code]}
                              for (m, code), count in sorted(tally.statuses.items())],
            "outside_by": [{"model": study.models[m].name, "attribute": name,
                            "patients": {group: int(count)
                                         for group, count in zip(study.group_names, counts, strict=True)}}
                           for (m, name), counts in tally.beyond.items()],
            "flags": [{"covariate": equation, "patients_who_are": words, "patients": count}
                      for (equation, words), count in sorted(tally.flags.items())],
        },
        "notes": notes,
        "cautions": list(CAUTIONS),
        **surroundings(),
        "timings": {"simulation_s": round(findings.seconds, 3), "threads": findings.threads},
    }


def surroundings() -> dict[str, Any]:
    """The versions and the machine that a result came from."""
    return {"versions": {"python": platform.python_version(), **{name: version(name) for name in PACKAGES}},
            "machine": {"system": platform.system(), "processor": platform.machine()}}


def sheet_record(model: DrugModel) -> dict[str, Any]:
    """Which model sheet was used, and what it says of itself."""
    return {"name": model.name, "digest_sha256": model.digest, "evidence": model.evidence, "source": model.source,
            "cautions": list(model.cautions)}


def _model_record(study: Study, model: DrugModel) -> dict[str, Any]:
    return sheet_record(model) | {
        "drug": model.drug, "spread_sd_of_ln": spread_used(model, study.variability),
        "spread_not_lognormal": forms_used(model, study.variability), "spread_note": model.spread_note,
        "effect": plain(model.effect)}


def plain(value: Any) -> Any:
    """A record as JSON can hold it: formulas and quantities as written, models by name, paths by file name."""
    if isinstance(value, DrugModel):
        return {"model": value.name, "digest_sha256": value.digest}
    if isinstance(value, Formula | Quantity):
        return value.text
    if isinstance(value, Path):
        return value.name
    if isinstance(value, float) and value in (float("inf"), float("-inf")):
        return "unlimited"
    if is_dataclass(value):
        return {field.name: plain(getattr(value, field.name)) for field in fields(value)}
    if isinstance(value, dict):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [plain(item) for item in value]
    return value
