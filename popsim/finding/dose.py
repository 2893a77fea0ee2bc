"""Which dose: one or two numbers of a protocol varied, in the same patients with the same luck.

One number: a grid, then the ways between the last dose that meets the wishes and the first that does not are cut by
bisection (seven doses at a time), and so is the neighbourhood of the best doses. Two numbers: a grid, then a finer one
around each of the best.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from itertools import product
from statistics import NormalDist

import numpy as np

from covariates.units import Quantity
from popsim.finding.counting import Asked, Counts, count, fresh
from popsim.finding.holding import Held, all_met, hold, shortfall
from popsim.finding.places import Varied
from popsim.study_sections import ProtocolSection

PARTS, ROUNDS = 8, 2  # the last step is 1/64 of the grid's
FINE_2D = 6
Point = tuple[Quantity, ...]


@dataclass(frozen=True)
class Stretch:
    """Doses, one after the other, that meet every wish: places of the lowest and the highest among the tried ones."""

    first: int
    last: int


@dataclass
class DoseFound:
    """What a search of doses found. Points ascend; every index is a place among them.

    best_overall   most patients attain        best_worst  the worst group attains most
    as_good        (first, last) between which lies the dose that is truly best overall, with 95 % (one number varied)
    meeting        stretches of doses that meet every wish (one number varied); `meets` (p,) for every point
    chosen         the dose that meets every wish and is best for the worst group, or None
    nearest        the dose that comes nearest to the wishes, where none meets them, or None
    """

    asked: Asked
    protocol: ProtocolSection
    varied: tuple[Varied, ...]
    points: list[Point]
    counts: Counts
    held: list[Held]
    best_overall: int
    best_worst: int
    as_good: tuple[int, int]
    meets: np.ndarray
    meeting: list[Stretch]
    chosen: int | None
    nearest: int | None

    def worst(self) -> np.ndarray:
        """(p,) attainment of the group that attains least."""
        return worst_of(self.counts)

    def proposed(self) -> dict[str, int]:
        """What goes to fresh patients: why -> place, each place once."""
        ends = [place for one in self.meeting for place in (one.first, one.last)]
        named = {"best overall": self.best_overall, "best for the worst group": self.best_worst,
                 "meets the wishes": self.chosen, "lowest that meets": min(ends, default=None),
                 "highest that meets": max(ends, default=None), "nearest to the wishes": self.nearest}
        return {why: place for why, place in named.items() if place is not None}


def label(point: Point) -> str:
    return " and ".join(quantity.text for quantity in point)


def with_point(protocol: ProtocolSection, varied: tuple[Varied, ...], point: Point) -> ProtocolSection:
    """The protocol with these numbers; all doses are multiplied before a single one is set."""
    for one, value in sorted(zip(varied, point, strict=True), key=lambda pair: bool(pair[0].place.key)):
        protocol = one.place.put(protocol, value)
    return protocol.model_copy(update={"name": label(point)})


def grid(varied: tuple[Varied, ...]) -> list[Point]:
    return list(product(*(one.values for one in varied)))


def search(asked: Asked, protocol: ProtocolSection, varied: tuple[Varied, ...], threads: int = 1,
           told: Callable[[str], None] = lambda text: None) -> DoseFound:
    """Count the grid, look closer where it matters, and say what is best; `told` hears how far it has come."""
    def counted(new: list[Point]) -> Counts:
        return count(asked.study([with_point(protocol, varied, point) for point in new]), threads)

    points = grid(varied)
    found = _judge(asked, protocol, varied, points, counted(points))
    for _ in range(ROUNDS if len(varied) == 1 else 1):
        known = {label(point) for point in found.points}
        new = list({label(point): point for point in _closer(found) if label(point) not in known}.values())
        if not new:
            break
        told(f"looking closer: {len(new)} more doses")
        found = _judge(asked, protocol, varied, found.points + new, found.counts.beside(counted(new)))
    return found


def worst_of(counts: Counts) -> np.ndarray:
    """(p,) attainment of the group that attains least; groups without patients have no say."""
    return counts.attained()[0][:, counts.n > 0].min(axis=1)


def _judge(asked: Asked, protocol: ProtocolSection, varied: tuple[Varied, ...], points: list[Point],
           counts: Counts) -> DoseFound:
    order = sorted(range(len(points)), key=lambda place: [quantity.value for quantity in points[place]])
    points, counts = [points[place] for place in order], counts.taken(order)
    attained, worst = counts.attained()[0][:, 0], worst_of(counts)
    held = hold(asked, counts)
    meets = all_met(held) if held else np.zeros(len(points), dtype=bool)
    best = int(np.argmax(attained))
    chosen = int(np.argmax(np.where(meets, worst, -1.0))) if meets.any() else None
    nearest = int(np.argmin(shortfall(held))) if held and chosen is None else None
    single = len(varied) == 1
    return DoseFound(asked, protocol, varied, points, counts, held, best, int(np.argmax(worst)),
                     _as_good(counts, best) if single else (best, best), meets,
                     list(_stretches(meets)) if single else [], chosen, nearest)


def _as_good(counts: Counts, best: int) -> tuple[int, int]:
    """From the first to the last dose that is not clearly worse than the best in the same patients.

    Since the best was picked among all that were tried, the level is shared out between them (Bonferroni): with 95 %
    the dose that is truly best is not left out.
    """
    tried = len(counts.names)
    z = NormalDist().inv_cdf(1 - 0.025 / tried)
    good = [place for place in range(tried) if place == best or not counts.clearly_worse(place, best, z)]
    return min(good), max(good)


def _stretches(meets: np.ndarray) -> Iterator[Stretch]:
    edges = np.flatnonzero(np.diff(np.concatenate([[0], meets.astype(np.int8), [0]])))
    for first, end in zip(edges[::2], edges[1::2], strict=True):
        yield Stretch(int(first), int(end) - 1)


def _closer(found: DoseFound) -> Iterator[Point]:
    """Points to try next."""
    interesting = {found.best_overall, found.best_worst, found.chosen, found.nearest} - {None}
    if len(found.varied) == 2:
        for place in sorted(interesting):
            yield from product(*(_around(one, point) for one, point in
                                 zip(found.varied, found.points[place], strict=True)))
        return
    varied, last = found.varied[0], len(found.points) - 1
    gaps = {gap for place in interesting for gap in ((place - 1, place), (place, place + 1))}
    gaps |= {gap for one in found.meeting for gap in ((one.first - 1, one.first), (one.last, one.last + 1))}
    for low, high in sorted(gap for gap in gaps if gap[0] >= 0 and gap[1] <= last):
        for value in varied.between(found.points[low][0], found.points[high][0], PARTS):
            yield (value,)


def _around(varied: Varied, value: Quantity) -> list[Quantity]:
    """A finer line of values, one step of the grid to either side, within the range."""
    step = varied.values[1].value - varied.values[0].value
    low, high = max(value.value - step, varied.values[0].value), min(value.value + step, varied.values[-1].value)
    return [varied.quantity(each) for each in np.linspace(low, high, FINE_2D + 1)]


def confirm(found: DoseFound, threads: int = 1) -> tuple[list[str], list[tuple[str, Counts]]]:
    """What is proposed, and the protocol as written, in fresh patients under each model of the study.

    Returns what each protocol is ("as written", "best overall", ...) and (model, counts) pairs.
    """
    whys: dict[int, list[str]] = {}
    for why, place in found.proposed().items():
        whys.setdefault(place, []).append(why)
    written = found.protocol.model_copy(update={"name": f'as written: "{found.protocol.name}"'})
    protocols = [written, *(with_point(found.protocol, found.varied, found.points[place]) for place in whys)]
    return ["as written", *(", ".join(why) for why in whys.values())], in_fresh(found.asked, protocols, threads)


def in_fresh(asked: Asked, protocols: list[ProtocolSection], threads: int) -> list[tuple[str, Counts]]:
    """Protocols counted in patients that nothing was tuned on, under each model of the study."""
    study = fresh(asked.study(protocols, every_model=True))
    return [(model.name, count(replace(study, models=(model,)), threads)) for model in study.models]
