"""Does the answer hold? The study again with other variability, within the model's people, under other models."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace
from itertools import combinations

import pandas as pd

from covariates.catalogue import attributes_needed
from covariates.sheet import DrugModel, read_sheet, shipped_sheets
from popsim.compare import pair_row
from popsim.estimate import no_headline, wilson
from popsim.patients.draw import blocks
from popsim.run import simulate
from popsim.study_records import Study, needs_effect_site
from popsim.tally import Tally, range_names

FACTORS = (0.7, 1.3)
MOST_PATIENTS = 10_000  # the first patients of the study, the same people with the same luck


@dataclass(frozen=True)
class Variant:
    """One way of asking again: its words, the study so asked, and whether those outside the model are left out."""

    words: str
    study: Study
    inside_only: bool = False


def robustness(study: Study, threads: int) -> pd.DataFrame:
    """One row per way of asking, group, target and pair of protocols (one protocol: attainment instead of a pair).

    `same_answer` says whether the verdict, or without `[compare] matters` the direction of the difference, is that of
    the study as written, asked of the same first patients; empty for a single protocol.
    """
    few = _fewer(study)
    written = simulate(few, threads, what="pairs").tally
    rows = list(_rows(study, Variant("as written", few), written))
    answers = {_key(row): _answer(row) for row in rows}
    for variant in _variants(few):
        tally = written if variant.inside_only else simulate(variant.study, threads, what="pairs").tally
        rows += _rows(study, variant, tally)
    for row in rows:
        row["same_answer"] = "" if len(study.protocols) == 1 else (
            "yes" if _answer(row) == answers[_key(row)] else "no")
    return pd.DataFrame(rows)


def _fewer(study: Study) -> Study:
    """The same study with the main model and at most MOST_PATIENTS; a list that is not resampled is used whole."""
    population = study.population
    if population.count is not None:
        population = replace(population, count=min(population.count, MOST_PATIENTS))
    return replace(study, population=population, models=study.models[:1])


def _variants(study: Study) -> Iterable[Variant]:
    if study.variability.between_subject:
        for factor in FACTORS:
            scaled = replace(study.variability, scale=study.variability.scale * factor)
            yield Variant(f"variability x {factor:g}", replace(study, variability=scaled))
    if range_names(study.models[0]):
        yield Variant("without patients outside the model", study, inside_only=True)
    for model in other_models(study):
        yield Variant(f"under {model.name}", replace(study, models=(model,)))


def other_models(study: Study) -> list[DrugModel]:
    """Shipped models of the same drug under which the study can be judged.

    None for targets in the effect site, which is another one in each model. A model without variability of its own only
    where the study needs none or borrows it.
    """
    if any(needs_effect_site(target) for target in study.targets):
        return []
    main, has = study.models[0], next(iter(blocks(study.population, study.seed))).attributes
    found = []
    for model in (read_sheet(name) for name in shipped_sheets()):
        needs = model.needs | set(model.built_on.ranges) | ({"sex"} if model.built_on.sex else set())
        varies = model.spread or study.variability.from_model or not study.variability.between_subject
        if (model.drug == main.drug and model.name != main.name and varies and _same_fluid(study, model)
                and not any(attributes_needed(name, has) for name in needs)
                and has.keys() >= {*model.switches, *model.numbers}):
            found.append(model)
    return found


def _same_fluid(study: Study, model: DrugModel) -> bool:
    """Whether the targets mean the same under it: the same fluid, and a fraction unbound where one is needed."""
    if model.measured_in["fluid"] != study.models[0].measured_in["fluid"]:
        return False
    if any(target.measured for target in study.targets) and not model.measurement_error:
        return False
    unbound = any(target.unbound or (target.response and target.response.follows.startswith("unbound"))
                  for target in study.targets)
    return not unbound or model.measured_in["fluid"] == "unbound plasma" or "fraction_unbound" in model.measured_in


def _rows(study: Study, variant: Variant, tally: Tally) -> Iterable[dict]:
    """One row per group, target and pair."""
    for g, group in enumerate(study.group_names):
        patients = int(tally.patients[g]) - (int(tally.outside[0][g]) if variant.inside_only else 0)
        for t, target in enumerate(study.targets):
            first = {"asked": variant.words, "model": variant.study.models[0].name, "group": group,
                     "target": target.name}
            if len(study.protocols) == 1:
                yield first | {"protocol_a": study.protocols[0].name, "protocol_b": "", "patients": patients,
                               **_attained(tally, t, g, patients, variant.inside_only)}
            for a, b in combinations(range(len(study.protocols)), 2):
                names = (study.protocols[a].name, study.protocols[b].name)
                tallied = (tally.pairs_inside if variant.inside_only else tally.pairs)[0, t, a, b]
                worth = tally.worth_paired(tallied, g, ("attained", 0, a, t), ("attained", 0, b, t),
                                           _division(variant.inside_only))
                row = pair_row(tallied, g, patients, names, study.matters, worth)
                kept = ("patients", "failed", "attained_a", "attained_b", "difference", "difference_low",
                        "difference_high", "verdict", "better")
                yield first | {"protocol_a": names[0], "protocol_b": names[1], **{name: row[name] for name in kept}}


def _attained(tally: Tally, t: int, g: int, patients: int, inside_only: bool) -> dict:
    counts = tally.targets[0, 0, t]
    attained = int(counts.attained[g]) - (int(counts.attained_outside[g]) if inside_only else 0)
    worth = tally.clusters.worth(("attained", 0, 0, t), _division(inside_only))[g] if tally.clusters else 1.0
    low, high = wilson(attained * worth, patients * worth)
    share = attained / patients if patients else float("nan")
    return {"attained_a": share, "attained_low": float(low), "attained_high": float(high)}


def _division(inside_only: bool) -> str:
    """Whom of a list that is drawn again and again: what `run` calls them."""
    return "inside model 0" if inside_only else "groups"


def _key(row: dict) -> tuple:
    return tuple(row[name] for name in ("group", "target", "protocol_a", "protocol_b"))


def _answer(row: dict) -> str:
    """The verdict with the better protocol; without a verdict which protocol is clearly ahead, if any."""
    if not row.get("patients"):
        return "no patients"
    if no_headline(row.get("failed", 0), row["patients"]):
        return "no headline"
    if row.get("verdict"):
        return f"{row['verdict']} {row['better']}"
    if row.get("difference_low", 0) > 0:
        return f"ahead {row['protocol_b']}"
    return f"ahead {row['protocol_a']}" if row.get("difference_high", 0) < 0 else "no clear difference"
