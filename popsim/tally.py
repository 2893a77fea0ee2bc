"""Counts over patients. Only integers are added, so the order of blocks and threads cannot change a digit."""

from __future__ import annotations

from dataclasses import dataclass, field
from itertools import combinations
from typing import Literal

import numpy as np

from covariates.problems import Problem, ProblemsError
from covariates.sheet import DrugModel
from popsim import solve
from popsim.clusters import ClusterTally
from popsim.counted import KEY_COUNT, MEASURE_KEYS, count_by_group, decimal_keys, measure_keys
from popsim.population_tally import PopulationTally
from popsim.records import Judged, Received
from popsim.study_records import Study

ONE = 2**32  # a share of 1 as a fixed-point integer
STEPS_OF_SHARE = 1000  # differences of shares are counted in thousandths
MOST_BYTES = 8 * 2**30
What = Literal["everything", "pairs", "attainment"]  # what is counted
MOST_NAMED = 10  # patients who could not be simulated are named up to this many for each reason


@dataclass
class TargetTally:
    """One model, protocol and target; (groups,) integers, and the over-time counts."""

    failed: np.ndarray
    attained: np.ndarray
    below: np.ndarray
    inside: np.ndarray
    above: np.ndarray
    far_below: np.ndarray
    far_above: np.ndarray
    ever_below: np.ndarray
    ever_above: np.ndarray
    attained_outside: np.ndarray  # of those outside the people the model was built on
    below_squared: np.ndarray
    inside_squared: np.ndarray
    above_squared: np.ndarray
    over_time: np.ndarray  # (groups, times, 3): below, in range, above
    bins: np.ndarray  # (groups, times, bins) of the course quantity
    measures: dict[str, np.ndarray] = field(default_factory=dict)  # (groups, keys) of `measure_keys`

    def add(self, judged: Judged, members: np.ndarray, outside: np.ndarray) -> None:
        columns = {"failed": judged.failed, "attained": judged.attained, **fixed_shares(judged),
                   "far_below": judged.far_below, "far_above": judged.far_above,
                   "ever_below": judged.ever_below, "ever_above": judged.ever_above,
                   "attained_outside": judged.attained & outside}
        columns |= {f"{name}_squared": np.rint((columns[name] / ONE) ** 2 * ONE)
                    for name in ("below", "inside", "above")}
        for name, values in columns.items():
            getattr(self, name)[:] += members.T @ values.astype(np.int64)
        for name, values in judged.measures.items():
            counts = self.measures.setdefault(name, np.zeros((members.shape[1], MEASURE_KEYS), dtype=np.int64))
            count_by_group(counts, measure_keys(values), members * ~np.isnan(values)[:, None])


def fixed_shares(judged: Judged) -> dict[str, np.ndarray]:
    """Each patient's shares of the window, (n,) fixed-point integers that add up to ONE; 0 in whoever failed."""
    fine = ~judged.failed
    below, inside = (np.where(fine, np.rint(np.nan_to_num(share) * ONE), 0).astype(np.int64)
                     for share in (judged.below, judged.inside))
    return {"below": below, "inside": inside, "above": np.where(fine, ONE - below - inside, 0)}


@dataclass
class ShareTally:
    """A share of each patient; (groups,) integers."""

    total: np.ndarray
    squared: np.ndarray

    def add(self, share: np.ndarray, members: np.ndarray) -> None:
        self.total += members.T @ np.rint(share * ONE).astype(np.int64)
        self.squared += members.T @ np.rint(share**2 * ONE).astype(np.int64)


@dataclass
class PairTally:
    """Two protocols in the same patients under one model and target; (groups,) integers.

    gained  (groups, steps) counts of the difference b - a in the share of the window in range, -1 to 1 in thousandths
    """

    failed: np.ndarray
    both: np.ndarray
    only_a: np.ndarray
    only_b: np.ndarray
    neither: np.ndarray
    gained: np.ndarray

    def add(self, a: Judged, b: Judged, members: np.ndarray) -> None:
        columns = {"failed": a.failed | b.failed, "both": a.attained & b.attained, "only_a": a.attained & ~b.attained,
                   "only_b": ~a.attained & b.attained, "neither": ~a.attained & ~b.attained}
        for name, values in columns.items():
            getattr(self, name)[:] += members.T @ values.astype(np.int64)
        gained = np.nan_to_num(b.inside) - np.nan_to_num(a.inside)
        keys = np.rint(STEPS_OF_SHARE * (1 + gained)).astype(np.int64)
        count_by_group(self.gained, keys, members * ~columns["failed"][:, None])


