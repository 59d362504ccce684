"""Cells with a published or a closed-form value, for the simulation engine to find again.

Every value is checked against a second route, the simulation itself. There is no tolerance: the simulation's
own half-width is what is tested.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

from scipy.special import betaincinv


@dataclass(frozen=True)
class Cell:
    """A market of identical units, a measure of a mechanism in it, and its value with the source."""

    measure: str
    value: float
    source: str
    bidders: int
    units: int
    family: str = "uniform"
    settings: dict[str, float] = field(default_factory=dict)
    mechanism: str = "pay-as-bid"
    price_at: str | None = None
    reserve: float = 0.0
    threshold: float = 0.05
    error: float = 0.005


def _pareto_gain(units: int, xi: float) -> float:
    return 1.0 - math.exp(math.lgamma(1 + xi) + math.lgamma(units + 1) - math.lgamma(units + 1 + xi))


def _pareto_largest(bidders: int, xi: float) -> float:
    return math.exp(math.lgamma(bidders + 1) + math.lgamma(1 - xi) - math.lgamma(bidders + 1 - xi))


def _ratio_below(bidders: int, units: int, chance: float) -> float:
    """Find the gain that pay-as-bid exceeds with this chance, uniform values: b_(k+1)/b_(1) ~ Beta(n-k, k)."""
    return 1.0 - float(betaincinv(bidders - units, units, chance))


_UNIFORM = "derived: order statistics of uniforms, E[1 - b_(k+1)/b_(1)] = k/n"
_LAST = "derived: order statistics of uniforms, E[1 - b_(k+1)/b_(k)] = 1/(n-k+1)"
_PARETO = "derived: the ratio S_(1)/S_(k+1) is Beta(1, k), so 1 - E[ratio^xi] = 1 - G(1+xi) k!/G(k+1+xi)"
_BETA = "derived: for uniforms b_(k+1)/b_(1) is Beta(n-k, k)"
_INTERIM = (
    "derived from the best answer v(n-1)/n to truthful rivals (Vickrey 1961, section III, "
    "has it as the equilibrium): ((n-1)/n)^(n-1) / n"
)

CELLS = (
    Cell("worst_gain", 0.15, _UNIFORM, 20, 3),
    Cell("worst_gain", 0.5, _UNIFORM, 2, 1),
    Cell("worst_gain", 0.9, _UNIFORM, 10, 9),
    Cell("worst_gain", 1e-9, _UNIFORM, 10**12, 1000),
    Cell("worst_room", 0.15, _UNIFORM, 20, 3),
    Cell("worst_gain", 1 / 18, _LAST, 20, 3, mechanism="uniform-price", price_at="last-accepted"),
    Cell("worst_gain", 1e-3, _LAST, 1008, 9, mechanism="uniform-price", price_at="last-accepted"),
    Cell("worst_gain", _pareto_gain(3, 0.5), _PARETO, 50, 3, "pareto", {"tail_index": 0.5}),
    Cell("worst_gain", _pareto_gain(1, 2.0), _PARETO, 10**9, 1, "pareto", {"tail_index": 2.0}),
    Cell(
        "worst_gain",
        0.5 / 3.5,
        "derived: S_(k)/S_(k+1) is Beta(k, 1), so xi/(k+xi)",
        50,
        3,
        "pareto",
        {"tail_index": 0.5},
        mechanism="uniform-price",
        price_at="last-accepted",
    ),
    Cell("gain_chance", 0.3, _BETA, 20, 3, threshold=_ratio_below(20, 3, 0.3)),
    Cell("gain_chance", 0.02, _BETA, 40, 2, threshold=_ratio_below(40, 2, 0.02), error=0.003),
    Cell("gain_chance", 0.98, _BETA, 40, 2, threshold=_ratio_below(40, 2, 0.98), error=0.003),
    Cell(
        "revenue",
        5 / 12,
        "Myerson 1981; Krishna, Auction Theory, 2nd ed. 2010, ch. 2: two uniform bidders at the best reserve",
        2,
        1,
        mechanism="uniform-price",
        reserve=0.5,
    ),
    Cell(
        "revenue",
        sum(1 / i for i in range(1, 51)),
        "David & Nagaraja, Order Statistics, 3rd ed. 2003, ch. 2: exponential maxima (from memory)",
        50,
        1,
        "exponential",
    ),
    Cell("welfare", _pareto_largest(30, 0.2), "derived: E[S_(1)^(-xi)]", 30, 1, "pareto", {"tail_index": 0.2}),
    Cell("shaded_revenue", 3 * 17 / 21, "derived: E[b_(k+1)] = (n-k)/(n+1)", 20, 3),
    Cell("efficiency", 0.875, "derived: E[max; max >= 1/2] / E[max] = 1 - 1/8", 2, 1, reserve=0.5),
    Cell("no_sale", 0.25, "derived: both below 1/2", 2, 1, reserve=0.5),
    Cell("units_unsold", 0.5**4 + 0.5 * 4 * 0.5**4, "derived: the binomial count above 1/2", 4, 2, reserve=0.5),
    Cell("price_spread", 2 / 20, "derived: order statistics, E[1 - b_(k)/b_(1)] = (k-1)/n", 20, 3),
    Cell("interim_gain", 0.25, _INTERIM, 2, 1),
    Cell("interim_gain", 0.8**4 / 5, _INTERIM, 5, 1, error=0.003),
    Cell("interim_gain", 0.999**999 / 1000, _INTERIM, 1000, 1, error=0.002),
)
