"""Where a protocol stops working: attainment over two covariates, for each sex."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from covariates.problems import Problem, ProblemsError
from popsim.estimate import wilson
from popsim.finding.counting import Asked, Counts, count, cut_up, fresh
from popsim.lookup import Lookup
from popsim.records import BlockRows
from popsim.study_records import Study
from popsim.study_sections import ProtocolSection

FINE = 5  # regions are looked for in cells so much narrower than those of the table
MOST_CELLS = 100
CELLS = 12  # about so many across and up where the study does not say how wide they are
MOST_REGIONS = 4  # of each sex
AGAINST = 3.0  # patients where more attain than the level count so much against a region, so that it is no mixture
LEAST_SHARE, FEWEST = 0.01, 30  # a region holds at least this share of its sex, and so many patients
DEFAULT_LEVEL = 0.8
SEXES = ("female", "male", "")  # the last where the patients bring no sex


@dataclass(frozen=True)
class Axis:
    """A covariate cut into cells whose edges are multiples of `width`."""

    name: str
    width: float

    def cell(self, lookup: Lookup, parts: int = 1) -> np.ndarray:
        values = np.asarray(lookup(self.name), dtype=np.float64)
        return np.floor(values / (self.width / parts) + 1e-9).astype(np.int64)


@dataclass(frozen=True)
class Region:
    """Patients of one sex beyond one edge of each axis (-inf or inf where that side is open): fewer attain than the
    level. Shares with intervals in the patients in whom it was found, and in fresh ones."""

    sex: str
    across: tuple[float, float]
    up: tuple[float, float]
    patients: int
    attained: float
    fresh_patients: int = 0
    fresh_attained: float = float("nan")
    fresh_low: float = float("nan")
    fresh_high: float = float("nan")


@dataclass(frozen=True)
class MapFound:
    """Counts of the cells, one row each: sex, cell across, cell up, patients, attained, failed."""

    asked: Asked
    protocol: ProtocolSection
    level: float
    across: Axis
    up: Axis
    cells: np.ndarray
    regions: list[Region]
    counts: Counts


def search_map(asked: Asked, protocol: ProtocolSection, threads: int = 1) -> MapFound:
    """Count the protocol in fine cells, find the regions below the level, and look at them in fresh patients."""
    section = asked.section.find.map
    study = asked.study([protocol])
    if section.across == section.up:
        raise ProblemsError(Problem(f"{asked.path.name}: find, map: up", f'"{section.up}" twice', "two covariates"))
    across, up = _axes(asked, study)
    counts, found = _fine(study, across, up, threads)
    level = section.level.value / 100 if section.level else DEFAULT_LEVEL
    _, again = _fine(fresh(study), across, up, threads)
    regions = [_in_fresh(region, again, across, up) for region in _regions(found, level, across, up)]
    return MapFound(asked, protocol, level, across, up, _coarse(found), regions, counts)


def _axes(asked: Asked, study: Study) -> tuple[Axis, Axis]:
    """The two axes, with cells of a round width where the study does not say."""
    section = asked.section.find.map
    axes = []
    for key, name, width in (("across", section.across, section.across_every), ("up", section.up, section.up_every)):
        values = cut_up(study, name, width, MOST_CELLS, f"{asked.path.name}: find, map: {key}")
        spread = np.ptp(np.quantile(values, (0.005, 0.995)))
        axes.append(Axis(name, width or _round_width(spread / CELLS)))
    return axes[0], axes[1]


def _round_width(width: float) -> float:
    """The next of 1, 2, 5, 10, 20, 50 ..."""
    decade = 10.0 ** np.floor(np.log10(max(width, 1e-9)))
    return float(next(step * decade for step in (1, 2, 5, 10) if step * decade >= width * (1 - 1e-9)))


def _fine(study: Study, across: Axis, up: Axis, threads: int) -> tuple[Counts, np.ndarray]:
    """The counts, and as (cells, 6): place of the sex, cell across, cell up, patients, attained, failed."""
    def cells_of(rows: BlockRows) -> np.ndarray:
        sex = rows.patients.attributes.get("sex")
        place = np.full(len(rows.patients), 2) if sex is None else (sex == "male").astype(np.int64)
        return np.stack([place, across.cell(rows.lookup, FINE), up.cell(rows.lookup, FINE)], axis=1)

    counts = count(study, threads, cells_of=cells_of)
    hits, failed = (np.rint(counts.sums[name][0, 0, 0]).astype(np.int64) for name in ("attained", "failed"))
    return counts, np.column_stack([counts.cells, counts.patients[0], hits, failed])


def _coarse(fine: np.ndarray) -> np.ndarray:
    keys = np.column_stack([fine[:, 0], fine[:, 1] // FINE, fine[:, 2] // FINE])
    cells, place = np.unique(keys, axis=0, return_inverse=True)
    sums = np.zeros((len(cells), 3), dtype=np.int64)
    np.add.at(sums, place.ravel(), fine[:, 3:])
    return np.column_stack([cells, sums])


def _regions(fine: np.ndarray, level: float, across: Axis, up: Axis) -> list[Region]:
    """For each sex the corners (or sides) of the plane that hold the most patients short of the level."""
    found = []
    for sex in np.unique(fine[:, 0]):
        mine = fine[fine[:, 0] == sex]
        everyone, left = mine[:, 3].sum(), mine
        for _ in range(MOST_REGIONS):
            region = _worst_corner(left, level, max(LEAST_SHARE * everyone, FEWEST))
            if region is None:
                break
            region = _sharpened(left, region, level)
            inside = _inside(mine, *region)  # all of the corner, also what an earlier one holds
            n, hits = int(mine[inside, 3].sum()), int(mine[inside, 4].sum())
            sides = [tuple(edge * axis.width / FINE for edge in limits)
                     for limits, axis in zip(region, (across, up), strict=True)]
            found.append(Region(SEXES[sex], *sides, n, hits / n))
            left = left[~_inside(left, *region)]
    return found


def _worst_corner(cells: np.ndarray, level: float, least: float) -> tuple | None:
    """The corner with the largest sum of patients x (level - share), shares smoothed over neighbouring cells and those
    above the level counting threefold: limits across and up, in cells. None where no corner is clearly below."""
    if not len(cells):
        return None
    low, size = cells[:, 1:3].min(axis=0), np.ptp(cells[:, 1:3], axis=0) + 1
    n, hits = (np.zeros(size) for _ in range(2))
    place = tuple((cells[:, 1:3] - low).T)
    n[place], hits[place] = cells[:, 3], cells[:, 4]
    lack = n * (level - neighbours(hits, FINE) / np.maximum(neighbours(n, FINE), 1))
    lack = np.where(lack < 0, AGAINST * lack, lack)
    best, region = 0.0, None
    for turned in ((1, 1), (1, -1), (-1, 1), (-1, -1)):
        lacks, people, attained = (_from_corner(of, turned) for of in (lack, n, hits))
        with np.errstate(invalid="ignore"):
            clear = (people >= least) & (wilson(attained, people)[1] < level)
        lacks = np.where(clear, lacks, -np.inf)
        i, j = np.unravel_index(np.argmax(lacks), lacks.shape)
        if lacks[i, j] > best:
            best = lacks[i, j]
            region = tuple(_limits(int(at), turn, int(lowest), int(length))
                           for at, turn, lowest, length in zip((i, j), turned, low, size, strict=True))
    return region


def _sharpened(cells: np.ndarray, region: tuple, level: float) -> tuple:
    """Smoothing blurs a border: each edge moves, by a cell of the map at most, to where the cells themselves say that
    the patients next to it fall short of the level on one side and not on the other."""
    for axis in (0, 1):
        at = next((edge for edge in region[axis] if np.isfinite(edge)), None)
        if at is not None:
            moved = [_moved(region, axis, edge) for edge in np.arange(at - FINE, at + FINE + 1)]
            region = max(moved, key=lambda one: _lack(cells, one, level))
    return region


def _moved(region: tuple, axis: int, edge: float) -> tuple:
    limits = tuple(edge if np.isfinite(old) else old for old in region[axis])
    return (limits, region[1]) if axis == 0 else (region[0], limits)


def _lack(cells: np.ndarray, region: tuple, level: float) -> float:
    """How many patients the region is short of the level."""
    inside = _inside(cells, *region)
    return float((level * cells[inside, 3] - cells[inside, 4]).sum())


def _from_corner(values: np.ndarray, turned: tuple[int, int]) -> np.ndarray:
    """[i, j]: sum of all that lies at or beyond cell (i, j), away from the turned corner."""
    flipped = values[::turned[0], ::turned[1]]
    return np.cumsum(np.cumsum(flipped[::-1, ::-1], axis=0), axis=1)[::-1, ::-1][::turned[0], ::turned[1]]


def neighbours(values: np.ndarray, reach: int) -> np.ndarray:
    """Sums over each cell and all within `reach` cells of it, in both directions."""
    for axis in (0, 1):
        wide = [(reach + 1, reach) if k == axis else (0, 0) for k in (0, 1)]
        until = np.cumsum(np.pad(values, wide), axis=axis)
        length = values.shape[axis]
        over = 2 * reach + 1
        values = np.take(until, range(over, over + length), axis) - np.take(until, range(length), axis)
    return values


def _limits(at: int, turn: int, lowest: int, length: int) -> tuple[float, float]:
    if turn == 1:
        return (-np.inf if at == 0 else float(lowest + at), np.inf)
    return (-np.inf, np.inf if at == length - 1 else float(lowest + at + 1))


def _inside(cells: np.ndarray, across: tuple[float, float], up: tuple[float, float]) -> np.ndarray:
    return ((cells[:, 1] >= across[0]) & (cells[:, 1] < across[1])
            & (cells[:, 2] >= up[0]) & (cells[:, 2] < up[1]))


def _in_fresh(region: Region, fine: np.ndarray, across: Axis, up: Axis) -> Region:
    limits = [tuple(np.rint(edge / (axis.width / FINE)) if np.isfinite(edge) else edge for edge in sides)
              for sides, axis in ((region.across, across), (region.up, up))]
    inside = _inside(fine, *limits) & (fine[:, 0] == SEXES.index(region.sex))
    n, hits = int(fine[inside, 3].sum()), int(fine[inside, 4].sum())
    low, high = wilson(hits, n)
    return Region(region.sex, region.across, region.up, region.patients, region.attained, n,
                  hits / n if n else float("nan"), float(low), float(high))
