"""Draws the patients of a study, block by block, until there are as many as it asks for."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from covariates.catalogue import compute
from covariates.problems import Problem, ProblemsError
from popsim.lookup import Lookup
from popsim.patients.listed import read_list
from popsim.patients.population import Population
from popsim.patients.survey import candidates
from popsim.records import Patients
from popsim.streams import BLOCK

NOBODY_AFTER_BLOCKS = 400  # 3.3 million candidates, none of them eligible: give up
RARE_AFTER_BLOCKS, RAREST = 4000, 0.01  # 33 million candidates, fewer than one in a hundred eligible: give up


def blocks(population: Population, seed: int) -> Draw:
    """The patients of a study as an iterator of `Patients`, each of up to 8192 people, numbered from 1.

    seed   the study's seed. The same seed gives the same people, however many are asked for.

    Raises ProblemsError at once when the population or its list cannot be used, and while drawing when hardly anybody
    is eligible or `where` asks for something that nobody has.

    >>> drawn = blocks(Population("survey", 100, limits={"age": (65.0, 90.0), "bmi": (30.0, 60.0)}), 20261201)
    >>> [len(patients) for patients in drawn], drawn.seen, drawn.eligible
    ([100], 8192, 2999)
    """
    return Draw(population, seed)


class Draw:
    """Iterator of `Patients`; beside them what the record of a run tells of the draw, so far as it has come.

    seen      candidates looked at: of the survey those within the limits of age and sex, of a list all usable rows
    eligible  how many of them could be in the study
    skipped   rows of the list left out because they could not be used
    """

    def __init__(self, population: Population, seed: int):
        problems = list(population.problems())
        if problems:
            raise ProblemsError(problems)
        self.seen = self.eligible = self.skipped = 0
        self._patients = self._survey(population, seed) if population.source == "survey" else self._list(population)

    def __iter__(self) -> Draw:
        return self

    def __next__(self) -> Patients:
        return next(self._patients)

    def _survey(self, population: Population, seed: int) -> Iterator[Patients]:
        age_limits = None
        if "age" in population.limits:
            age_limits = population.limits["age"]
        drawn, block = 0, 0
        while drawn < population.count:
            people = candidates(seed, block, age_limits, population.sex)
            possible = people.pop("possible")
            slots, people = _eligible(population, people, possible)
            self.seen += BLOCK
            self.eligible += len(slots)
            block += 1
            kept = min(len(slots), population.count - drawn)
            if kept:
                yield Patients(drawn + 1, block - 1, slots[:kept], {name: of[:kept] for name, of in people.items()})
            drawn += kept
            if drawn < population.count:
                self._stop_if_hopeless(block)

    def _stop_if_hopeless(self, blocks_seen: int) -> None:
        nobody = self.eligible == 0 and blocks_seen >= NOBODY_AFTER_BLOCKS
        too_few = self.eligible < RAREST * self.seen and blocks_seen >= RARE_AFTER_BLOCKS
        if nobody or too_few:
            raise ProblemsError(
                Problem(
                    "population",
                    f"{self.eligible:,} of {self.seen:,} candidates were eligible (within the limits of age and sex)",
                    f"more than one in {round(1 / RAREST)}, or enough within {RARE_AFTER_BLOCKS * BLOCK:,} candidates",
                    "widen the limits and the condition, ask for fewer patients, or bring a list",
                )
            )

    def _list(self, population: Population) -> Iterator[Patients]:
        people = read_list(population.file, population.on_bad_row)
        twice = [name for name in population.set if name in people.attributes]
        if twice:
            raise ProblemsError(
                Problem("population: set", f'"{name}", a column of the list too', "one of the two") for name in twice
            )
        found, attributes = _eligible(population, people.attributes, np.ones(len(people.rows), dtype=bool))
        self.seen, self.eligible, self.skipped = len(people.rows), len(found), people.skipped
        labels = None if people.labels is None else people.labels[found]
        _check_list_count(population, self)
        rows = people.rows[found]
        starts = np.flatnonzero(np.diff(rows // BLOCK, prepend=-1))
        return (
            Patients(
                int(start) + 1,
                int(rows[start] // BLOCK),
                rows[start:end] % BLOCK,
                {name: of[start:end] for name, of in attributes.items()},
                None if labels is None else labels[start:end],
            )
            for start, end in zip(starts, [*starts[1:], len(rows)])
        )


def _check_list_count(population: Population, draw: Draw) -> None:
    if draw.eligible == 0:
        found, advice = f"none of its {draw.seen} people is eligible", "widen the limits and the condition"
        raise ProblemsError(Problem(population.file.name, found, "at least one", advice))
    if population.count not in (None, draw.eligible):
        found = f"{population.count}, and the list has {draw.eligible} eligible people"
        advice = "leave count out to use the list as it is"
        raise ProblemsError(Problem("population: count", found, "nothing, or just that number", advice))


def _eligible(
    population: Population, people: dict[str, np.ndarray], possible: np.ndarray
) -> tuple[np.ndarray, dict[str, np.ndarray]]:
    """Which of the people may be in the study, (m,) int64, and their attributes, scaled and with what is set."""
    people = _scaled(population, people)
    keep = possible.copy()
    if population.sex is not None:
        keep &= _attribute(people, "sex") == population.sex
    for name, (low, high) in population.limits.items():
        values = _attribute(people, name)
        keep &= (values >= low) & (values <= high)
    found = np.flatnonzero(keep)
    people = {name: values[found] for name, values in people.items()}
    for name, value in population.set.items():
        people[name] = np.full(len(found), value, dtype=bool if isinstance(value, bool) else np.float64)
    if population.where is None or not len(found):
        return found, people
    meets = np.broadcast_to(population.where.evaluate(Lookup(people)), len(found))
    return found[meets], {name: values[meets] for name, values in people.items()}


def _scaled(population: Population, people: dict[str, np.ndarray]) -> dict[str, np.ndarray]:
    """With `scale` applied; body mass index follows weight and height."""
    factors = {name: _attribute(people, name) * factor for name, factor in population.scale.items()}
    people = {**people, **factors}
    if {"weight", "height"} & factors.keys() and "bmi" in people:
        people["bmi"] = people["weight"] / (people["height"] / 100.0) ** 2
    return people


def _attribute(people: dict[str, np.ndarray], name: str) -> np.ndarray:
    return people[name] if name in people else compute(name, people)
