"""Uniform price for identical units: the highest bids win and all pay one price.

At the *first rejected* bid (or the reserve, if that is higher) no bidder for a single unit can gain: the price
does not depend on the winner's bid [1]_. At the *last accepted* bid the lowest winner sets the price, and any
winner may become the lowest by dropping to just above ``t = max(b_(k+1), reserve)``; winner i then gains
``(b_(k) - t) / b_i``, the most for the lowest winner itself. Where fewer than k bidders win, the price is the
lowest accepted bid.

.. [1] W. Vickrey, "Counterspeculation, auctions, and competitive sealed tenders", *Journal of Finance* 16
   (1961), 8-37, section IV (several identical units, one to a bidder).
"""

from __future__ import annotations

import numpy as np

from mechbench.contract import (
    Floats,
    Functional,
    IdenticalUnits,
    InterimPrice,
    Mechanism,
    Outcome,
    Parameter,
    Winners,
)

__all__ = ["UniformPrice"]


class UniformPrice(Mechanism):
    """The highest bids at or above the reserve win; every winner pays the same price."""

    name = "uniform-price"
    title = "all winners pay one price"
    serves = frozenset({IdenticalUnits.kind})
    parameters = (
        Parameter(
            "price_at",
            "the bid that sets the price",
            choices=("first-rejected", "last-accepted"),
            typical=("first-rejected", "last-accepted"),
            default="first-rejected",
        ),
    )

    def outcome(self, bids: Floats, supply: IdenticalUnits, coins: Floats | None = None) -> Outcome:  # noqa: ARG002
        """See the contract."""
        allocation, threshold = supply.highest(bids)
        price = threshold if self._rejected_sets_price else _lowest(allocation, bids)
        return Outcome(allocation, allocation * price[:, None])

    def depth(self, supply: IdenticalUnits) -> int:
        """See the contract."""
        return supply.units + 1

    def gains(self, bids: Floats, supply: IdenticalUnits) -> Floats:
        """See the contract."""
        allocation, threshold = supply.highest(bids)
        if self._rejected_sets_price:
            return np.zeros_like(allocation)
        saved = allocation * (_lowest(allocation, bids) - threshold)[:, None]
        won = allocation > 0
        saved[won] /= bids[won]
        return saved

    def least_payments(self, bids: Floats, supply: IdenticalUnits) -> Floats:
        """See the contract."""
        allocation, threshold = supply.highest(bids)
        return allocation * threshold[:, None]

    def functional(self, measure: str, supply: IdenticalUnits) -> Functional | InterimPrice | float | None:  # noqa: ARG002
        """See the contract."""
        table = _FIRST_REJECTED if self._rejected_sets_price else _LAST_ACCEPTED
        return table.get(measure)

    @property
    def _rejected_sets_price(self) -> bool:
        return self.settings["price_at"] == "first-rejected"


def _lowest(allocation: Floats, bids: Floats) -> Floats:
    """Lowest accepted bid of each draw, array (draws,); 0 where nothing is sold."""
    accepted = np.where(allocation > 0, bids, np.inf).min(axis=1)
    return np.where(np.isfinite(accepted), accepted, 0.0)


def _lowest_room(winners: Winners) -> Floats:
    return winners.lowest_room


def _share_of_own_bid(winners: Winners) -> Floats:
    return winners.lowest_room * (1.0 - winners.spread)


_WELFARE = Functional("sum", frozenset({"winner"}), lambda winners: winners.winner)
_THRESHOLD = Functional("sum", frozenset({"threshold"}), lambda winners: winners.threshold)
_LOWEST_ROOM = Functional("lowest", frozenset({"threshold", "lowest"}), _lowest_room)
_LAST_ACCEPTED: dict[str, Functional | InterimPrice | float] = {
    "worst_gain": _LOWEST_ROOM,
    "worst_room": _LOWEST_ROOM,
    "mean_gain": Functional("mean", frozenset({"threshold", "winner", "lowest"}), _share_of_own_bid),
    "interim_gain": InterimPrice(lowest=1.0),
    "price_spread": 0.0,
    "revenue": Functional("sum", frozenset({"lowest"}), lambda winners: winners.lowest),
    "shaded_revenue": _THRESHOLD,
    "welfare": _WELFARE,
}
_FIRST_REJECTED: dict[str, Functional | InterimPrice | float] = {
    "worst_gain": 0.0,
    "worst_room": 0.0,
    "mean_gain": 0.0,
    "gain_chance": 0.0,
    "interim_gain": 0.0,
    "price_spread": 0.0,
    "revenue": _THRESHOLD,
    "shaded_revenue": _THRESHOLD,
    "welfare": _WELFARE,
}
