"""Pay-as-bid for identical units: the highest bids win and each winner pays its own bid.

A winner could have kept its unit at just above the larger of the first rejected bid and the reserve, so its
gain and its price room are both ``1 - max(b_(k+1), reserve) / b_i`` [1]_.

.. [1] V. Krishna, *Auction Theory*, 2nd ed., Academic Press 2010, ch. 12 (the discriminatory auction). The
   rule is described there; the gain is derived in tests/test_mechanisms.py by search over deviations.
"""

from __future__ import annotations

from mechbench.contract import Floats, Functional, IdenticalUnits, InterimPrice, Mechanism, Outcome, Winners

__all__ = ["PayAsBid"]


class PayAsBid(Mechanism):
    """The highest bids at or above the reserve win; every winner pays what it bid."""

    name = "pay-as-bid"
    title = "each winner pays its own bid"
    serves = frozenset({IdenticalUnits.kind})

    def outcome(self, bids: Floats, supply: IdenticalUnits, coins: Floats | None = None) -> Outcome:  # noqa: ARG002
        """See the contract."""
        allocation, _ = supply.highest(bids)
        return Outcome(allocation, allocation * bids)

    def depth(self, supply: IdenticalUnits) -> int:
        """See the contract."""
        return supply.units + 1

    def gains(self, bids: Floats, supply: IdenticalUnits) -> Floats:
        """See the contract."""
        allocation, threshold = supply.highest(bids)
        paid = allocation * bids
        saved = allocation * (bids - threshold[:, None])
        saved[paid > 0] /= paid[paid > 0]
        return saved

    def least_payments(self, bids: Floats, supply: IdenticalUnits) -> Floats:
        """See the contract."""
        allocation, threshold = supply.highest(bids)
        return allocation * threshold[:, None]

    def functional(self, measure: str, supply: IdenticalUnits) -> Functional | InterimPrice | float | None:  # noqa: ARG002
        """See the contract."""
        return _FUNCTIONALS.get(measure)


def _room(winners: Winners) -> Floats:
    return winners.room


_BEST_ROOM = Functional("best", frozenset({"threshold", "winner"}), _room)
_BIDS = Functional("sum", frozenset({"winner"}), lambda winners: winners.winner)
_FUNCTIONALS: dict[str, Functional | InterimPrice] = {
    "worst_gain": _BEST_ROOM,
    "worst_room": _BEST_ROOM,
    "mean_gain": Functional("mean", frozenset({"threshold", "winner"}), _room),
    "interim_gain": InterimPrice(own=1.0),
    "price_spread": Functional("best", frozenset({"winner", "lowest"}), lambda winners: winners.spread),
    "revenue": _BIDS,
    "welfare": _BIDS,
    "shaded_revenue": Functional("sum", frozenset({"threshold"}), lambda winners: winners.threshold),
}
