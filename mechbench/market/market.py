"""One market of one size: the crowd, the supply, the reserve."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from mechbench.contract import IdenticalUnits, InputError

if TYPE_CHECKING:
    from mechbench.contract import Distribution

__all__ = ["Market"]


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
        If there are fewer than two bidders, no fewer units than bidders, or no such chance.
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
