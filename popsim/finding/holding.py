"""Which wishes hold under each protocol that was counted, and by how much."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from popsim.estimate import no_headline
from popsim.finding.counting import Asked, Counts
from popsim.finding.wishes import EVERY, Wish


@dataclass(frozen=True)
class Held:
    """One wish under each protocol, (p,) arrays.

    share      the share that the wish is about, in the group where it does worst; `low`, `high` its 95 % interval
               (NaN for mean shares of the window)
    group      place of that group
    shortfall  how far the share is on the wrong side, 0 where the wish is met; 1 where over 1 % failed
    met        whether it is met; `clearly` whether the whole interval is on the right side
    """

    wish: Wish
    share: np.ndarray
    low: np.ndarray
    high: np.ndarray
    group: np.ndarray
    shortfall: np.ndarray
    met: np.ndarray
    clearly: np.ndarray


def hold(asked: Asked, counts: Counts) -> list[Held]:
    """Every wish of the study under every protocol. Groups without patients have no say."""
    return [_hold_one(wish, target, counts) for wish, target in asked.wishes]


def shortfall(held: list[Held]) -> np.ndarray:
    """(p,) the worst shortfall over all wishes."""
    return np.max([one.shortfall for one in held], axis=0)


def all_met(held: list[Held]) -> np.ndarray:
    return np.all([one.met for one in held], axis=0)


def share_of(wish: Wish, target: int, counts: Counts) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """(p, g) what a wish is about, with its interval."""
    if wish.time:
        share = counts.mean_share(wish.time)
        return share, np.full_like(share, np.nan), np.full_like(share, np.nan)
    hits = counts.total("attained", target)
    n = np.broadcast_to(counts.n, hits.shape)
    hits = n - hits if wish.ever else hits  # whoever failed counts as ever beyond the limit
    with np.errstate(invalid="ignore"):
        return hits / n, *counts.interval(hits, target)


def _hold_one(wish: Wish, target: int, counts: Counts) -> Held:
    share, low, high = share_of(wish, target, counts)
    asked = [g for g, name in enumerate(counts.groups)
             if (name == wish.group or wish.group == EVERY) and counts.n[g] > 0]
    short = np.where(no_headline(counts.total("failed"), counts.n), 1.0,
                     np.maximum(wish.share - share if wish.at_least else share - wish.share, -1.0))
    if not asked:
        nothing = np.full(len(share), np.nan)
        return Held(wish, nothing, nothing, nothing, np.zeros(len(share), dtype=np.int64), np.ones(len(share)),
                    np.zeros(len(share), dtype=bool), np.zeros(len(share), dtype=bool))
    group = np.array(asked)[np.argmax(short[:, asked], axis=1)]
    at = np.arange(len(share)), group
    worst = np.max(short[:, asked], axis=1)
    sure = np.where(np.isnan(low), share >= wish.share, low >= wish.share) if wish.at_least else np.where(
        np.isnan(high), share <= wish.share, high <= wish.share)
    return Held(wish, share[at], low[at], high[at], group, np.maximum(worst, 0.0), worst <= 0,
                (worst <= 0) & sure[:, asked].all(axis=1))
