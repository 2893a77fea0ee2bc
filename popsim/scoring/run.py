"""The order of a score: files -> models that can be asked -> predictions."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np

from covariates.catalogue import attributes_needed
from covariates.formula import Formula, compile_formula
from covariates.problems import Problem, ProblemsError, nearest
from covariates.sheet import DrugModel, read_sheet, shipped_sheets
from popsim.scoring.files import Measured, read_measured
from popsim.scoring.predict import Predictions, lacking, predict
from popsim.scoring.tables import Scored
from popsim.streams import BLOCK

MOST_NUMBERS = 40_000_000  # simulated concentrations of one model: 0.3 GB
USUAL_GROUPS = ("obese: bmi >= 30", "elderly: age >= 65")


def score_models(files: tuple[Path, Path, Path], drug: str | None, names: tuple[str, ...], groups: tuple[str, ...],
                 replicates: int, seed: int, prepare: Callable[[], None] = lambda: None) -> Scored:
    """Score the named sheets, or every shipped sheet of a drug that these people can be asked about.

    files    people, given, measured
    prepare  called before anything is computed

    Raises ProblemsError: files that cannot be used, an unknown drug, a named sheet that cannot be asked, no sheet left.
    """
    models = models_asked(drug, names)
    measured = read_measured(*files)
    reasons = {model.name: lacking(model, measured) for model in models}
    left_out = {name: why for name, why in reasons.items() if why}
    usable = tuple(model for model in models if model.name not in left_out)
    if left_out and (names or not usable):
        raise ProblemsError(Problem(f"model {name}", why, "what the sheet needs for every person",
                                    "add the columns to the people's file") for name, why in left_out.items())
    asked = groups_asked(groups, measured)
    _check_size(measured, replicates)
    prepare()
    found = [(model, predict(model, measured, replicates, seed)) for model in usable]
    if drug:
        found, twins = _without_twins(found)
        left_out |= twins
    kept, predictions = zip(*found, strict=True)
    return Scored(measured, asked, kept, predictions, left_out, seed)


def _without_twins(found: list[tuple[DrugModel, Predictions]]) -> tuple[list[tuple[DrugModel, Predictions]],
                                                                        dict[str, str]]:
    """Without the sheets that predict the same concentrations as an earlier one, and which those are."""
    kept: list[tuple[DrugModel, Predictions]] = []
    twins: dict[str, str] = {}
    for model, one in found:
        twin = next((other.name for other, theirs in kept
                     if np.array_equal(theirs.typical, one.typical, equal_nan=True) and other.spread == model.spread
                     and other.measurement_error == model.measurement_error), None)
        if twin is None:
            kept.append((model, one))
        else:
            twins[model.name] = f"predicts the same concentrations as {twin}"
    return kept, twins


def _check_size(measured: Measured, replicates: int) -> None:
    """Raise ProblemsError for more than memory or the streams of luck can hold."""
    people, count = len(measured.labels), len(measured.value)
    if people > BLOCK:
        raise ProblemsError(Problem("people", f"{people:,} measured patients", f"at most {BLOCK:,}",
                                    "score them in parts"))
    if replicates * count > MOST_NUMBERS:
        raise ProblemsError(Problem("--replicates", f"{replicates:,} for {count:,} measurements",
                                    f"at most {MOST_NUMBERS // count:,}", "or score the patients in parts"))


def models_asked(drug: str | None, names: tuple[str, ...]) -> tuple[DrugModel, ...]:
    """The sheets by name, or all of a drug."""
    if bool(drug) == bool(names):
        raise ProblemsError(Problem("--drug, --model", "both" if drug else "neither", "one of the two",
                                    "--drug remifentanil scores all its sheets; --model NAME only those named"))
    if names:
        return tuple(read_sheet(name) for name in dict.fromkeys(names))
    shipped = [read_sheet(name) for name in shipped_sheets()]
    found = tuple(model for model in shipped if model.drug == drug)
    if not found:
        drugs = sorted({model.drug for model in shipped})
        raise ProblemsError(Problem("--drug", f'"{drug}", of which there is no sheet', ", ".join(drugs),
                                    nearest(str(drug), drugs)))
    return found


def groups_asked(texts: tuple[str, ...], measured: Measured) -> tuple[tuple[str, Formula], ...]:
    """Groups as given; the usual ones, where these people have what they need."""
    groups = []
    for text in texts or USUAL_GROUPS:
        name, colon, where = text.partition(":")
        if not colon or not name.strip() or not where.strip():
            raise ProblemsError(Problem("--group", f'"{text}"', "NAME:CONDITION", '--group "old: age >= 75"'))
        condition = compile_formula(where.strip(), f'group "{name.strip()}"', "condition")
        known = all(not attributes_needed(needed, measured.attributes) for needed in condition.names)
        if texts and not known:
            raise ProblemsError(Problem(f'--group "{text}"', "attributes that the people's file lacks",
                                        ", ".join(sorted(measured.attributes))))
        if known:
            groups.append((name.strip(), condition))
    return tuple(groups)
