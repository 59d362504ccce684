"""Best unilateral deviations by search, for a mechanism that does not know its gains in closed form.

Where the outcome depends on a report only through its place among the other bids, the reserve and 0, as in
every rule that ranks bids, the best report in hindsight is one of those, ties going the deviator's way: it is
put before the other bids, and equal bids win in that order. For any other rule the result is a lower bound,
and it is labelled so.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from mechbench.contract import Floats, IdenticalUnits, InputError, Mechanism, Outcome

__all__ = ["searched_gains", "searched_least_payments"]

_MOST_SEARCHED = 200
"""A search evaluates about as many outcomes as the square of the bids."""


def searched_gains(mechanism: Mechanism, bids: Floats, supply: IdenticalUnits, outcome: Outcome) -> Floats:
    """Each bidder's largest gain over the searched reports, array (draws, bidders).

    Parameters
    ----------
    mechanism : Mechanism
    bids : array (draws, bidders)
        Truthful bids in falling order.
    supply : IdenticalUnits
    outcome : Outcome
        The truthful one.

    Raises
    ------
    InputError
        If there are too many bids to search.
    """
    gains = np.zeros_like(bids)
    for bidder in range(bids.shape[1]):
        value = bids[:, bidder]
        held = value * outcome.allocation[:, bidder]
        truthful = held - outcome.payment[:, bidder]
        best, best_held = truthful, held
        for allocation, payment in _deviations(mechanism, bids, supply, bidder):
            utility = value * allocation - payment
            better = (utility > best) | ((utility == best) & (value * allocation > best_held))
            best = np.where(better, utility, best)
            best_held = np.where(better, value * allocation, best_held)
        worth = np.maximum(held, best_held) + np.maximum(0.0, -truthful)
        gains[:, bidder] = (best - truthful) / np.where(worth > 0, worth, 1.0) * (worth > 0)
    return gains


def searched_least_payments(mechanism: Mechanism, bids: Floats, supply: IdenticalUnits, outcome: Outcome) -> Floats:
    """Least payment over the searched reports that keep at least the allocation, array (draws, bidders)."""
    least = outcome.payment.copy()
    for bidder in range(bids.shape[1]):
        kept = outcome.allocation[:, bidder]
        for allocation, payment in _deviations(mechanism, bids, supply, bidder):
            cheaper = (allocation >= kept) & (payment < least[:, bidder])
            least[cheaper, bidder] = payment[cheaper]
    return np.where(outcome.allocation > 0, least, 0.0)


def _deviations(
    mechanism: Mechanism, bids: Floats, supply: IdenticalUnits, bidder: int
) -> Iterator[tuple[Floats, Floats]]:
    """Allocation and payment of one bidder at each searched report, arrays (draws,)."""
    if bids.shape[1] > _MOST_SEARCHED:
        msg = (
            f"mechanism {mechanism.name} has no closed form for its gains or least payments, and a search "
            f"over {bids.shape[1]} bids takes too long; accepted is at most {_MOST_SEARCHED} bids"
        )
        raise InputError(msg)
    others = np.delete(bids, bidder, axis=1)
    constant = np.empty(bids.shape[0])
    for report in [*others.T, np.full_like(constant, supply.reserve), np.zeros_like(constant)]:
        outcome = mechanism.outcome(np.column_stack([report, others]), supply)
        yield outcome.allocation[:, 0], outcome.payment[:, 0]
