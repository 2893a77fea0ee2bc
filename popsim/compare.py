"""Protocol against protocol in the same patients, group against group in separate ones."""

from __future__ import annotations

from itertools import combinations

import numpy as np

from popsim.counted import key_of_rank
from popsim.estimate import no_headline, paired_difference, quantile_ranks, unpaired_difference, verdict, wilson
from popsim.slices import QUARTILES
from popsim.study_records import Study, needs_effect_site
from popsim.tally import STEPS_OF_SHARE, PairTally, Tally


def protocol_pairs(study: Study, tally: Tally) -> list[dict]:
    """One row per model, group, target and pair; differences are b - a, paired on the same patients."""
    rows = []
    for m, model in enumerate(study.models):
        for g, group in enumerate(study.group_names):
            for t, target in enumerate(study.targets):
                for a, b in combinations(range(len(study.protocols)), 2):
                    names = (study.protocols[a].name, study.protocols[b].name)
                    tallied = tally.pairs[m, t, a, b]
                    worth = tally.worth_paired(tallied, g, ("attained", m, a, t), ("attained", m, b, t))
                    rows.append({"model": model.name, "group": group, "target": target.name,
                                 "protocol_a": names[0], "protocol_b": names[1],
                                 **pair_row(tallied, g, int(tally.patients[g]), names, study.matters, worth)})
    return rows


def pair_row(tallied: PairTally, g: int, patients: int, names: tuple[str, str], matters: float | None,
             worth: float | None) -> dict:
    """One pair in one group; `worth` is what a patient counts in independent draws, None where each is one.

    median_gain: the median over patients of b - a in the share of the window in range; without an interval where
    people are drawn again and again.
    """
    counts = {name: int(getattr(tallied, name)[g]) for name in ("failed", "both", "only_a", "only_b", "neither")}
    four = (counts[name] * (1 if worth is None else worth) for name in ("both", "only_a", "only_b", "neither"))
    difference, low, high = paired_difference(*four)
    said = "" if no_headline(counts["failed"], patients) else verdict(low, high, matters)
    shares = {name: _share(counts[name], patients) for name in ("only_a", "only_b", "both", "neither")}
    return {"patients": patients, "failed": counts["failed"],
            "attained_a": _share(counts["both"] + counts["only_a"], patients),
            "attained_b": _share(counts["both"] + counts["only_b"], patients),
            "difference": difference, "difference_low": low, "difference_high": high, **shares,
            "verdict": said, "better": names[difference > 0] if said == "better" else "",
            **_median_gain(tallied.gained[g], worth is None)}


def _median_gain(counted: np.ndarray, independent: bool) -> dict[str, float]:
    n, names = int(counted.sum()), ("median_gain", "median_gain_low", "median_gain_high")
    if n == 0:
        return dict.fromkeys(names, float("nan"))
    found = {name: key_of_rank(counted, rank) / STEPS_OF_SHARE - 1
            for name, rank in zip(names, quantile_ranks(0.5, n), strict=True)}
    return found if independent else found | dict.fromkeys(names[1:], float("nan"))


def quartile_pairs(study: Study, tally: Tally) -> list[dict]:
    """One row per model, target, pair and quarter of a covariate: who gains and who loses; differences are b - a."""
    rows = []
    for (m, t, a, b), tallied in tally.quartile_pairs.items():
        names = (study.protocols[a].name, study.protocols[b].name)
        for place, (covariate, cut) in enumerate(tally.cuts.items()):
            edges = [float("-inf"), *(float(value) for value in cut), float("inf")]
            for quarter in range(len(QUARTILES) + 1):
                g = place * (len(QUARTILES) + 1) + quarter
                worth = tally.worth_paired(tallied, g, ("attained", m, a, t), ("attained", m, b, t), "quarters")
                rows.append({"model": study.models[m].name, "target": study.targets[t].name, "protocol_a": names[0],
                             "protocol_b": names[1], "covariate": covariate, "quarter": quarter + 1,
                             "above": edges[quarter], "up_to": edges[quarter + 1],
                             **pair_row(tallied, g, int(tally.quartile_patients[g]), names, study.matters, worth)})
    return rows


