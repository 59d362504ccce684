"""Many sizes of one market at once: what the exact integrals need to know of the crowd."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from mechbench.contract import Distribution, Floats
from mechbench.engine.exact.order import OrderLaw, at_least_one
from mechbench.engine.exact.rules import EXPONENT
from mechbench.engine.exact.winners import Place
from mechbench.market.market import Market

__all__ = ["Sizes"]


@dataclass(frozen=True)
class Sizes:
    """Markets that differ in size alone, so that their integrals share every call.

    Attributes
    ----------
    values : Distribution
    turnout, reserve : float
    bidders, units : arrays (cells,)
    """

    values: Distribution
    turnout: float
    reserve: float
    bidders: Floats
    units: Floats

    @classmethod
    def of(cls, markets: Sequence[Market]) -> Sizes:
        """Gather markets of one family, turnout and reserve."""
        first = markets[0]
        return cls(
            first.values,
            first.turnout,
            first.supply.reserve,
            np.array([float(market.bidders) for market in markets]),
            np.array([float(market.supply.units) for market in markets]),
        )

    @cached_property
    def eligible(self) -> tuple[float, float]:
        """P(a bid is at least the reserve) among those who turn up, and its complement."""
        if self.reserve <= self.values.support[0]:
            return 1.0, 0.0
        reserve = np.array([self.reserve])
        return float(self.values.survival(reserve)[0]), float(self.values.cumulative(reserve)[0])

    @cached_property
    def chance(self) -> float:
        """P(a bidder turns up and bids at least the reserve)."""
        return self.turnout * self.eligible[0]

    @cached_property
    def chance_not(self) -> float:
        """The complement of `chance`, with its own digits."""
        return (1.0 - self.turnout) + self.turnout * self.eligible[1]

    @cached_property
    def floor(self) -> tuple[Place, float]:
        """The lowest bid that can win, and the reserve as a share of it (0 where there is no reserve)."""
        at, rest = self.eligible
        place = Place(self.values, np.array([at]), np.array([rest]))
        low = self.values.support[0]
        if self.reserve == 0:
            return place, 0.0
        return place, (self.reserve / low if self.reserve <= low else 1.0)

    @cached_property
    def knots(self) -> list[float]:
        """Tail probabilities of the family's knots above the reserve, rising."""
        return sorted(knot for knot in self.values.knots if knot < self.eligible[0])

    @cached_property
    def growth(self) -> float:
        """Power of 1/s as which the bids grow up the tail, as far as their mean reaches: at least the tail index.

        A lognormal law of large sigma has index 0, yet its mean may come from tail probabilities of 1e-50: the
        power is the one whose mean reaches as far.
        """
        index = max(self.values.tail_index, 0.0)
        if np.isfinite(self.values.support[1]) or index > 0:
            return index
        depth = np.concatenate([[0.0], np.geomspace(0.5, 690.0, 60)])
        mass = np.log(np.maximum(self.values.upper_quantile(np.exp(-depth)), 1e-300)) - depth
        reached = depth[np.flatnonzero(mass > mass.max() - EXPONENT)[-1]]
        return max(0.0, 1.0 - EXPONENT / float(reached))

    @cached_property
    def sale(self) -> Floats:
        """P(at least one unit is sold), array (cells,)."""
        if self.chance_not <= 0:
            return np.ones_like(self.bidders)
        return at_least_one(self.bidders, np.array(self.chance), np.array(self.chance_not))

    def law(self, rank: Floats) -> OrderLaw:
        """Law of the rank-th smallest tail probability of all who may turn up."""
        return OrderLaw(rank, self.bidders)

    def place(self, s: Floats, rest: Floats, to_floor: Floats | None = None) -> Place:
        """Place of a bid with tail probability `s` among all who may turn up.

        Parameters
        ----------
        s, rest : arrays
            The tail probability and its complement.
        to_floor : array, optional
            ``chance - s`` with its own digits, for places near the cut at the reserve.
        """
        if self.turnout == 1 and to_floor is None:
            return Place(self.values, s, rest)
        if to_floor is None:
            bottom = np.maximum(self.turnout - s, 0.0) / self.turnout
        else:
            bottom = self.eligible[1] + to_floor / self.turnout
        return Place(self.values, np.minimum(s / self.turnout, 1.0), np.minimum(bottom, 1.0))

    def some(self, cells: slice | NDArray[np.bool_]) -> Sizes:
        """Take some of the sizes."""
        return Sizes(self.values, self.turnout, self.reserve, self.bidders[cells], self.units[cells])
