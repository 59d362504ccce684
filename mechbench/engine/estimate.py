"""What a computed measure is: a value that knows its error, its method and its standing."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from mechbench.contract import MEASURES, MONEY

__all__ = ["MEASURES", "MONEY", "Estimate"]


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
