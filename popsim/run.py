"""The order of steps: patients -> covariates -> parameters -> timeline -> courses -> judgement -> counts.

Blocks of patients go through the steps one by one; threads share blocks, never a count. The only file that knows the
order.
"""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor

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
from popsim.records import (
    BlockRows,
    Disposition,
    IndividualParameters,
    Judged,
    Patients,
    Study,
    Timeline,
)
from popsim.slices import quartile_cuts, quartile_members
from popsim.tally import ONE, Findings, Tally, check_room, fixed_shares
from popsim.target import all_attained, grid_course, grid_limits
from popsim.timeline import build_timeline, steady_timeline

LEAN = "lean_body_mass_janmahasatian"


def simulate(study: Study, threads: int = 1, keep_courses: bool = False,
             sink: Callable[[BlockRows], None] | None = None,
             progress: Callable[[int], None] | None = None, over_time: bool = True,
             attainment_only: bool = False) -> Findings:
    """Run a study. `sink` receives every block in order; `progress` the number of patients done so far.

    over_time         False: nothing on the grid and none of each patient's own numbers, which take most of the time
    attainment_only   for a search over many protocols: nothing over time, no pairs, no doses, no cells of people
    """
    started = time.perf_counter()
    drawn = blocks(study.population, study.seed)
    queue = _Queue(iter(drawn), sink, progress)
    grid = study.grid_min() if over_time and not attainment_only else np.empty(0)
    if not attainment_only:
        check_room(study, len(grid))
    cuts = {} if attainment_only else quartile_cuts(study)

    def work(_: int = 0) -> Tally | None:
        tally = None  # counts take tens of MB: a thread that finds no block left makes none
        for number, patients in queue:
            try:
                tally = tally or Tally.empty(study, len(grid), cuts, drawn.origins, attainment_only)
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


def _judge_block(study: Study, grid: np.ndarray, patients: Patients, tally: Tally, keep_courses: bool) -> BlockRows:
    lookup = Lookup(patients.attributes)
    members = group_members(study.groups, lookup, len(patients)).astype(np.int64)
    tally.patients += members.sum(axis=0)
    quarters = quartile_members(tally.cuts, lookup, len(patients)).astype(np.int64)
    tally.quartile_patients += quarters.sum(axis=0)
    tally.overlap += members.T @ members
    cell = tally.population.add_patients(patients.attributes, members) if tally.population else None
    if tally.clusters is not None:
        tally.clusters.add_people(patients.origins)
        tally.clusters.add_among("groups", patients.origins, members)
        tally.clusters.add_among("quarters", patients.origins, quarters)
    tally.add_flags(flag_counts(study, lookup, patients.attributes))
    given = [build_timeline(protocol, lookup, len(patients), study.until_min) for protocol in study.protocols]
    numbers = len(grid) > 0
    repeats = any(target.steady or (numbers and target.summary) for target in study.targets)
    steady = [steady_timeline(protocol, lookup, len(patients)) if repeats else None for protocol in study.protocols]
    per = _per_kg(patients, lookup)
    for p, doses in tally.doses.items():
        doses.add(given[p][1], per, members)
    courses = []
    all_judged: dict[tuple[int, int, int], Judged] = {}
    for m, model in enumerate(study.models):
        parameters = individual_parameters(model, study.variability, study.seed, patients, lookup)
        disposition = solve.disposition(parameters.values)
        status = disposition.status
        tally.outside[m] += members.T @ parameters.outside
        if tally.population:
            tally.population.add_outside(m, cell, parameters.outside)
        inside = members * ~parameters.outside[:, None]
        if tally.clusters is not None:
            tally.clusters.add_among(f"inside model {m}", patients.origins, inside)
        for name, marked in parameters.beyond.items():
            tally.beyond[m, name] += members.T @ marked
        judged: dict[tuple[int, int], Judged] = {}
        for p, (timeline, received) in enumerate(given):
            if model.built_on.longest_infusion_min is not None:
                tally.long_infusion[m, p] += members.T @ (
                    received.longest_infusion_min > model.built_on.longest_infusion_min * (1 + 1e-9))
            tally.large_total[m, p] += members.T @ beyond_total(model, received, lookup)
            for t, target in enumerate(study.targets):
                judged[p, t], found = judge_target(study, m, target, patients, parameters, disposition, timeline,
                                                   received, lookup, steady[p], numbers)
                status = np.where(status == 0, found, status)
                tally.targets[m, p, t].add(judged[p, t], members, parameters.outside)
                if tally.population:
                    tally.population.add_judged((m, p, t), cell, judged[p, t])
                if tally.clusters is not None:
                    _add_by_person((m, p, t), judged[p, t], patients.origins, tally)
            if tally.responses:
                _add_responses(study, m, p, judged, patients.origins, members, tally)
            if not len(grid):
                continue
            of_targets = [judged[p, t] for t in range(len(study.targets))]
            _over_time(study, grid, m, p, parameters, disposition, timeline, of_targets, members, tally)
            if keep_courses:
                kept = _courses(grid, model, parameters, disposition, timeline)
                courses.append((model.name, study.protocols[p].name, *kept))
        if tally.together:
            joint = [all_attained([judged[p, t] for t in study.joint_targets]) for p in range(len(study.protocols))]
            for p, one in enumerate(joint):
                tally.together[m, 0, p].add(joint[0], one, members)
                if tally.clusters is not None:
                    tally.clusters.add(("together", m, p), patients.origins, one.attained)
        tally.add_statuses(m, status, patients.first)
        for pair, t, a, b in tally.pairs:
            if pair == m:
                both = judged[a, t], judged[b, t]
                tally.pairs[m, t, a, b].add(*both, members)
                tally.pairs_inside[m, t, a, b].add(*both, inside)
                tally.quartile_pairs[m, t, a, b].add(*both, quarters)
        all_judged |= {(m, p, t): one for (p, t), one in judged.items()}
    return BlockRows(patients, lookup, courses, members, all_judged, [received for _, received in given])


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