@dataclass
class DoseTally:
    """What one protocol gives; doses counted by group to four significant digits."""

    # capped, floored, rounded, impossible, too_fast, undosed, vials, vials_squared: (groups,)
    counts: dict[str, np.ndarray]
    doses: dict[str, np.ndarray]  # total_mg, mg_per_kg_total, mg_per_kg_lean: (groups, keys)

    def add(self, received: Received, per: dict[str, np.ndarray], members: np.ndarray) -> None:
        """`per` gives the divisor in kg of each per-kg measure that these patients have."""
        for name, counts in self.counts.items():
            values = received.vials**2 if name == "vials_squared" else getattr(received, name)
            counts += members.T @ values.astype(np.int64)
        for name, divisor in {"total_mg": 1.0, **per}.items():
            count_by_group(self.doses[name], decimal_keys(received.total_mg / divisor), members)


@dataclass
class Tally:
    """All counts of a study; one per thread, added up at the end."""

    patients: np.ndarray  # (groups,)
    outside: dict[int, np.ndarray]  # model -> (groups,)
    beyond: dict[tuple[int, str], np.ndarray]  # model, attribute -> (groups,)
    long_infusion: dict[tuple[int, int], np.ndarray]  # model, protocol -> (groups,)
    large_total: dict[tuple[int, int], np.ndarray]  # model, protocol -> (groups,)
    targets: dict[tuple[int, int, int], TargetTally]  # model, protocol, target
    pairs: dict[tuple[int, int, int, int], PairTally]  # model, target, protocol a, protocol b
    pairs_inside: dict[tuple[int, int, int, int], PairTally]  # without those outside the model's people
    quartile_pairs: dict[tuple[int, int, int, int], PairTally]  # by quartiles of covariates: (quartiles,)
    quartile_patients: np.ndarray  # (quartiles,)
    cuts: dict[str, np.ndarray]  # covariate -> its three quartiles
    responses: dict[tuple[int, int, str], ShareTally]  # model, protocol, targets of one distribution of MICs
    together: dict[tuple[int, int, int], PairTally]  # model, first protocol, protocol: all targets
    doses: dict[int, DoseTally]  # protocol
    overlap: np.ndarray  # (groups, groups) patients in both
    population: PopulationTally | None
    statuses: dict[tuple[int, int], int] = field(default_factory=dict)  # model, status code -> patients
    failing: dict[tuple[int, int], list[int]] = field(default_factory=dict)  # ... -> the first of their numbers
    clusters: ClusterTally | None = None  # only where people of a list are drawn again and again
    flags: dict[tuple[str, str], int] = field(default_factory=dict)  # covariate equation, how it misleads -> patients

    @classmethod
    def empty(cls, study: Study, times: int, cuts: dict[str, np.ndarray], origins: int = 0,
              what: What = "everything") -> Tally:
        """Nothing counted yet; no room for what is not asked for: "pairs" and "attainment" leave out responses, joint
        targets, doses and people, "attainment" also pairs."""
        everything, groups = what == "everything", len(study.group_names)
        models, protocols, targets = (range(len(items)) for items in (study.models, study.protocols, study.targets))

        def zeros(size: int = groups) -> np.ndarray:
            return np.zeros(size, dtype=np.int64)

        def target_tally(t: int) -> TargetTally:
            rows = times if study.targets[t].over_time else 0
            return TargetTally(*(zeros() for _ in range(13)),
                               over_time=np.zeros((groups, rows, 3), dtype=np.int64),
                               bins=np.zeros((groups, rows, solve.BIN_COUNT), dtype=np.int32))

        def pair_tally(size: int) -> PairTally:
            return PairTally(*(zeros(size) for _ in range(5)),
                             gained=np.zeros((size, 2 * STEPS_OF_SHARE + 1), dtype=np.int64))

        def pair_tallies(size: int) -> dict[tuple[int, int, int, int], PairTally]:
            return {(m, t, a, b): pair_tally(size)
                    for m in models for t in targets for a, b in combinations(protocols, 2)
                    if what != "attainment"}

        def dose_tally() -> DoseTally:
            return DoseTally(
                {name: zeros() for name in ("capped", "floored", "rounded", "impossible", "too_fast", "undosed",
                                            "vials", "vials_squared")},
                {name: np.zeros((groups, KEY_COUNT), dtype=np.int64)
                 for name in ("total_mg", "mg_per_kg_total", "mg_per_kg_lean")})

        return cls(
            patients=zeros(),
            outside={m: zeros() for m in models},
            beyond={(m, name): zeros() for m in models for name in range_names(study.models[m])},
            long_infusion={(m, p): zeros() for m in models for p in protocols},
            large_total={(m, p): zeros() for m in models for p in protocols},
            targets={(m, p, t): target_tally(t) for m in models for p in protocols for t in targets},
            pairs=pair_tallies(groups),
            pairs_inside=pair_tallies(groups),
            quartile_pairs=pair_tallies(4 * len(cuts)),
            quartile_patients=zeros(4 * len(cuts)),
            cuts=cuts,
            responses={(m, p, family): ShareTally(zeros(), zeros())
                       for m in models for p in protocols for family in study.families if everything},
            together={(m, 0, p): pair_tally(groups)
                      for m in models for p in protocols if study.joint_targets and everything},
            doses={p: dose_tally() for p in protocols if everything},
            overlap=np.zeros((groups, groups), dtype=np.int64),
            population=PopulationTally.empty(study) if everything else None,
            clusters=ClusterTally.empty(origins) if origins else None,
        )

    def merge(self, other: Tally) -> None:
        """Add another thread's counts to this one's."""
        for key, counts in other.targets.items():
            for name, theirs in counts.measures.items():
                self.targets[key].measures.setdefault(name, np.zeros_like(theirs))
        for mine, theirs in zip(_arrays(self), _arrays(other), strict=True):
            mine += theirs
        for key, count in other.statuses.items():
            self.statuses[key] = self.statuses.get(key, 0) + count
            self.failing[key] = sorted({*self.failing.get(key, []), *other.failing[key]})[:MOST_NAMED]
        self.add_flags(other.flags)

    def add_flags(self, counts: dict[tuple[str, str], int]) -> None:
        for flag, count in counts.items():
            self.flags[flag] = self.flags.get(flag, 0) + count

    def worth(self, key: tuple[int, int, int]) -> np.ndarray:
        """(groups,) what one patient is worth in independent draws, for the share attained; model, protocol, target."""
        return self.clusters.worth(("attained", *key)) if self.clusters else np.ones_like(self.patients)

    def worth_paired(self, pair: PairTally, part: int, a: tuple, b: tuple, division: str = "groups") -> float | None:
        """Likewise for the difference between two sums of `clusters` in one part of a division; None where every
        patient is a draw of its own."""
        if self.clusters is None:
            return None
        return self.clusters.worth_paired(a, b, division, part, int(pair.only_a[part] + pair.only_b[part]))

    def add_statuses(self, model: int, status: np.ndarray, first: int) -> None:
        """Count who could not be computed, and why; `first` is the number of the block's first patient."""
        for code, count in zip(*np.unique(status[status != 0], return_counts=True), strict=True):
            key = (model, int(code))
            self.statuses[key] = self.statuses.get(key, 0) + int(count)
            numbers = (first + np.nonzero(status == code)[0][:MOST_NAMED]).tolist()
            self.failing[key] = sorted([*self.failing.get(key, []), *numbers])[:MOST_NAMED]


