"""People of a list drawn again and again: counts per person, and how many independent draws they are worth.

Two draws of the same person are alike in all but luck, so 10,000 draws of 50 people tell hardly more than the 50. The
variance of a share over clusters (the people) says by how much; the usual intervals are then taken of the effective
number of draws.

Source: variance of a ratio over clusters by linearisation, effective sample size and its correction for few clusters
(Korn and Graubard 1998, Surv Methodol 24:193-201; from memory).
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from popsim.estimate import Z95


@dataclass
class ClusterTally:
    """Integer counts per row of the list.

    drawn     (rows,) how often each was drawn
    inside    (rows, groups) bool, whether each belongs to a group
    attained  (model, protocol, target) -> (rows,) in how many draws the target was attained
    """

    drawn: np.ndarray
    inside: np.ndarray
    attained: dict[tuple[int, int, int], np.ndarray]

    @classmethod
    def empty(cls, rows: int, groups: int, keys: Iterable[tuple[int, int, int]]) -> ClusterTally:
        return cls(
            np.zeros(rows, dtype=np.int64),
            np.zeros((rows, groups), dtype=bool),
            {key: np.zeros(rows, dtype=np.int64) for key in keys},
        )

    def add_people(self, origins: np.ndarray, members: np.ndarray) -> None:
        """A block: the row of each patient, and (n, groups) whether they belong to each group."""
        self.drawn += np.bincount(origins, minlength=len(self.drawn))
        self.inside[origins] |= members > 0

    def add_attained(self, key: tuple[int, int, int], origins: np.ndarray, attained: np.ndarray) -> None:
        self.attained[key] += np.bincount(origins[attained], minlength=len(self.drawn))

    def arrays(self) -> list[np.ndarray]:
        return [self.drawn, self.inside, *self.attained.values()]

    def worth(self, key: tuple[int, int, int]) -> np.ndarray:
        """(groups,) what one draw is worth, 0 to 1 independent draws, for the share attained."""
        return np.array([worth_of(self.attained[key][chosen], self.drawn[chosen]) for chosen in self.inside.T])

    def worth_paired(self, a: tuple[int, int, int], b: tuple[int, int, int], group: int, unequal: int) -> float:
        """Likewise for the difference of two shares in the same draws of a group; `unequal` of them attain only one."""
        chosen = self.inside[:, group]
        return worth_of(self.attained[b][chosen] - self.attained[a][chosen], self.drawn[chosen], unequal)


def worth_of(sums: np.ndarray, drawn: np.ndarray, squares: int | None = None) -> float:
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
