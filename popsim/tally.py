"""Counts over patients. Only integers are added, so the order of blocks and threads cannot change a digit."""

from __future__ import annotations

from dataclasses import dataclass, field
from itertools import combinations, product

import numpy as np

from covariates.problems import Problem, ProblemsError
from covariates.sheet import DrugModel
from popsim import solve
from popsim.clusters import ClusterTally
from popsim.population_tally import PopulationTally
from popsim.records import Judged, Received, Study

ONE = 2**32  # a share of 1 as a fixed-point integer
DIGITS = 4  # doses are counted to four significant digits
LOWEST_DECADE, DECADES = -9, 18
MANTISSAS = 9 * 10 ** (DIGITS - 1)
KEY_COUNT = 1 + DECADES * MANTISSAS
HIGHEST = 9.999 * 10.0 ** (LOWEST_DECADE + DECADES - 1)
MOST_BYTES = 8 * 2**30
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
    over_time: np.ndarray  # (groups, times, 3): below, in range, above
    bins: np.ndarray  # (groups, times, bins) of the course quantity

    def add(self, judged: Judged, members: np.ndarray) -> None:
        fine = ~judged.failed
        below, inside = (np.where(fine, np.rint(np.nan_to_num(share) * ONE), 0).astype(np.int64)
                         for share in (judged.below, judged.inside))
        columns = {"failed": judged.failed, "attained": judged.attained, "below": below, "inside": inside,
                   "above": np.where(fine, ONE - below - inside, 0), "far_below": judged.far_below,
                   "far_above": judged.far_above}
        for name, values in columns.items():
            getattr(self, name)[:] += members.T @ values.astype(np.int64)


@dataclass
class PairTally:
    """Two protocols in the same patients under one model and target; (groups,) integers."""

    failed: np.ndarray
    both: np.ndarray
    only_a: np.ndarray
    only_b: np.ndarray
    neither: np.ndarray

    def add(self, a: Judged, b: Judged, members: np.ndarray) -> None:
        columns = {"failed": a.failed | b.failed, "both": a.attained & b.attained, "only_a": a.attained & ~b.attained,
                   "only_b": ~a.attained & b.attained, "neither": ~a.attained & ~b.attained}
        for name, values in columns.items():
            getattr(self, name)[:] += members.T @ values.astype(np.int64)


@dataclass
class DoseTally:
    """What one protocol gives; doses counted by group to four significant digits."""

    counts: dict[str, np.ndarray]  # capped, floored, rounded, impossible, undosed: (groups,)
    doses: dict[str, np.ndarray]  # total_mg, mg_per_kg_total, mg_per_kg_lean: (groups, keys)

    def add(self, received: Received, per: dict[str, np.ndarray], members: np.ndarray) -> None:
        """`per` gives the divisor in kg of each per-kg measure that these patients have."""
        for name, counts in self.counts.items():
            counts += members.T @ getattr(received, name).astype(np.int64)
        for name, divisor in {"total_mg": 1.0, **per}.items():
            keys = decimal_keys(received.total_mg / divisor)
            for group in range(members.shape[1]):
                np.add.at(self.doses[name][group], keys[members[:, group] > 0], 1)


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
    doses: dict[int, DoseTally]  # protocol
    overlap: np.ndarray  # (groups, groups) patients in both
    population: PopulationTally | None
    over_time: bool  # whether the targets' over-time counts are kept
    statuses: dict[tuple[int, int], int] = field(default_factory=dict)  # model, status code -> patients
    failing: dict[tuple[int, int], list[int]] = field(default_factory=dict)  # ... -> the first of their numbers
    clusters: ClusterTally | None = None  # only where people of a list are drawn again and again
    flags: dict[tuple[str, str], int] = field(default_factory=dict)  # covariate equation, how it misleads -> patients

    @classmethod
    def empty(cls, study: Study, times: int, origins: int = 0, attainment_only: bool = False) -> Tally:
        """Nothing counted yet; `attainment_only` leaves out the counts over time, of pairs, doses and people."""
        groups, times = len(study.group_names), 0 if attainment_only else times
        models, protocols, targets = (range(len(items)) for items in (study.models, study.protocols, study.targets))

        def zeros() -> np.ndarray:
            return np.zeros(groups, dtype=np.int64)

        def target_tally() -> TargetTally:
            return TargetTally(*(zeros() for _ in range(7)),
                               over_time=np.zeros((groups, times, 3), dtype=np.int64),
                               bins=np.zeros((groups, times, solve.BIN_COUNT), dtype=np.int32))

        def dose_tally() -> DoseTally:
            return DoseTally(
                {name: zeros() for name in ("capped", "floored", "rounded", "impossible", "undosed")},
                {name: np.zeros((groups, KEY_COUNT), dtype=np.int64)
                 for name in ("total_mg", "mg_per_kg_total", "mg_per_kg_lean")})

        clusters = ClusterTally.empty(origins, groups, product(models, protocols, targets)) if origins else None
        return cls(
            patients=zeros(),
            outside={m: zeros() for m in models},
            beyond={(m, name): zeros() for m in models for name in range_names(study.models[m])},
            long_infusion={(m, p): zeros() for m in models for p in protocols},
            large_total={(m, p): zeros() for m in models for p in protocols},
            targets={(m, p, t): target_tally() for m in models for p in protocols for t in targets},
            pairs={(m, t, a, b): PairTally(*(zeros() for _ in range(5)))
                   for m in models for t in targets for a, b in combinations(protocols, 2) if not attainment_only},
            doses={p: dose_tally() for p in protocols if not attainment_only},
            overlap=np.zeros((groups, groups), dtype=np.int64),
            over_time=not attainment_only,
            population=None if attainment_only else PopulationTally.empty(study),
            clusters=clusters,
        )

    def merge(self, other: Tally) -> None:
        """Add another thread's counts to this one's."""
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
        return self.clusters.worth(key) if self.clusters else np.ones_like(self.patients)

    def worth_paired(self, m: int, t: int, a: int, b: int, group: int) -> float:
        """Likewise for the difference of protocols b and a in one group."""
        pair = self.pairs[m, t, a, b]
        unequal = int(pair.only_a[group] + pair.only_b[group])
        return self.clusters.worth_paired((m, a, t), (m, b, t), group, unequal) if self.clusters else 1

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
    found = [tally.patients, tally.overlap, *(tally.population.arrays() if tally.population else [])]
    for table in (tally.outside, tally.beyond, tally.long_infusion, tally.large_total):
        found += table.values()
    for table in (tally.targets, tally.pairs):
        for entry in table.values():
            found += vars(entry).values()
    for entry in tally.doses.values():
        found += [*entry.counts.values(), *entry.doses.values()]
    if tally.clusters is not None:
        found += tally.clusters.arrays()
    return found


