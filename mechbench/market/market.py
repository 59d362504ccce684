"""One market of one size: the crowd, the supply, the reserve."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from mechbench.contract import IdenticalUnits, InputError

if TYPE_CHECKING:
    from mechbench.contract import Distribution

__all__ = ["Market"]

_LEAST_SALES = 1e-12
"""Fewest bids above the reserve, on average, that a market is measured with: below, nothing ever sells."""
_MONEY = (1e-150, 1e150)
"""Sums of money outside these leave the range of floating-point numbers when they are squared."""


@dataclass(frozen=True)
class Market:
    """Bidders with independent private values of one family, and what they compete for.

    Attributes
    ----------
    values : Distribution
        The family of every bidder's value.
    bidders : int
        How many bidders may turn up, n.
    supply : IdenticalUnits
        Units and reserve price; fewer units than bidders.
    turnout : float
        The chance with which each bidder, independently, turns up at all; above 0, at most 1.

    Raises
    ------
    InputError
        If there are fewer than two bidders, no fewer units than bidders, or no such chance; if hardly ever a
        bid reaches the reserve; or if the sums of money are too small or too large to compute with.
    """

    values: Distribution
    bidders: int
    supply: IdenticalUnits
    turnout: float = 1.0

    def __post_init__(self) -> None:
        if isinstance(self.bidders, bool) or not isinstance(self.bidders, int) or self.bidders < 2:  # noqa: PLR2004
            msg = f"bidders: count is {self.bidders!r}; accepted is a whole number of at least 2"
            raise InputError(msg)
        if self.supply.units >= self.bidders:
            msg = (
                f"supply: units is {self.supply.units} with {self.bidders} bidders; "
                f"accepted is fewer units than bidders (with enough for all, nobody competes)"
            )
            raise InputError(msg)
        if not 0 < self.turnout <= 1:
            msg = f"bidders: turnout is {self.turnout!r}; accepted is a chance above 0 and at most 1"
            raise InputError(msg)
        if self.supply.reserve >= self.values.support[1]:
            msg = (
                f"supply: reserve is {self.supply.reserve}, but no value exceeds {self.values.support[1]}: "
                f"nothing would ever sell; accepted is a reserve below the highest value"
            )
            raise InputError(msg)
        self._check_sales()
        self._check_money()

    def _check_sales(self) -> None:
        """Refuse a market in which no unit is ever sold: its measures, conditional on a sale, say nothing."""
        reserve = self.supply.reserve
        above = float(self.values.survival(np.array([reserve]))[0]) if reserve > 0 else 1.0
        bids = self.bidders * self.turnout * above
        if bids < _LEAST_SALES:
            told = f"reserve is {reserve} and turnout {self.turnout}"
            msg = (
                f"supply: {told}: about {bids:.1g} bids reach the reserve, so that nothing ever sells; "
                f"accepted is a reserve and a turnout that leave at least {_LEAST_SALES:g}"
            )
            raise InputError(msg)

    def _check_money(self) -> None:
        """Refuse values whose sums overflow or vanish: by the best of the crowd, and by a far better one still."""
        some = min(1.0, 1.0 / (self.bidders * self.turnout))
        with np.errstate(all="ignore"):
            usual, rare = self.values.upper_quantile(np.array([some, 1e-6 * some])) * float(self.supply.units)
        if not (usual <= _MONEY[1] and rare >= _MONEY[0]):
            size = "large" if rare >= _MONEY[0] else "small"
            msg = (
                f"values: too {size} to compute with ({self.supply.units} bidders at their best are worth about "
                f"{usual:.1g}); accepted are values that add up to between {_MONEY[0]:g} and {_MONEY[1]:g}"
            )
            raise InputError(msg)
