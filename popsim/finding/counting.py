"""Many protocols counted in the same patients with the same luck: what every search is made of."""

from __future__ import annotations

import hashlib
import re
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from covariates.problems import Problem, ProblemsError, nearest
from covariates.sheet import DrugModel
from covariates.units import parse_quantity
from popsim.clusters import worth_of
from popsim.estimate import paired_difference, wilson
from popsim.finding.wishes import EVERY, Wish
from popsim.lookup import Lookup
from popsim.patients.draw import blocks
from popsim.records import BlockRows
from popsim.run import simulate
from popsim.study import resolve_study
from popsim.study_records import Study, Target
from popsim.study_sections import ProtocolSection, StudyFile
from popsim.tally import Tally, range_names

AT_ONCE = 100  # protocols counted in one run, so that memory does not grow with them
PILOT = 500  # patients timed to tell the cost of a long run
SUMS = ("failed", "attained", "below", "inside", "above")


@dataclass(frozen=True)
class Asked:
    """A study file with what a search needs of it again and again.

    section  the file as written, `path` where it stands
    base     the study as it resolves, with its first model and the chosen target alone
    wishes   each with the target that counts for it: 0 the study's own, others its wishes' limits
    """

    section: StudyFile
    path: Path
    base: Study
    target: Target
    wishes: tuple[tuple[Wish, int], ...]
    limits: tuple[Target, ...]

    def study(self, protocols: Sequence[ProtocolSection], every_model: bool = False) -> Study:
        """The study with other protocols, every rule of a protocol checked again."""
        section = self.section.model_copy(update={"protocol": list(protocols)})
        try:
            full = resolve_study(section, [], self.path)
        except ProblemsError as error:
            raise ProblemsError(replace(problem, where=_named(problem.where, protocols))
                                for problem in error.problems) from None
        models = full.models if every_model else full.models[:1]
        return replace(full, models=models, targets=(self.target, *self.limits))


def _named(where: str, protocols: Sequence[ProtocolSection]) -> str:
    """"study.toml: protocol 17, dose 1: at_most" with the name of what was tried instead of its number."""
    names = [protocol.name for protocol in protocols]
    return re.sub(r"\bprotocol (\d+)", lambda found: f'find, with "{names[int(found[1]) - 1]}"', where, count=1)


def read_asked(section: StudyFile, path: Path) -> Asked:
    """What a study asks to find; ProblemsError where the study itself, its target or its wishes do not fit."""
    base = resolve_study(section, [], path)
    names = [target.name for target in base.targets]
    wanted = section.find.target
    if wanted is None and len(names) > 1 or wanted is not None and wanted not in names:
        raise ProblemsError(Problem(f"{path.name}: find: target", f'"{wanted}"' if wanted else "missing",
                                    ", ".join(f'"{name}"' for name in names),
                                    nearest(wanted, names) if wanted else "the study has several targets: say which"))
    target = base.targets[names.index(wanted) if wanted else 0]
    problems: list[Problem] = []
    wishes, limits = [], []
    for number, wish in enumerate((wish for text in section.find.wish for wish in text), 1):
        where = f"{path.name}: find: wish {number}"
        if wish.group not in (*base.group_names, EVERY):
            problems.append(Problem(where, f'"{wish.group}", no group of this study',
                                    ", ".join([*base.group_names, EVERY]), nearest(wish.group, base.group_names)))
        try:
            limits += [_limit_target(wish, target, base.models[0], where)] if wish.ever else []
        except ProblemsError as error:
            problems += error.problems
        wishes.append((wish, len(limits) if wish.ever else 0))
    if problems:
        raise ProblemsError(problems)
    return Asked(section, path, base, target, tuple(wishes), tuple(limits))


