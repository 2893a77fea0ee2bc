"""The order of steps: patients -> covariates -> parameters -> timeline -> courses -> judgement -> counts.

Blocks of patients go through the steps one by one; threads share blocks, never a count. The only file that knows the
order.
"""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np

from covariates.catalogue import attributes_needed
from covariates.sheet import DrugModel
from popsim import solve
from popsim.effect import effect_at
from popsim.flagged import beyond_total, flag_counts
from popsim.groups import members as group_members
from popsim.judging import judge_target
from popsim.lookup import Lookup
from popsim.parameters import individual_parameters
from popsim.patients.draw import blocks
from popsim.population_tally import LEAN
from popsim.records import BlockRows, Disposition, IndividualParameters, Judged, Patients, Received, Timeline
from popsim.slices import quartile_cuts, quartile_members
from popsim.study_records import Study
from popsim.tally import ONE, Findings, Tally, What, check_room, fixed_shares
from popsim.target import all_attained, grid_course, grid_limits
from popsim.timeline import build_timeline, steady_timeline


def simulate(study: Study, threads: int = 1, keep_courses: bool = False,
             sink: Callable[[BlockRows], None] | None = None,
             progress: Callable[[int], None] | None = None, what: What = "everything") -> Findings:
    """Run a study. `sink` receives every block in order; `progress` the number of patients done so far.

    what  "everything"; "pairs": attainment and pairs of protocols; "attainment" alone, for a search over many. Most of
          the time goes into what happens over time and into each patient's own numbers, which only the first counts.
    """
    started = time.perf_counter()
    drawn = blocks(study.population, study.seed)
    queue = _Queue(iter(drawn), sink, progress)
    grid, cuts = np.empty(0), {}
    if what == "everything":
        grid = study.grid_min()
        check_room(study, len(grid))
        cuts = quartile_cuts(study)

    def work(_: int = 0) -> Tally | None:
        tally = None  # counts take tens of MB: a thread that finds no block left makes none
        for number, patients in queue:
            try:
                tally = tally or Tally.empty(study, len(grid), cuts, drawn.origins, what)
                queue.done(number, _judge_block(study, grid, patients, tally, keep_courses))
            except BaseException:
                queue.stop()
                raise
        return tally

    if threads == 1:
        tallies = [work()]
    else:
        with ThreadPoolExecutor(threads) as pool:
            try:
                tallies = list(pool.map(work, range(threads)))
            except BaseException:  # an interrupt reaches this thread only, and the pool waits for the others
                queue.stop()
                raise
    total, *others = [tally for tally in tallies if tally is not None]
    for other in others:
        total.merge(other)
    return Findings(study, total, drawn.seen, drawn.eligible, drawn.skipped, time.perf_counter() - started, threads,
                    drawn.share_eligible)


class _Queue:
    """Hands out blocks to threads and passes what they leave to the sink in order."""

    def __init__(self, source: Iterator[Patients], sink: Callable | None, progress: Callable | None):
        self._source, self._sink, self._progress = enumerate(source), sink, progress
        self._drawing, self._passing = threading.Lock(), threading.Lock()
        self._waiting: dict[int, BlockRows] = {}
        self._next, self._patients, self._stopped = 0, 0, False

    def __iter__(self) -> Iterator[tuple[int, Patients]]:
        while not self._stopped:
            with self._drawing:
                item = next(self._source, None)
            if item is None:
                return
            yield item

    def stop(self) -> None:
        self._stopped = True

    def done(self, number: int, rows: BlockRows) -> None:
        with self._passing:
            self._waiting[number] = rows
            while self._next in self._waiting:
                ready = self._waiting.pop(self._next)
                if self._sink is not None:
                    self._sink(ready)
                self._next += 1
                self._patients += len(ready.patients)
                if self._progress is not None:
                    self._progress(self._patients)


@dataclass(frozen=True)
class _Block:
    """A block of patients, and what is the same for them under every model.

    members, quarters  (n, groups) and (n, quartiles) int64, 1 = belongs to it
    cell     (n,) each patient's cell of age and weight; None where people are not counted by cells
    given    what each protocol gives: its timeline and what is received
    steady   each protocol's timeline at steady state, None where no target asks for it
    """

    study: Study
    grid: np.ndarray
    patients: Patients
    lookup: Lookup
    members: np.ndarray
    quarters: np.ndarray
    cell: np.ndarray | None
    given: list[tuple[Timeline, Received]]
    steady: list[Timeline | None]
    tally: Tally