@dataclass(frozen=True)
class Findings:
    """What a run found: counts, and how it went."""

    study: Study
    tally: Tally
    candidates_seen: int
    candidates_eligible: int
    rows_skipped: int
    seconds: float
    threads: int
    share_eligible: float = float("nan")  # of the people within the limits of age and sex


def range_names(model: DrugModel) -> list[str]:
    """Attributes by which a patient can lie outside the people that a model was built on."""
    return [*model.built_on.ranges, *(["sex"] if model.built_on.sex is not None else [])]


def _arrays(tally: Tally) -> list[np.ndarray]:
    """Every counting array of a tally, always in the same order."""
    found = [tally.patients, tally.overlap, tally.quartile_patients,
             *(tally.population.arrays() if tally.population else [])]
    for table in (tally.outside, tally.beyond, tally.long_infusion, tally.large_total):
        found += table.values()
    for table in (tally.targets, tally.pairs, tally.pairs_inside, tally.quartile_pairs, tally.responses,
                  tally.together):
        for entry in table.values():
            found += (counts for counts in vars(entry).values() if isinstance(counts, np.ndarray))
    for entry in tally.targets.values():
        found += (entry.measures[name] for name in sorted(entry.measures))
    for entry in tally.doses.values():
        found += [*entry.counts.values(), *entry.doses.values()]
    if tally.clusters is not None:
        found += tally.clusters.arrays()
    return found


def check_room(study: Study, times: int) -> None:
    """Raise ProblemsError where the counts of one thread would outgrow any ordinary machine's memory."""
    followed = sum(target.over_time for target in study.targets)
    courses = len(study.models) * followed * times * (4 * solve.BIN_COUNT + 3 * 8)
    measures = len(study.models) * len(study.targets) * 2 * 8 * MEASURE_KEYS
    needed = len(study.group_names) * len(study.protocols) * (courses + measures + 3 * 8 * KEY_COUNT)
    if needed > MOST_BYTES:
        raise ProblemsError(Problem(
            "run: every", f"counts of {needed / 2**30:.0f} GB, by group, protocol, model, target and time",
            f"at most {MOST_BYTES / 2**30:.0f} GB", "a longer step, or fewer groups, protocols, models or targets"))
