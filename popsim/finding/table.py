"""A rounded dose table for the ward: bands of one covariate, a dose for each, chosen to meet the study's wishes.

Every candidate dose is counted as one dose for everybody, by narrow slices of the covariate: what a table does in a
group is then an exact sum of slices. For given weights of the wishes the best bands and doses follow from dynamic
programming; the weights of wishes that are not met are raised again and again, and the table kept is the one with the
smallest shortfall, then the highest attainment.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from fractions import Fraction
from itertools import pairwise

import numpy as np

from covariates.formula import compile_formula
from covariates.problems import Problem, ProblemsError
from covariates.units import Quantity, parse_quantity, to_unit
from popsim.finding.counting import Asked, Counts, count, cut_up
from popsim.finding.dose import in_fresh
from popsim.finding.places import Place, range_of, read_place
from popsim.finding.wishes import EVERY
from popsim.records import BlockRows
from popsim.study_sections import BandSection, FindTableSection, ProtocolSection

MOST_DOSES, MOST_SLICES = 150, 150
LEAST_SHARE = 0.01  # a band holds at least this share of the patients
WEIGHINGS, FIRST_WEIGHT = 60, 4.0


@dataclass(frozen=True)
class WardTable:
    """One table: bands of a covariate, half-open, ascending; `edges` between them, a dose for each band."""

    edges: tuple[float, ...]
    doses: tuple[Quantity, ...]

    @property
    def name(self) -> str:
        return "one dose" if len(self.doses) == 1 else f"table of {len(self.doses)} bands"

    def limits(self) -> list[tuple[float, float]]:
        return list(pairwise([-np.inf, *self.edges, np.inf]))


@dataclass(frozen=True)
class TableFound:
    """Tables from the most bands to one dose for all, and how they and the protocol as written do in fresh patients.

    fresh   (model, counts) pairs: the protocol as written first, then every table
    tuned   the tables' counts in the patients that they were tuned on, shares attained by group (tables, groups)
    """

    asked: Asked
    protocol: ProtocolSection
    place: Place
    by: str
    tables: list[WardTable]
    tuned: np.ndarray
    fresh: list[tuple[str, Counts]]


def read_table(asked: Asked, protocol: ProtocolSection) -> tuple[FindTableSection, Place, list[Quantity]]:
    """What [find.table] asks for: the dose that becomes a table, and the doses that may stand in it."""
    section, where = asked.section.find.table, f"{asked.path.name}: find, table"
    if section is None:
        raise ProblemsError(Problem(
            f"{asked.path.name}: find: table", "missing", "what the table is to look like",
            '[find.table] with what = "dose 1: rate", by = "weight", bands = 4, edges_to = 5, '
            'doses = "200 to 900 ug/h", round_to = "50 ug/h"'))
    place = read_place(section.what, protocol, f"{where}: what")
    if place.key not in ("amount", "rate") or place.band is not None:
        raise ProblemsError(Problem(f"{where}: what", f'"{section.what}"', '"dose 1: amount" or "dose 1: rate"'))
    if protocol.dose[place.dose].band:
        raise ProblemsError(Problem(f"{where}: what", f'"{section.what}", which has bands already',
                                    "a dose without bands"))
    kind = "mass" if place.key == "amount" else "rate"
    if section.round_to.kind != kind or section.round_to.value == 0:
        raise ProblemsError(Problem(f"{where}: round_to", f'"{section.round_to.text}"',
                                    'an amount, such as "50 mg"' if kind == "mass" else 'a rate, such as "50 mg/h"'))
    cut_up(asked.study([protocol]), section.by, section.edges_to, MOST_SLICES, f"{where}: by")
    return section, place, _doses(section, kind, f"{where}: doses")


def _doses(section: FindTableSection, kind: str, where: str) -> list[Quantity]:
    """Multiples of the rounding within the limits."""
    over, unit = range_of(section.doses, [kind], where), section.round_to.unit
    step = Fraction(f"{to_unit(section.round_to.value, unit, kind):.10g}")
    least, most = (to_unit(limit, unit, kind) for limit in (over.low, over.high))
    numbers = range(math.ceil(float(least / step) - 1e-9), math.floor(float(most / step) + 1e-9) + 1)
    if not 2 <= len(numbers) <= MOST_DOSES:
        raise ProblemsError(Problem(where, f"{len(numbers)} multiples of {section.round_to.text} in {section.doses}",
                                    f"2 to {MOST_DOSES} doses to choose from", "other limits, or another round_to"))
    return [parse_quantity(f"{float(number * step):.10g} {unit}", [kind]) for number in numbers]


def with_table(protocol: ProtocolSection, place: Place, by: str, table: WardTable) -> ProtocolSection:
    """The protocol with the table in place of one dose."""
    step = protocol.dose[place.dose]
    if len(table.doses) == 1:
        changed = step.model_copy(update={place.key: table.doses[0], "by": None})
    else:
        bands = [BandSection.model_construct(where=compile_formula(_condition(by, low, high), "", "condition"),
                                             **{place.key: dose})
                 for (low, high), dose in zip(table.limits(), table.doses, strict=True)]
        changed = step.model_copy(update={place.key: None, "band": bands, "by": None})
    doses = [*protocol.dose[:place.dose], changed, *protocol.dose[place.dose + 1:]]
    return protocol.model_copy(update={"name": table.name, "dose": doses})


def _condition(by: str, low: float, high: float) -> str:
    parts = [f"{by} >= {low:.10g}"] * bool(np.isfinite(low)) + [f"{by} < {high:.10g}"] * bool(np.isfinite(high))
    return " and ".join(parts)


def candidates(protocol: ProtocolSection, section: FindTableSection, place: Place,
               doses: list[Quantity]) -> list[ProtocolSection]:
    """Each dose as one dose for everybody."""
    return [with_table(protocol, place, section.by, WardTable((), (dose,))).model_copy(update={"name": dose.text})
            for dose in doses]


def search_table(asked: Asked, protocol: ProtocolSection, threads: int = 1) -> TableFound:
    """Find the tables from the wanted number of bands down to one dose, and put them to fresh patients."""
    section, place, doses = read_table(asked, protocol)
    counts = count(asked.study(candidates(protocol, section, place, doses)), threads,
                   cells_of=lambda rows: slices(rows, section.by, section.edges_to))
    slicing = Slices(asked, counts)
    tables, seen = [], set()
    for bands in range(min(section.bands, len(counts.cells)), 0, -1):
        pieces = slicing.best(bands)
        table = _table(pieces, counts.cells[:, 0] * section.edges_to, doses)
        if table not in seen:
            tables.append((table, pieces))
            seen.add(table)
    written = protocol.model_copy(update={"name": f'as written: "{protocol.name}"'})
    protocols = [written, *(with_table(protocol, place, section.by, table) for table, _ in tables)]
    return TableFound(asked, protocol, place, section.by, [table for table, _ in tables],
                      np.stack([slicing.attained(pieces) for _, pieces in tables]),
                      in_fresh(asked, protocols, threads))


def slices(rows: BlockRows, by: str, width: float) -> np.ndarray:
    """(n, 1) which slice of the covariate each patient is in; edges at multiples of `width`, lower edge inside."""
    return np.floor(np.asarray(rows.lookup(by), dtype=np.float64) / width + 1e-9).astype(np.int64)[:, None]


Pieces = list[tuple[int, int, int]]  # first slice, slice after the last, dose


class Slices:
    """What every dose does in every slice of the covariate, and the best way to cut them into bands."""

    def __init__(self, asked: Asked, counts: Counts):
        self._n = counts.patients  # (groups, slices)
        self._attained = counts.sums["attained"][:, 0]  # (doses, groups, slices)
        self._wishes = []
        for wish, target in asked.wishes:
            hits = counts.sums[wish.time][:, 0] if wish.time else counts.sums["attained"][:, target]
            if wish.ever:
                hits = self._n - hits
            groups = [g for g, name in enumerate(counts.groups)
                      if (name == wish.group or wish.group == EVERY) and counts.n[g] > 0]
            self._wishes.append((hits, groups, 1.0 if wish.at_least else -1.0, wish.share))
        self._least = LEAST_SHARE * self._n[0].sum()

    def attained(self, pieces: Pieces) -> np.ndarray:
        """(groups,) share attained with a table."""
        with np.errstate(invalid="ignore"):
            return self._sum(self._attained, pieces) / self._n.sum(axis=1)

    def best(self, bands: int) -> Pieces:
        """The table of at most so many bands with the smallest shortfall, then the highest attainment."""
        everyone = self._n[0].sum()
        value = self._attained[:, 0] / everyone
        weights = [np.zeros(len(groups)) for _, groups, _, _ in self._wishes]
        best, found = None, None
        for turn in range(WEIGHINGS if self._wishes else 1):
            score = value.copy()
            for (hits, groups, sign, _), weight in zip(self._wishes, weights, strict=True):
                for g, w in zip(groups, weight, strict=True):
                    score += w * sign * hits[:, g] / self._n[g].sum()
            pieces = self._cut(score, bands)
            short = [sign * (share - self._sum(hits, pieces)[groups] / self._n[groups].sum(axis=1))
                     for hits, groups, sign, share in self._wishes]
            worst = max((float(one.max()) for one in short if one.size), default=0.0)
            quality = (-max(worst, 0.0), float(self.attained(pieces)[0]))
            if best is None or quality > best:
                best, found = quality, pieces
            pace = FIRST_WEIGHT / np.sqrt(turn + 1)
            weights = [np.maximum(weight + pace * one, 0.0) for weight, one in zip(weights, short, strict=True)]
        return found

    def _sum(self, values: np.ndarray, pieces: Pieces) -> np.ndarray:
        return np.sum([values[dose, :, first:end].sum(axis=-1) for first, end, dose in pieces], axis=0)

    def _cut(self, score: np.ndarray, bands: int) -> Pieces:
        """Dynamic programming over the slices: score (doses, slices) of each band's best dose, summed."""
        slices = score.shape[1]
        until = np.concatenate([np.zeros((len(score), 1)), np.cumsum(score, axis=1)], axis=1)
        held = np.concatenate([[0], np.cumsum(self._n[0])])
        gain = until[:, None, :] - until[:, :, None]  # (doses, first, end)
        dose, value = gain.argmax(axis=0), gain.max(axis=0)
        value[(held[None, :] - held[:, None]) < self._least] = -np.inf
        value[np.tril_indices(slices + 1)] = -np.inf
        best = [value[0]]
        before: list[np.ndarray] = []
        for _ in range(bands - 1):
            through = best[-1][:, None] + value
            before.append(through.argmax(axis=0))
            best.append(through.max(axis=0))
        used = int(np.argmax([one[slices] for one in best]))
        end, pieces = slices, []
        for step in range(used, -1, -1):
            first = int(before[step - 1][end]) if step else 0
            pieces.insert(0, (first, end, int(dose[first, end])))
            end = first
        return pieces


def _table(pieces: Pieces, lower_edges: np.ndarray, doses: list[Quantity]) -> WardTable:
    """Bands with the same dose beside each other become one."""
    merged = [pieces[0]]
    for first, end, dose in pieces[1:]:
        if dose == merged[-1][2]:
            merged[-1] = (merged[-1][0], end, dose)
        else:
            merged.append((first, end, dose))
    return WardTable(tuple(float(lower_edges[first]) for first, _, _ in merged[1:]),
                     tuple(doses[dose] for _, _, dose in merged))
