"""Protocol against protocol in the same patients, group against group in separate ones."""

from __future__ import annotations

from itertools import combinations

from popsim.estimate import no_headline, paired_difference, unpaired_difference, verdict
from popsim.records import Study
from popsim.tally import Tally


def protocol_pairs(study: Study, tally: Tally) -> list[dict]:
    """One row per model, group, target and pair; differences are b - a, paired on the same patients."""
    rows = []
    for m, model in enumerate(study.models):
        for g, group in enumerate(study.group_names):
            for t, target in enumerate(study.targets):
                for a, b in combinations(range(len(study.protocols)), 2):
                    counts = {name: int(values[g]) for name, values in vars(tally.pairs[m, t, a, b]).items()}
                    worth = tally.worth_paired(m, t, a, b, g)
                    names = (study.protocols[a].name, study.protocols[b].name)
                    rows.append({"model": model.name, "group": group, "target": target.name,
                                 "protocol_a": names[0], "protocol_b": names[1],
                                 **_pair(counts, worth, int(tally.patients[g]), names, study.matters)})
    return rows


def _pair(counts: dict[str, int], worth: float, patients: int, names: tuple[str, str], matters: float | None) -> dict:
    four = (counts[name] * worth for name in ("both", "only_a", "only_b", "neither"))
    difference, low, high = paired_difference(*four)
    said = "" if no_headline(counts["failed"], patients) else verdict(low, high, matters)
    shares = {name: _share(counts[name], patients) for name in ("only_a", "only_b", "both", "neither")}
    return {"patients": patients, "failed": counts["failed"],
            "attained_a": _share(counts["both"] + counts["only_a"], patients),
            "attained_b": _share(counts["both"] + counts["only_b"], patients),
            "difference": difference, "difference_low": low, "difference_high": high, **shares,
            "verdict": said, "better": names[difference > 0] if said == "better" else ""}


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