def _add_responses(study: Study, m: int, p: int, judged: dict[tuple[int, int], Judged], origins: np.ndarray | None,
                   members: np.ndarray, tally: Tally) -> None:
    """Each patient's share of the isolates against which the target is attained: its mean is the cumulative fraction
    of response."""
    for family in study.families:
        share = sum(target.mic.weight * judged[p, t].attained for t, target in enumerate(study.targets)
                    if target.mic is not None and target.mic.family == family)
        tally.responses[m, p, family].add(share, members)
        if tally.clusters is not None:
            tally.clusters.add(("response", m, p, family), origins, np.rint(share * ONE).astype(np.int64))


def _over_time(study: Study, grid: np.ndarray, m: int, p: int, parameters: IndividualParameters,
               disposition: Disposition, timeline: Timeline, judged: list[Judged], members: np.ndarray,
               tally: Tally) -> None:
    """Add to the over-time counts: whoever did not fail, in the groups they belong to."""
    n, model = len(disposition), study.models[m]
    for t, target in enumerate(study.targets):
        if not target.over_time:
            continue
        course = grid_course(target, model, parameters.values)
        limits = grid_limits(target, model, n)
        counted = (members > 0) & ~judged[t].failed[:, None]
        counts = tally.targets[m, p, t]
        solve.count_over_time(disposition, timeline, grid, course, *limits, counted, counts.over_time, counts.bins)


def _courses(grid: np.ndarray, model: DrugModel, parameters: IndividualParameters, disposition: Disposition,
             timeline: Timeline) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Plasma, effect site and effect at every time of the grid, (n, times); NaN where the model has none."""
    plasma, site = solve.courses_on_grid(disposition, timeline, grid)
    effect = effect_at(model, parameters.values, site) if model.effect else np.full_like(site, np.nan)
    return plasma, site if model.has_effect_site else np.full_like(site, np.nan), effect