def _judge_block(study: Study, grid: np.ndarray, patients: Patients, tally: Tally, keep_courses: bool) -> BlockRows:
    block = _counted_block(study, grid, patients, tally)
    courses, all_judged = [], {}
    for m, model in enumerate(study.models):
        parameters = individual_parameters(model, study.variability, study.seed, patients, block.lookup)
        disposition = solve.disposition(parameters.values)
        _count_outside(block, m, parameters)
        judged = _judge_model(block, m, parameters, disposition)
        _compare_protocols(block, m, judged, parameters.outside)
        all_judged |= {(m, p, t): one for (p, t), one in judged.items()}
        if keep_courses:
            courses += [(model.name, protocol.name, *_courses(grid, model, parameters, disposition, timeline))
                        for protocol, (timeline, _) in zip(study.protocols, block.given, strict=True)]
    return BlockRows(patients, block.lookup, courses, block.members, all_judged, [one for _, one in block.given])


def _counted_block(study: Study, grid: np.ndarray, patients: Patients, tally: Tally) -> _Block:
    """Count who is in a block and what they are given, before any model is asked."""
    n, lookup = len(patients), Lookup(patients.attributes)
    members = group_members(study.groups, lookup, n).astype(np.int64)
    quarters = quartile_members(tally.cuts, lookup, n).astype(np.int64)
    tally.patients += members.sum(axis=0)
    tally.quartile_patients += quarters.sum(axis=0)
    tally.overlap += members.T @ members
    cell = tally.population.add_patients(patients.attributes, members) if tally.population else None
    if tally.clusters is not None:
        tally.clusters.add_people(patients.origins)
        tally.clusters.add_among("groups", patients.origins, members)
        tally.clusters.add_among("quarters", patients.origins, quarters)
    tally.add_flags(flag_counts(study, lookup, patients.attributes))
    given = [build_timeline(protocol, lookup, n, study.until_min) for protocol in study.protocols]
    per = _per_kg(patients, lookup)
    for p, doses in tally.doses.items():
        doses.add(given[p][1], per, members)
    repeats = any(target.steady or (len(grid) and target.summary) for target in study.targets)
    steady = [steady_timeline(protocol, lookup, n) if repeats else None for protocol in study.protocols]
    return _Block(study, grid, patients, lookup, members, quarters, cell, given, steady, tally)


def _count_outside(block: _Block, m: int, parameters: IndividualParameters) -> None:
    """Who is outside the people that the model was built on, or is given more, or for longer, than was studied."""
    tally, members, model = block.tally, block.members, block.study.models[m]
    tally.outside[m] += members.T @ parameters.outside
    if tally.population:
        tally.population.add_outside(m, block.cell, parameters.outside)
    if tally.clusters is not None:
        tally.clusters.add_among(f"inside model {m}", block.patients.origins, members * ~parameters.outside[:, None])
    for name, marked in parameters.beyond.items():
        tally.beyond[m, name] += members.T @ marked
    longest = model.built_on.longest_infusion_min
    for p, (_, received) in enumerate(block.given):
        if longest is not None:
            tally.long_infusion[m, p] += members.T @ (received.longest_infusion_min > longest * (1 + 1e-9))
        tally.large_total[m, p] += members.T @ beyond_total(model, received, block.lookup)


def _judge_model(block: _Block, m: int, parameters: IndividualParameters,
                 disposition: Disposition) -> dict[tuple[int, int], Judged]:
    """(protocol, target) -> what it made of each patient under a model, counted."""
    study, tally = block.study, block.tally
    status, numbers = disposition.status, len(block.grid) > 0
    judged: dict[tuple[int, int], Judged] = {}
    for p, (timeline, received) in enumerate(block.given):
        for t, target in enumerate(study.targets):
            one, found = judge_target(study, m, target, block.patients, parameters, disposition, timeline, received,
                                      block.lookup, block.steady[p], numbers)
            judged[p, t] = one
            status = np.where(status == 0, found, status)
            tally.targets[m, p, t].add(one, block.members, parameters.outside)
            if tally.population:
                tally.population.add_judged((m, p, t), block.cell, one)
            if tally.clusters is not None:
                _add_by_person((m, p, t), one, block.patients.origins, tally)
        of_targets = [judged[p, t] for t in range(len(study.targets))]
        if tally.responses:
            _add_responses(study, m, p, of_targets, block.patients.origins, block.members, tally)
        if numbers:
            _over_time(block, m, p, parameters, disposition, of_targets)
    tally.add_statuses(m, status, block.patients.first)
    return judged