def _limit_target(wish: Wish, target: Target, model: DrugModel, where: str) -> Target:
    """The wish "ever above X" as a target: always at or below X in the same window."""
    quantity = wish.course or target.quantity
    if quantity == "effect_site" and not model.has_effect_site:
        raise ProblemsError(Problem(where, f'"at the effect site", and {model.name} has none', "in plasma"))
    kind = "area" if "area" in quantity else "number" if quantity in ("effect", "response") else "concentration"
    limit = parse_quantity(wish.limit, [kind], where)
    low, high = (-np.inf, limit.value) if wish.ever == "above" else (limit.value, np.inf)
    course = quantity in ("plasma", "unbound_plasma", "effect_site", "effect", "response")
    return replace(target, name=wish.text, quantity=quantity, low=low, high=high, unit=limit.unit,
                   range_text=f"{'<=' if wish.ever == 'above' else '>='} {limit.text}",
                   rule="always" if course else target.rule, rule_text="always" if course else target.rule_text)


def cut_up(study: Study, name: str, width: float | None, most: int, where: str) -> np.ndarray:
    """The first patients' values of a covariate that is to be cut into cells of a width.

    Raises ProblemsError for a covariate that is no number, or a width that leaves more cells than `most`.
    """
    values = np.asarray(Lookup(next(iter(blocks(study.population, study.seed))).attributes)(name))
    if values.dtype.kind != "f":
        raise ProblemsError(Problem(where, f'"{name}", which is no number',
                                    "a covariate that is a number, such as weight or age"))
    cells = np.ptp(values) / width if width else 0
    if cells > most:
        raise ProblemsError(Problem(where, f"{cells:,.0f} cells of {width:g} across {name}", f"at most {most}",
                                    "wider cells"))
    return values


