"""A log's bids in bounded memory: all of them while they are few, a summary once they are many.

The summary keeps the highest 100,000 bids as they are. The others are counted in 2,048 steps per doubling,
each step with the sum of its bids, so that a step stands for its own mean. What is kept does not grow with
the log: there are at most 2,048 steps for each of the doublings between the smallest and the largest bid.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from mechbench.contract import Floats

__all__ = ["EXACT_BIDS", "TOP_BIDS", "Summary"]

EXACT_BIDS = 200_000
"""Up to so many bids a log is kept whole."""
TOP_BIDS = 100_000
"""So many of the highest bids a summary keeps as they are."""


class Summary:
    """Bids above 0, added in blocks.

    Attributes
    ----------
    bids : int
        How many there are.
    exact : bool
        Whether all are kept.
    first : array
        The first 200,000 or so of a log that is no longer kept whole: enough to see how bids are written.
    """

    def __init__(self) -> None:
        self.bids = 0
        self.exact = True
        self.first: Floats = np.empty(0)
        self._blocks: list[Floats] = []
        self._top: Floats = np.empty(0)
        self._steps: NDArray[np.int64] = np.empty(0, dtype=np.int64)
        self._counts: NDArray[np.int64] = np.empty(0, dtype=np.int64)
        self._sums: Floats = np.empty(0)

    def add(self, bids: Floats) -> None:
        """Take in a block of bids, all above 0."""
        self.bids += bids.size
        if self.exact and self.bids <= EXACT_BIDS:
            self._blocks.append(bids)
            return
        if self.exact:
            self.exact = False
            self.first = bids = np.concatenate([*self._blocks, bids])
            self._blocks.clear()
        floor = self._top.min() if self._top.size == TOP_BIDS else 0.0
        high = bids > floor
        pool = np.concatenate([self._top, bids[high]])
        low = bids[~high]
        if pool.size > TOP_BIDS:
            pool.partition(pool.size - TOP_BIDS)
            low = np.concatenate([low, pool[:-TOP_BIDS]])
            pool = pool[-TOP_BIDS:].copy()
        self._top = pool
        self._count(low)

    def values(self) -> Floats:
        """Every bid in the order in which it came; only while `exact`."""
        return np.concatenate([*self._blocks, np.empty(0)])

    @property
    def top(self) -> int:
        """How many of the highest bids are kept one by one in a summary."""
        return self._top.size

    def weighted(self) -> tuple[Floats, NDArray[np.int64]]:
        """Values in rising order and how many bids each stands for; only once no longer `exact`."""
        values = np.concatenate([self._sums / self._counts, np.sort(self._top)])
        return values, np.concatenate([self._counts, np.ones(self._top.size, dtype=np.int64)])

    def _count(self, bids: Floats) -> None:
        """Add bids to the steps: a float's leading bits are its step."""
        steps: NDArray[np.int64] = np.concatenate([self._steps, np.right_shift(bids.view(np.int64), _DROPPED_BITS)])
        counts: Floats = np.concatenate([self._counts, np.ones(bids.size, dtype=np.int64)])
        sums = np.concatenate([self._sums, bids])
        self._steps, place = np.unique(steps, return_inverse=True)
        self._counts = np.bincount(place, weights=counts).astype(np.int64)
        self._sums = np.bincount(place, weights=sums).astype(np.float64)


_DROPPED_BITS = 52 - 11
"""A float64 has 52 bits of fraction; 11 of them kept make 2,048 steps per doubling."""
