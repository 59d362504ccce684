"""What a computed measure is: a value that knows its error, its method and its standing."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

__all__ = ["MEASURES", "MONEY", "Estimate"]

MEASURES: dict[str, str] = {
    "worst_gain": "largest gain any bidder has from a false bid, in hindsight, as a share of value",
    "mean_gain": "that gain averaged over the winners",
    "gain_chance": "chance that somebody could gain more than the threshold",
    "interim_gain": "gain a winner can expect who knows the crowd but not the others' bids",
    "worst_room": "largest share of the payment a winner could have kept",
    "price_spread": "gap between the winners' highest and lowest unit price, over the highest",
    "revenue": "revenue if nobody shades",
    "shaded_revenue": "revenue if each winner, each alone, pays the least that keeps the unit",
    "welfare": "value of the units sold to those who get them",
    "efficiency": "welfare as a share of the most that the supply allows, reserve ignored",
    "units_unsold": "share of the supply left unsold",
    "no_sale": "chance that nothing is sold",
}
"""The measures and what each is in words."""

MONEY = frozenset({"revenue", "shaded_revenue", "welfare"})
"""Measures in currency: unconditional expectations; their exact error is asked for as a share."""


@dataclass(frozen=True)
class Estimate:
    """The value of one measure of one mechanism in one market.

    Attributes
    ----------
    value : float
        The number; ``inf`` or ``nan`` only with a status that says why.
    error : float
        An absolute bound for an exact value, a 95 % half-width for a simulated one.
    method : "exact" or "simulated"
    status : str
        ``"ok"``, or in a few words what is the matter: "infinite", "not converged", "lower bound", ...
    seed : int or None
        The seed of a simulated value.
    """

    value: float
    error: float
    method: Literal["exact", "simulated"]
    status: str = "ok"
    seed: int | None = None
