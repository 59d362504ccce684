"""Summing draws in equal batches while their number doubles, in bounded memory."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from typing import Protocol

import numpy as np

from mechbench.contract import Floats

__all__ = ["FEWEST", "Draws", "doublings"]

FEWEST = 2**6
"""The fewest draws that an interval may rest on."""

_BLOCK = 2**15
"""Numbers drawn at once, few enough for a cache; the results do not depend on it."""
_ROWS = 2**12
"""Draws summed at once; a power of two."""
_BATCHES = 2**10
"""Batches, once there are so many draws; before, every draw is one. The draws go on in powers of two."""
_FIRST = 2**22
"""Numbers that the first look at the estimates may rest on."""
_MOST = (2**22, 2**30)
"""Draws, and numbers drawn, after which to stop if nobody says otherwise."""


class Draws(Protocol):
    """A supply of independent draws, each adding to the same columns of sums."""

    @property
    def columns(self) -> int:
        """How many sums a draw adds to."""
        ...

    @property
    def width(self) -> int:
        """Numbers held per draw, for the size of a block."""
        ...

    def fill(self, rows: Floats) -> None:
        """Write what the next draws add into `rows`, array (draws, columns)."""
        ...


def doublings(
    source: Draws, max_draws: int | None, progress: Callable[[int], None] | None
) -> Iterator[tuple[Floats, int]]:
    """Draw, and draw as many again, for as long as the caller asks.

    Parameters
    ----------
    source : Draws
    max_draws : int or None
        Never more draws than this.
    progress : callable or None
        Called with the draws made so far.

    Yields
    ------
    sums : array (batches, columns)
        Sums over equal batches of all the draws so far.
    draws : int
        How many these are.
    """
    most = max_draws if max_draws is not None else min(_MOST[0], max(_BATCHES, _MOST[1] // source.width))
    first = min(_BATCHES, max(FEWEST, _FIRST // source.width), most)
    draws = 1 << (first.bit_length() - 1)
    most = draws << ((most // draws).bit_length() - 1)
    sums = _sums(source, draws, draws, progress, 0)
    yield sums, draws
    while 2 * draws <= most:
        kept = sums if 2 * draws <= _BATCHES else sums.reshape(-1, 2, source.columns).sum(axis=1)
        fresh = _sums(source, draws, len(kept), progress, draws)
        sums, draws = np.concatenate([kept, fresh]), 2 * draws
        yield sums, draws


def _sums(source: Draws, draws: int, batches: int, progress: Callable[[int], None] | None, already: int) -> Floats:
    """Make new draws and sum them over equal batches; both counts are powers of two."""
    size = draws // batches
    height = min(draws, _ROWS)
    block = max(1, _BLOCK // source.width)
    rows = np.empty((height, source.columns))
    sums = np.zeros((batches, source.columns))
    for start in range(0, draws, height):
        for at in range(0, height, block):
            source.fill(rows[at : at + block])
            if progress is not None:
                progress(already + start + min(at + block, height))
        if size <= height:
            sums[start // size : (start + height) // size] = rows.reshape(-1, size, source.columns).sum(axis=1)
        else:
            sums[start // size] += rows.sum(axis=0)
    return sums
