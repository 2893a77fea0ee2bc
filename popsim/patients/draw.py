"""Draws the patients of a study, block by block, until there are as many as it asks for."""

from __future__ import annotations

from collections.abc import Callable, Iterator

import numpy as np

from covariates.catalogue import compute
from covariates.problems import Problem, ProblemsError
from popsim.lookup import Lookup
from popsim.patients.corner import Corner
from popsim.patients.lattice import impossible_points, lattice_people
from popsim.patients.listed import ListedPeople, read_list
from popsim.patients.population import Population
from popsim.patients.survey import candidates
from popsim.records import Patients
from popsim.streams import BLOCK, uniforms

NOBODY_AFTER_BLOCKS = 400  # 3.3 million candidates, none of them eligible: give up
RARE_AFTER_BLOCKS, RAREST = 4000, 0.01  # 33 million candidates, fewer than one in a hundred eligible: give up
CORNER_BELOW = 0.1  # where fewer than one in ten can be within the limits, only those who can are drawn
RAREST_CORNER = 1e-8  # of the adults within the limits of age and sex: beyond it the tables support nothing


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

    seen      candidates looked at: of a survey those within the limits of age and sex, of a list all usable rows
    eligible  how many of them could be in the study
    skipped   rows of the list left out because they could not be used
    origins   rows of the list whose people are drawn again and again; 0 for every other population
    """

    def __init__(self, population: Population, seed: int):
        problems = list(population.problems())
        if problems:
            raise ProblemsError(problems)
        self.seen = self.eligible = self.skipped = self.origins = 0
        self._drawn_from = 1.0
        if population.source == "survey":
            self._patients = self._endless(population, self._adults(population, seed))
        elif population.source == "described":
            self._patients = self._endless(population, lambda block: population.described.candidates(seed, block))
        elif population.source == "lattice":
            self._patients = self._lattice(population)
        else:
            self._patients = self._list(population, seed)

    def __iter__(self) -> Draw:
        return self

    def __next__(self) -> Patients:
        return next(self._patients)

    @property
    def share_eligible(self) -> float:
        """Share of the people within the limits of age and sex who are eligible, estimated from the candidates."""
        return self._drawn_from * self.eligible / self.seen if self.seen else float("nan")

    def _adults(self, population: Population, seed: int) -> Callable[[int], dict[str, np.ndarray]]:
        """How a block of candidates of the survey is drawn: all who are within the limits of age and sex, or, where
        the other limits leave few of them, those few."""
        curve, ages = population.age_curve(), population.limits_of_age()
        limits = _before_scale(population)
        if limits:
            corner = Corner(limits, curve, ages, population.sex)
            if corner.share < RAREST_CORNER:
                raise ProblemsError(
                    Problem(
                        "population",
                        "fewer than one adult in 100 million is within these limits",
                        "limits that more people are within",
                        "widen the limits, or bring a list",
                    )
                )
            if corner.share < CORNER_BELOW:
                self._drawn_from = corner.share
                return lambda block: corner.candidates(seed, block)
        return lambda block: candidates(seed, block, ages, population.sex, curve)

    def _endless(
        self, population: Population, candidates_of: Callable[[int], dict[str, np.ndarray]]
    ) -> Iterator[Patients]:
        drawn, block = 0, 0
        while drawn < population.count:
            people = candidates_of(block)
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
                    "give weight, height and bmi as limits and not in where: rare people are then drawn directly; "
                    "or widen the limits and the condition, ask for fewer patients, or bring a list",
                )
            )

    def _lattice(self, population: Population) -> Iterator[Patients]:
        people = lattice_people(population.lattice, population.each)
        found, attributes = self._chosen(population, "population: lattice", people)
        problem = impossible_points(attributes)
        if problem:
            raise ProblemsError(problem)
        return _in_blocks(found, attributes, None)

    def _list(self, population: Population, seed: int) -> Iterator[Patients]:
        people = read_list(population.file, population.on_bad_row, population.units)
        found, attributes = self._chosen(population, population.file.name, people.attributes)
        self.skipped = people.skipped
        labels = None if people.labels is None else people.labels[found]
        if not population.resampled:
            return _in_blocks(people.rows[found], attributes, labels)
        self.origins = int(people.rows[-1]) + 1
        return _resampled(ListedPeople(people.rows[found], attributes, labels, people.skipped), population.count, seed)

    def _chosen(
        self, population: Population, where: str, people: dict[str, np.ndarray]
    ) -> tuple[np.ndarray, dict[str, np.ndarray]]:
        """Who of given people are eligible, and their attributes."""
        twice = [name for name in population.set if name in people]
        if twice:
            raise ProblemsError(
                Problem("population: set", f'"{name}", which the patients bring themselves', "one of the two")
                for name in twice
            )
        count = len(next(iter(people.values())))
        found, attributes = _eligible(population, people, np.ones(count, dtype=bool))
        self.seen, self.eligible = count, len(found)
        if not len(found):
            advice = "widen the limits and the condition"
            raise ProblemsError(Problem(where, f"none of its {count} people is eligible", "at least one", advice))
        return found, attributes


def _before_scale(population: Population) -> dict[str, tuple[float, float]]:
    """The limits of weight, height and bmi as they are for people who are not yet scaled."""
    weight, height = (population.scale.get(name, 1.0) for name in ("weight", "height"))
    factors = {"weight": weight, "height": height, "bmi": weight / height**2}
    return {
        name: tuple(edge / factors[name] for edge in population.limits[name])
        for name in factors
        if name in population.limits
    }


def _in_blocks(rows: np.ndarray, attributes: dict[str, np.ndarray], labels: np.ndarray | None) -> Iterator[Patients]:
    """Given people as they are; their place in the file or the lattice is the key to their luck."""
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


def _resampled(people: ListedPeople, count: int, seed: int) -> Iterator[Patients]:
    """People of a list drawn with replacement, each time with a luck of their own."""
    for block in range(-(-count // BLOCK)):
        drawn = min(BLOCK, count - block * BLOCK)
        one = (uniforms(seed, "list.person", block)[:drawn] * len(people.rows)).astype(np.int64)
        yield Patients(
            block * BLOCK + 1,
            block,
            np.arange(drawn),
            {name: of[one] for name, of in people.attributes.items()},
            None if people.labels is None else people.labels[one],
            people.rows[one],
        )


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
