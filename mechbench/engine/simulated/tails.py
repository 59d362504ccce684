"""Which amounts of money have no mean, or no variance, because the values' tail is too heavy.

With tail index xi the r-th moment of the j-th highest of any number of bids is finite exactly when
``r xi < j``. An amount that keeps growing with the j highest bids together, but not with fewer, therefore has
no mean from ``xi = j`` on, no variance from ``xi = j / 2`` on, and no fourth moment, on which an interval
needs to rest, from ``xi = j / 4`` on. How many that takes is found by trial: raise the j highest bids by a
large factor and see whether the amount takes a part of the rise.
"""

from __future__ import annotations

from collections.abc import Collection, Mapping

from mechbench.contract import MONEY, Floats, Mechanism
from mechbench.engine.simulated.amounts import draw_amounts
from mechbench.market.market import Market

__all__ = ["HEAVY", "INFINITE", "INFINITE_VARIANCE", "heavy_amounts"]

INFINITE = "infinite"
INFINITE_VARIANCE = "infinite variance: the interval is not to be trusted"
HEAVY = "heavy tail: the interval may cover less than 95 %"

_RISE = 1e6
_PART = 1e-3
"""Share of the rise of the lowest raised bid that an amount must take to count as growing with it."""


def heavy_amounts(market: Market, mechanism: Mechanism, measures: Collection[str], bids: Floats) -> Mapping[str, str]:
    """Find the money measures of which a moment is infinite.

    Parameters
    ----------
    market : Market
    mechanism : Mechanism
    measures : collection of str
    bids : array (draws, bidders)
        A few draws to try on, in falling order.

    Returns
    -------
    mapping of str to str
        `INFINITE`, `INFINITE_VARIANCE` or `HEAVY` by measure; others are left out.
    """
    tail_index = market.values.tail_index
    most = min(int(4.0 * tail_index), bids.shape[1])
    money = set(measures) & MONEY
    found: dict[str, str] = {}
    if "efficiency" in measures and most >= 1:
        found["efficiency"] = _note(tail_index)
    if not money or most < 1:
        return found
    before = draw_amounts(mechanism, bids, market.supply, money, 0.0).of
    for highest in range(1, most + 1):
        raised = bids.copy()
        raised[:, :highest] *= _RISE
        rise = raised[:, highest - 1] - bids[:, highest - 1]
        after = draw_amounts(mechanism, raised, market.supply, money, 0.0).of
        for measure in money - set(found):
            if (after[measure] - before[measure] > _PART * rise).any():
                found[measure] = _note(tail_index / highest)
    return found


def _note(weight: float) -> str:
    if weight >= 1:
        return INFINITE
    return INFINITE_VARIANCE if 2.0 * weight >= 1 else HEAVY
