"""Named streams of random numbers: one for each random quantity, so that no draw depends on any other.

A draw is found by four things alone: the study's seed, the name of the quantity, the block of candidates and the slot
in that block. Adding a quantity, more patients, threads or workers therefore changes nobody's luck.

Source: the generator is PCG64 DXSM (O'Neill 2014, with the output function numpy recommends for parallel streams), its
state mixed from seed, name and block by numpy's SeedSequence.
"""

from __future__ import annotations

import hashlib
from functools import lru_cache

import numpy as np

BLOCK = 8192  # candidates in a block


def normals(seed: int, name: str, block: int) -> np.ndarray:
    """Standard normal numbers of one quantity for one block of candidates.

    seed   the study's seed, 0 <= seed < 2**128
    name   the random quantity, such as "survey.height"
    block  number of the block, 0, 1, ...

    Returns (8192,) float64, no unit: the luck of each slot.
    Raises ValueError for a negative or too large seed, an empty name or a negative block.

    >>> normals(20261201, "survey.height", 0)[:2].round(4).tolist()
    [-2.9192, 0.3248]
    """
    return _generator(seed, name, block).standard_normal(BLOCK)


def uniforms(seed: int, name: str, block: int) -> np.ndarray:
    """Numbers spread evenly over 0 <= u < 1, of one quantity for one block of candidates; otherwise like `normals`.

    >>> uniforms(20261201, "survey.age", 0)[:2].round(4).tolist()
    [0.7152, 0.2938]
    """
    return _generator(seed, name, block).random(BLOCK)


def _generator(seed: int, name: str, block: int) -> np.random.Generator:
    if not 0 <= seed < 2**128:
        raise ValueError(f"seed must be a whole number from 0 to 2**128 - 1, not {seed}")
    if not name:
        raise ValueError("a random stream needs a name")
    if block < 0:
        raise ValueError(f"block must not be negative, not {block}")
    # beside a spawn key numpy pads the seed to 128 bits, so that no two (seed, name, block) share their words
    sequence = np.random.SeedSequence(seed, spawn_key=(*_name_words(name), block))
    return np.random.Generator(np.random.PCG64DXSM(sequence))


@lru_cache(maxsize=1024)
def _name_words(name: str) -> tuple[int, ...]:
    """The name as eight 32-bit numbers: Python's own hash would differ from run to run."""
    digest = hashlib.sha256(name.encode()).digest()
    return tuple(int.from_bytes(digest[start : start + 4], "big") for start in range(0, 32, 4))