def check_room(study: Study, times: int) -> None:
    """Raise ProblemsError where the counts of one thread would outgrow any ordinary machine's memory."""
    courses = len(study.models) * len(study.targets) * times * (4 * solve.BIN_COUNT + 3 * 8)
    needed = len(study.group_names) * len(study.protocols) * (courses + 3 * 8 * KEY_COUNT)
    if needed > MOST_BYTES:
        raise ProblemsError(Problem(
            "run: every", f"counts of {needed / 2**30:.0f} GB, by group, protocol, model, target and time",
            f"at most {MOST_BYTES / 2**30:.0f} GB", "a longer step, or fewer groups, protocols, models or targets"))


def decimal_keys(values: np.ndarray) -> np.ndarray:
    """Each value rounded to four significant digits, as an index: 0 for zero, then ascending.

    Raises ProblemsError for a dose that cannot be counted: not a number, below zero, or outside 1e-9 to 1e9.
    """
    positive = values > 0
    within = (values >= 10.0**LOWEST_DECADE) & (values < HIGHEST)
    if not (within | (values == 0)).all():
        wrong = values[~(within | (values == 0))][0]
        raise ProblemsError(Problem("doses", f"a total of {wrong:g} mg, or mg/kg, in a patient",
                                    f"0, or {10.0**LOWEST_DECADE:g} to {HIGHEST:g}", "check the units of the doses"))
    safe = np.where(positive, values, 1.0)
    decade = np.floor(np.log10(safe)).astype(np.int64)
    mantissa = np.rint(safe / 10.0 ** (decade - DIGITS + 1)).astype(np.int64)
    carried = mantissa >= 10**DIGITS  # 9999.7 rounds up into the next decade
    decade, mantissa = np.where(carried, decade + 1, decade), np.where(carried, 10 ** (DIGITS - 1), mantissa)
    short = mantissa < 10 ** (DIGITS - 1)  # log10 may round up just below a power of ten
    mantissa = np.where(short, 10 ** (DIGITS - 1), mantissa)
    keys = 1 + (decade - LOWEST_DECADE) * MANTISSAS + mantissa - 10 ** (DIGITS - 1)
    return np.where(positive, keys, 0)


def decimal_value(key: int) -> float:
    """The value of a key of `decimal_keys`: 600.0 for the key of 600.04."""
    if key == 0:
        return 0.0
    decade, mantissa = divmod(key - 1, MANTISSAS)
    return float(f"{mantissa + 10 ** (DIGITS - 1)}e{decade + LOWEST_DECADE - DIGITS + 1}")


def decimal_quantile(counts: np.ndarray, share: float) -> float:
    """Smallest counted value with at least `share` of the counts at or below it; NaN without counts."""
    total = int(counts.sum())
    if total == 0:
        return float("nan")
    needed = max(int(np.ceil(share * total - 1e-9)), 1)
    return decimal_value(int(np.searchsorted(np.cumsum(counts), needed)))
