"""People of a list drawn again and again: counts per person, and how many independent draws they are worth.

Two draws of the same person are alike in all but luck, so 10,000 draws of 50 people tell hardly more than the 50. The
variance of a share over clusters (the people) says by how much; the usual intervals are then taken of the effective
number of draws.

Source: variance of a ratio over clusters by linearisation, effective sample size and its correction for few clusters
(Korn and Graubard 1998, Surv Methodol 24:193-201; from memory).
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from popsim.estimate import Z95


@dataclass
class ClusterTally:
    """Integer counts per row of the list.

    drawn   (rows,) how often each was drawn
    among   division ("groups", "quarters", ...) -> (rows, parts) bool, whether each belongs to a part
    sums    what is summed, such as ("attained", model, protocol, target) -> (rows,) over the draws of each
    """

    drawn: np.ndarray
    among: dict[str, np.ndarray] = field(default_factory=dict)
    sums: dict[tuple, np.ndarray] = field(default_factory=dict)

    @classmethod
    def empty(cls, rows: int) -> ClusterTally:
        return cls(np.zeros(rows, dtype=np.int64))

    def add_people(self, origins: np.ndarray) -> None:
        """A block: the row of each patient."""
        self.drawn += np.bincount(origins, minlength=len(self.drawn))

    def add_among(self, division: str, origins: np.ndarray, members: np.ndarray) -> None:
        """(n, parts) whether each patient belongs to each part; all draws of a person belong to the same."""
        rows = self.among.setdefault(division, np.zeros((len(self.drawn), members.shape[1]), dtype=bool))
        rows[origins] |= members > 0

    def add(self, key: tuple, origins: np.ndarray, values: np.ndarray) -> None:
        """(n,) integers or true and false, to be summed by person."""
        np.add.at(self.sums.setdefault(key, np.zeros(len(self.drawn), dtype=np.int64)), origins, values)

    def arrays(self) -> list[np.ndarray]:
        return [self.drawn, *self.among.values(), *self.sums.values()]

    def worth(self, key: tuple, division: str = "groups") -> np.ndarray:
        """(parts,) what one draw is worth, 0 to 1 independent draws, for a share of the draws."""
        return np.array([worth_of(self.sums[key][chosen], self.drawn[chosen]) for chosen in self.among[division].T])

    def worth_paired(self, a: tuple, b: tuple, division: str, part: int, unequal: int) -> float:
        """Likewise for the difference of two shares in the same draws of a part; `unequal` of them attain only one."""
        chosen = self.among[division][:, part]
        return worth_of(self.sums[b][chosen] - self.sums[a][chosen], self.drawn[chosen], unequal)

    def worth_mean(self, key: tuple, group: int, squares: int, unit: int, counted: tuple | None = None) -> float:
        """Likewise for a mean of numbers of each draw, kept as multiples of 1/unit, as their squares are; `counted`
        draws of each person have one, all if not given."""
        chosen = self.among["groups"][:, group]
        drawn = self.drawn if counted is None else self.sums[counted]
        return worth_of(self.sums[key][chosen] / unit, drawn[chosen], squares / unit)


def worth_of(sums: np.ndarray, drawn: np.ndarray, squares: float | None = None) -> float:
    """What one draw is worth, 0 to 1 independent draws, for a mean over all draws.

    sums     (people,) sum over each person's draws of 1 or 0 (or -1, for differences)
    drawn    (people,) how often each was drawn
    squares  sum of the squares over all draws; that of ones and zeros if not given

    1 for nobody; where nothing varies, draws are worth what the people are.

    >>> round(worth_of(np.array([100, 0, 100, 0]), np.array([100, 100, 100, 100])), 4)  # four people, 400 draws
    0.0028
    """
    from scipy.special import stdtrit

    people, n = int(np.count_nonzero(drawn)), int(drawn.sum())
    if n == 0:
        return 1.0
    few = (Z95 / stdtrit(people - 1, 0.975)) ** 2 if people > 1 else 0.0
    mean = sums.sum() / n
    independent = ((sums.sum() if squares is None else squares) / n - mean**2) / n
    clustered = people / max(people - 1, 1) * float(((sums - mean * drawn) ** 2).sum()) / n**2
    if people == 1 or independent <= 0 or clustered <= 0:
        return max(people * few, 1e-3) / n
    return float(min(independent / clustered * few, 1.0))
