"""What one draw contributes to every measure, from a mechanism's own methods alone."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mechbench.contract import Floats, IdenticalUnits, Mechanism, Outcome
from mechbench.engine.simulated.deviations import searched_gains, searched_least_payments

__all__ = ["IF_SOLD", "Amounts", "draw_amounts"]

IF_SOLD = frozenset({"worst_gain", "mean_gain", "gain_chance", "worst_room", "price_spread"})
"""Measures that are expectations conditional on at least one sale."""

_FROM_GAINS = frozenset({"worst_gain", "mean_gain", "gain_chance"})
_FROM_LEAST = frozenset({"worst_room", "shaded_revenue"})


@dataclass(frozen=True)
class Amounts:
    """The draws' contributions to the measures.

    Attributes
    ----------
    of : dict of array (draws,)
        By measure; 0 where a measure is conditional on a sale and nothing is sold. That of ``efficiency`` is
        the welfare lost against `best_welfare`, so that no digits go to 1 minus almost 1.
    sold : array (draws,)
        1 where at least one unit is sold, else 0.
    best_welfare : array (draws,)
        The most welfare that the supply allows, reserve ignored.
    searched : frozenset of str
        Measures that rest on searched deviations, and so are lower bounds.
    """

    of: dict[str, Floats]
    sold: Floats
    best_welfare: Floats
    searched: frozenset[str] = frozenset()


def draw_amounts(
    mechanism: Mechanism, bids: Floats, supply: IdenticalUnits, measures: Collection[str], threshold: float
) -> Amounts:
    """Evaluate draws of truthful bids.

    Parameters
    ----------
    mechanism : Mechanism
    bids : array (draws, bidders)
        In falling order along each row; as many of the highest as the mechanism needs to see.
    supply : IdenticalUnits
    measures : collection of str
        Those wanted, except ``interim_gain``, which no single draw has.
    threshold : float
        The gain above which ``gain_chance`` counts.
    """
    outcome = mechanism.outcome(bids, supply)
    won: NDArray[np.bool_] = outcome.allocation > 0
    sold = np.asarray(won.any(axis=1), dtype=np.float64)
    wanted = set(measures)
    of: dict[str, Floats] = {}
    searched: frozenset[str] = frozenset()
    if wanted & _FROM_GAINS:
        gains = mechanism.gains(bids, supply)
        if gains is None:
            gains = searched_gains(mechanism, bids, supply, outcome)
            searched |= wanted & _FROM_GAINS
        of |= _gain_amounts(gains, won, sold, threshold)
    if wanted & _FROM_LEAST:
        least = mechanism.least_payments(bids, supply)
        if least is None:
            least = searched_least_payments(mechanism, bids, supply, outcome)
            searched |= wanted & _FROM_LEAST
        of["worst_room"] = _share_saved(least, outcome.payment, won).max(axis=1)
        of["shaded_revenue"] = np.where(won, least, 0.0).sum(axis=1)
    if "price_spread" in wanted:
        of["price_spread"] = _price_spread(outcome, won)
    if wanted & {"welfare", "efficiency"}:
        of["welfare"] = (outcome.allocation * bids).sum(axis=1)
        best = np.zeros_like(bids)
        best[:, : supply.units] = 1.0
        of["efficiency"] = ((best - outcome.allocation) * bids).sum(axis=1)
    of["revenue"] = outcome.payment.sum(axis=1)
    of["units_unsold"] = 1.0 - outcome.allocation.sum(axis=1) / supply.units
    of["no_sale"] = 1.0 - sold
    best_welfare = bids[:, : supply.units].sum(axis=1)
    return Amounts({measure: of[measure] for measure in measures}, sold, best_welfare, searched)


def _gain_amounts(gains: Floats, won: NDArray[np.bool_], sold: Floats, threshold: float) -> dict[str, Floats]:
    worst = gains.max(axis=1) * sold
    of_winners = np.where(won, gains, 0.0).sum(axis=1)
    return {
        "worst_gain": worst,
        "mean_gain": of_winners / np.maximum(won.sum(axis=1), 1),
        "gain_chance": (worst > threshold).astype(np.float64) * sold,
    }


def _share_saved(least: Floats, paid: Floats, won: NDArray[np.bool_]) -> Floats:
    """Price room of every bidder; 0 for losers and for who pays nothing."""
    counted = won & (paid > 0)
    return np.where(counted, 1.0 - least / np.where(counted, paid, 1.0), 0.0)


def _price_spread(outcome: Outcome, won: NDArray[np.bool_]) -> Floats:
    price = outcome.payment / np.where(won, outcome.allocation, 1.0)
    highest = np.where(won, price, 0.0).max(axis=1)
    lowest = np.where(won, price, np.inf).min(axis=1)
    priced = highest > 0
    return np.where(priced, 1.0 - lowest / np.where(priced, highest, 1.0), 0.0)