@dataclass
class Counts:
    """What became of the same patients under each of many protocols (axis p), by target t, group g and cell c.

    cells     (c, k) int64, what tells the cells apart; one cell (c = 1, k = 0) where the search needs none
    patients  (g, c) int64
    sums      name -> (p, t, g, c): patients who failed, attained; sums of their shares of the window
    dose_mg   (p, g) mean total dose
    outside   (g,) patients outside the people the model was built on, NaN where the sheet does not tell
    too_long  (p, g) patients infused longer than anyone studied
    worth     (p, t, g) what a patient is worth in independent draws: under 1 where a list is drawn again and again
    flags     (p, bytes) who attains the first target, packed; `members` (g, bytes) who belongs where
    origins   (8 x bytes,) row of the list that each was drawn from, where people are drawn again and again; else None
    """

    names: list[str]
    groups: tuple[str, ...]
    cells: np.ndarray
    patients: np.ndarray
    sums: dict[str, np.ndarray]
    dose_mg: np.ndarray
    outside: np.ndarray
    too_long: np.ndarray
    worth: np.ndarray
    flags: np.ndarray
    members: np.ndarray
    origins: np.ndarray | None

    def beside(self, other: Counts) -> Counts:
        """Both, for the same patients."""
        sums = {name: np.concatenate([self.sums[name], other.sums[name]]) for name in self.sums}
        return replace(self, names=self.names + other.names, sums=sums,
                       dose_mg=np.concatenate([self.dose_mg, other.dose_mg]),
                       too_long=np.concatenate([self.too_long, other.too_long]),
                       worth=np.concatenate([self.worth, other.worth]),
                       flags=np.concatenate([self.flags, other.flags]))

    def taken(self, order: Sequence[int]) -> Counts:
        """The same protocols in another order."""
        order = list(order)
        return replace(self, names=[self.names[p] for p in order], dose_mg=self.dose_mg[order], flags=self.flags[order],
                       too_long=self.too_long[order], worth=self.worth[order],
                       sums={name: values[order] for name, values in self.sums.items()})

    @property
    def n(self) -> np.ndarray:
        """Patients of each group."""
        return self.patients.sum(axis=1)

    def total(self, name: str, target: int = 0) -> np.ndarray:
        """(p, g) a sum over all cells."""
        return self.sums[name][:, target].sum(axis=-1)

    def attained(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """(p, g) share attained, and its 95 % interval."""
        hits, n = self.total("attained"), np.broadcast_to(self.n, self.total("attained").shape)
        with np.errstate(invalid="ignore"):
            return hits / n, *self.interval(hits, 0)

    def interval(self, hits: np.ndarray, target: int) -> tuple[np.ndarray, np.ndarray]:
        """95 % interval of (p, g) counts of a target's patients as shares of each group."""
        worth = self.worth[:, target]
        return wilson(hits * worth, self.n * worth)

    def mean_share(self, side: str) -> np.ndarray:
        """(p, g) mean share of the window "below", "inside" or "above", over those who could be judged."""
        with np.errstate(invalid="ignore"):
            return self.total(side) / (self.n - self.total("failed"))

    def difference(self, a: int, b: int, group: int) -> tuple[float, float, float]:
        """Attainment of b minus that of a in the same patients of a group, with its interval."""
        return paired_difference(*self._pair(a, b, group))

    def clearly_worse(self, a: int, b: int, z: float) -> bool:
        """Whether fewer of all attain with a than with b, by more than z standard errors of the paired difference."""
        both, only_a, only_b, neither = self._pair(a, b, 0)
        n, gain = max(both + only_a + only_b + neither, 1e-9), only_b - only_a
        return gain > z * (max(only_a + only_b - gain**2 / n, 0.0)) ** 0.5

    def _pair(self, a: int, b: int, group: int) -> tuple[float, float, float, float]:
        """Patients of a group who attain with both, with a only, with b only, with neither; where a list is drawn
        again and again, as many independent draws as they are worth."""
        of_a, of_b, who = self.flags[a], self.flags[b], self.members[group]
        both = _ones(of_a & of_b & who)
        only_a, only_b = _ones(of_a & ~of_b & who), _ones(of_b & ~of_a & who)
        worth = 1
        if self.origins is not None:
            gain = np.unpackbits(of_b & who).astype(np.int64) - np.unpackbits(of_a & who)
            sums, drawn = (np.bincount(self.origins, weights=each) for each in (gain, np.unpackbits(who)))
            worth = worth_of(sums, drawn.astype(np.int64), only_a + only_b)
        neither = _ones(who) - both - only_a - only_b
        return both * worth, only_a * worth, only_b * worth, neither * worth


def _ones(packed: np.ndarray) -> int:
    return int(np.unpackbits(packed).sum(dtype=np.int64))


def count(study: Study, threads: int = 1,
          cells_of: Callable[[BlockRows], np.ndarray] | None = None) -> Counts:
    """Count every protocol of a study under its first model.

    cells_of  a block -> (n, k) integers: patients with the same integers are counted together
    """
    parts = [study.protocols[first:first + AT_ONCE] for first in range(0, len(study.protocols), AT_ONCE)]
    whole, *others = (_count_part(replace(study, protocols=part), threads, cells_of) for part in parts)
    for other in others:
        whole = whole.beside(other)
    return whole


def _count_part(study: Study, threads: int, cells_of: Callable | None) -> Counts:
    sink = _Sink(study, cells_of)
    return sink.counts(simulate(study, threads, sink=sink, what="attainment").tally)


def seconds_expected(study: Study, threads: int) -> float:
    """About how long counting takes, from a small part of it; for populations that say how many they are."""
    part = min(PILOT, study.population.count)
    few = replace(study, population=replace(study.population, count=part))
    started = time.perf_counter()
    count(few, 1)
    return (time.perf_counter() - started) * study.population.count / part / max(threads, 1)


class _Sink:
    """Adds blocks up in their order."""

    def __init__(self, study: Study, cells_of: Callable | None):
        self._study, self._cells_of = study, cells_of
        self._found: dict[tuple[int, ...], dict[str, np.ndarray]] = {}
        self._dose = np.zeros((len(study.protocols), len(study.group_names)))
        self._flags: list[np.ndarray] = []
        self._members: list[np.ndarray] = []
        self._origins: list[np.ndarray] = []

    def __call__(self, rows: BlockRows) -> None:
        study, n = self._study, len(rows.patients)
        cells = self._cells_of(rows) if self._cells_of else np.zeros((n, 0), dtype=np.int64)
        keys, cell = _distinct(cells)
        shape = (len(study.protocols), len(study.targets))
        local = {name: np.zeros((*shape, len(study.group_names), len(keys))) for name in SUMS}
        patients = np.stack([np.bincount(cell[of > 0], minlength=len(keys)) for of in rows.members.T])
        for (m, p, t), judged in rows.judged.items():
            fine = ~judged.failed
            for name, sums in local.items():
                values = getattr(judged, name)
                weights = values * 1.0 if values.dtype == bool else np.where(fine, np.nan_to_num(values), 0.0)
                if len(keys) == 1:
                    sums[p, t, :, 0] = weights @ rows.members
                    continue
                for g, of in enumerate(rows.members.T):
                    sums[p, t, g] = np.bincount(cell, weights=weights * of, minlength=len(keys))
        for k, key in enumerate(keys):
            mine = self._found.setdefault(key, {"patients": np.zeros(len(study.group_names), dtype=np.int64), **{
                name: np.zeros(sums.shape[:-1]) for name, sums in local.items()}})
            mine["patients"] += patients[:, k]
            for name, sums in local.items():
                mine[name] += sums[..., k]
        self._dose += np.stack([received.total_mg for received in rows.received]) @ rows.members
        attained = np.stack([rows.judged[0, p, 0].attained for p in range(shape[0])])
        self._flags.append(np.packbits(attained, axis=1))
        self._members.append(np.packbits(rows.members.T > 0, axis=1))
        if rows.patients.origins is not None:
            self._origins.append(np.pad(rows.patients.origins, (0, -n % 8)))  # as packing fills up the last byte

    def counts(self, tally: Tally) -> Counts:
        keys = sorted(self._found)
        patients = np.stack([self._found[key]["patients"] for key in keys], axis=-1)
        sums = {name: np.stack([self._found[key][name] for key in keys], axis=-1) for name in SUMS}
        n = np.maximum(patients.sum(axis=1), 1)
        known = range_names(self._study.models[0])
        outside = tally.outside[0] if known else np.full(len(n), np.nan)
        too_long = np.stack([tally.long_infusion[0, p] for p in range(len(self._study.protocols))])
        worth = np.array([[tally.worth((0, p, t)) for t in range(len(self._study.targets))]
                          for p in range(len(self._study.protocols))])
        return Counts([protocol.name for protocol in self._study.protocols], self._study.group_names,
                      np.array(keys, dtype=np.int64).reshape(len(keys), -1), patients, sums, self._dose / n,
                      outside, too_long, worth,
                      np.concatenate(self._flags, axis=1), np.concatenate(self._members, axis=1),
                      np.concatenate(self._origins) if self._origins else None)


def _distinct(cells: np.ndarray) -> tuple[list[tuple[int, ...]], np.ndarray]:
    """The distinct rows, and which of them each row is."""
    if cells.shape[1] == 0:
        return [()], np.zeros(len(cells), dtype=np.int64)
    keys, cell = np.unique(cells, axis=0, return_inverse=True)
    return [tuple(int(part) for part in key) for key in keys], cell.ravel()


def fresh(study: Study) -> Study:
    """The same question put to patients that nothing was tuned on: another seed, derived from the study's own."""
    digest = hashlib.sha256(f"fresh patients {study.seed}".encode()).digest()
    return replace(study, seed=int.from_bytes(digest[:7], "big"))


def fresh_line(study: Study, patients: int) -> str:
    """Who the fresh patients are."""
    population, seed = study.population, f"seed {fresh(study).seed}"
    if population.source == "list" and population.count is not None:
        return f"{patients:,} fresh draws of the same people ({seed})"
    if population.source in ("list", "lattice"):
        return f"the same {patients:,} people of the {population.source} with fresh luck ({seed})"
    return f"{patients:,} fresh patients ({seed})"