def all_of_them(study: Study, tally: Tally) -> list[dict]:
    """One row per model, protocol and group: who attains all targets; paired difference to the first protocol."""
    rows = []
    for (m, a, b), tallied in tally.together.items():
        names = (study.protocols[a].name, study.protocols[b].name)
        for g, group in enumerate(study.group_names):
            n = int(tally.patients[g])
            worth = tally.worth_paired(tallied, g, ("together", m, a), ("together", m, b))
            pair = pair_row(tallied, g, n, names, study.matters, worth)
            each = tally.clusters.worth(("together", m, b))[g] if tally.clusters else 1.0
            low, high = wilson(int(tallied.both[g] + tallied.only_b[g]) * each, n * each)
            first = a == b
            rows.append({"model": study.models[m].name, "protocol": names[1], "group": group, "patients": n,
                         "failed": pair["failed"], "attained": pair["attained_b"], "attained_low": float(low),
                         "attained_high": float(high), "compared_with": "" if first else names[0],
                         **{name: float("nan") if first else pair[name]
                            for name in ("difference", "difference_low", "difference_high")},
                         "verdict": "" if first else pair["verdict"], "better": "" if first else pair["better"]})
    return rows


def between_models(study: Study, tally: Tally) -> list[dict]:
    """One row per protocol, group and target: the spread of attainment between models beside the simulation interval.

    None for a single model, nor for targets in the effect site, which is another one in each model.
    """
    rows = []
    if len(study.models) == 1:
        return rows
    for p, protocol in enumerate(study.protocols):
        for t, target in enumerate(study.targets):
            for g, group in enumerate(study.group_names) if not needs_effect_site(target) else ():
                n = int(tally.patients[g])
                counts = [int(tally.targets[m, p, t].attained[g]) for m in range(len(study.models))]
                least, most = counts.index(min(counts)), counts.index(max(counts))
                worth = tally.worth((0, p, t))[g]
                low, high = wilson(counts[0] * worth, n * worth)
                rows.append({"protocol": protocol.name, "group": group, "target": target.name, "patients": n,
                             "lowest": _share(counts[least], n), "lowest_model": study.models[least].name,
                             "highest": _share(counts[most], n), "highest_model": study.models[most].name,
                             "spread_between_models": _share(counts[most] - counts[least], n),
                             "simulation_interval": float(high - low)})
    return rows


def _share(count: int, patients: int) -> float:
    return count / patients if patients else float("nan")


def against_reference(study: Study, tally: Tally) -> list[dict]:
    """One row per model, protocol, target, group; differences are group - reference, refused where groups overlap."""
    if study.reference is None:
        return []
    names = study.group_names
    r = names.index(study.reference)
    rows = []
    for (m, p, t), counts in tally.targets.items():
        worth = tally.worth((m, p, t))
        for g, group in enumerate(names):
            if g in (0, r):
                continue
            n_reference, n = int(tally.patients[r]), int(tally.patients[g])
            in_reference, in_group = int(counts.attained[r]), int(counts.attained[g])
            overlap = int(tally.overlap[r, g])
            difference, low, high = (unpaired_difference(in_reference * worth[r], n_reference * worth[r],
                                                         in_group * worth[g], n * worth[g]) if not overlap
                                     else (float("nan"),) * 3)
            rows.append({
                "model": study.models[m].name, "protocol": study.protocols[p].name, "target": study.targets[t].name,
                "group": group, "reference": study.reference, "patients": n, "reference_patients": n_reference,
                "attained": _share(in_group, n), "reference_attained": _share(in_reference, n_reference),
                "difference": difference, "difference_low": low, "difference_high": high,
                "failed": int(counts.failed[g]), "reference_failed": int(counts.failed[r]),
                "note": f"{overlap} patients are in both groups: no difference is given" if overlap else ""})
    return rows