def _compare_protocols(block: _Block, m: int, judged: dict[tuple[int, int], Judged], outside: np.ndarray) -> None:
    """Count the pairs of protocols in the same patients, for each target and for all targets at once."""
    study, tally, members = block.study, block.tally, block.members
    if tally.together:
        joint = [all_attained([judged[p, t] for t in study.joint_targets]) for p in range(len(study.protocols))]
        for p, one in enumerate(joint):
            tally.together[m, 0, p].add(joint[0], one, members)
            if tally.clusters is not None:
                tally.clusters.add(("together", m, p), block.patients.origins, one.attained)
    for pair, t, a, b in tally.pairs:
        if pair == m:
            both = judged[a, t], judged[b, t]
            tally.pairs[m, t, a, b].add(*both, members)
            tally.pairs_inside[m, t, a, b].add(*both, members * ~outside[:, None])
            tally.quartile_pairs[m, t, a, b].add(*both, block.quarters)


def _per_kg(patients: Patients, lookup: Lookup) -> dict[str, np.ndarray]:
    per = {}
    if "weight" in patients.attributes:
        per["mg_per_kg_total"] = lookup("weight")
    if attributes_needed(LEAN) <= patients.attributes.keys():
        per["mg_per_kg_lean"] = lookup(LEAN)
    return per


def _add_by_person(key: tuple[int, int, int], judged: Judged, origins: np.ndarray, tally: Tally) -> None:
    """What the intervals of a list need whose people are drawn again and again."""
    tally.clusters.add(("attained", *key), origins, judged.attained)
    if tally.population is None:  # attainment only
        return
    tally.clusters.add(("judged", *key), origins, ~judged.failed)
    for side, shares in fixed_shares(judged).items():
        tally.clusters.add((side, *key), origins, shares)


def _add_responses(study: Study, m: int, p: int, judged: list[Judged], origins: np.ndarray | None,
                   members: np.ndarray, tally: Tally) -> None:
    """Each patient's share of the isolates against which the target is attained: its mean is the cumulative fraction
    of response."""
    for family in study.families:
        share = sum(target.mic.weight * one.attained for target, one in zip(study.targets, judged, strict=True)
                    if target.mic is not None and target.mic.family == family)
        tally.responses[m, p, family].add(share, members)
        if tally.clusters is not None:
            tally.clusters.add(("response", m, p, family), origins, np.rint(share * ONE).astype(np.int64))


def _over_time(block: _Block, m: int, p: int, parameters: IndividualParameters, disposition: Disposition,
               judged: list[Judged]) -> None:
    """Add to the over-time counts: whoever did not fail, in the groups they belong to."""
    n, model, timeline = len(disposition), block.study.models[m], block.given[p][0]
    for t, target in enumerate(block.study.targets):
        if not target.over_time:
            continue
        course = grid_course(target, model, parameters.values)
        limits = grid_limits(target, model, n)
        counted = (block.members > 0) & ~judged[t].failed[:, None]
        counts = block.tally.targets[m, p, t]
        solve.count_over_time(disposition, timeline, block.grid, course, *limits, counted, counts.over_time,
                              counts.bins)


def _courses(grid: np.ndarray, model: DrugModel, parameters: IndividualParameters, disposition: Disposition,
             timeline: Timeline) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Plasma, effect site and effect at every time of the grid, (n, times); NaN where the model has none."""
    plasma, site = solve.courses_on_grid(disposition, timeline, grid)
    effect = effect_at(model, parameters.values, site) if model.effect else np.full_like(site, np.nan)
    return plasma, site if model.has_effect_site else np.full_like(site, np.nan), effect
