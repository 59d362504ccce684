"""The tick of a log, and tied bids spread over it.

Bids are written to a tick: whole euros, cents, fives. Where many bids tie, a bid stands for all values that
round to it. The tick is the largest of 1, 2, 2.5 and 5 times a power of ten that at least nine in ten bids
are multiples of, where no single value counts for more than one bid in fifty (a popular bid is no tick); m
equal bids on the tick are spread evenly over one tick around their value.
"""

from __future__ import annotations

import math

import numpy as np

from mechbench.contract import Floats

__all__ = ["find_tick", "spread_ties", "tied_share"]


def tied_share(ordered: Floats) -> float:
    """Share of the bids, in rising order, that equal another bid."""
    same = np.diff(ordered) == 0
    tied = np.append(same, False) | np.append(False, same)
    return float(tied.mean())


def find_tick(bids: Floats) -> float:
    """Largest tick that nine in ten bids keep, or 0 if there is none.

    Parameters
    ----------
    bids : array (bids,)
        Bids above 0 in rising order; of many some thousands are looked at.
    """
    looked_at, count = np.unique(bids[:: max(1, bids.size // _LOOKED_AT)], return_counts=True)
    weight = np.minimum(count, max(1.0, count.sum() * _POPULAR))
    middle = float(np.median(looked_at))
    for power in range(math.floor(math.log10(middle)) + 1, math.floor(math.log10(middle)) - _DIGITS, -1):
        for step in (5.0, 2.5, 2.0, 1.0):
            tick = step * 10.0**power
            if _on(looked_at, tick) @ weight >= _KEEP_IT * weight.sum():
                return tick
    return 0.0


def spread_ties(ordered: Floats, tick: float) -> Floats:
    """Spread equal bids on the tick evenly over one tick around their value.

    Parameters
    ----------
    ordered : array (bids,)
        In rising order.
    tick : float
        As found; 0 leaves everything as it is.

    Returns
    -------
    array (bids,)
        In the order of the bids given: equal bids rise, the whole may not where some bids are off the tick.
    """
    if tick == 0:
        return ordered
    _, start, count = np.unique(ordered, return_index=True, return_counts=True)
    place = np.arange(ordered.size) - np.repeat(start, count)
    offset = (place + 0.5) / np.repeat(count, count) - 0.5
    return np.where(_on(ordered, tick), ordered + tick * offset, ordered)


def _on(bids: Floats, tick: float) -> np.ndarray:
    """Which bids are multiples of the tick, to rounding."""
    steps = bids / tick
    whole = np.rint(steps)
    return (whole >= 1) & (np.abs(steps - whole) <= _ROUNDING * np.maximum(steps, 1.0))


_LOOKED_AT = 20_000
_KEEP_IT = 0.9
_POPULAR = 0.02
_DIGITS = 7
"""How many decimal digits below the median bid a tick may be; finer ones tie nothing."""
_ROUNDING = 1e-9
