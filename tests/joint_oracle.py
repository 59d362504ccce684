"""Every measure again, from the joint densities of order statistics, in extended precision.

Independent of the engine: the number m of bidders who turn up and bid at least the reserve is binomial, and given
it their tail probabilities are independent and uniform below the reserve's (H. A. David and H. N. Nagaraja, *Order
Statistics*, 3rd ed. 2003, sections 2.1-2.2: the joint densities of one, two and three of them). Sums over m are
taken term by term, integrals by one fixed tanh-sinh rule in each dimension over plain products of densities; no
exponential spacings, no binomial distribution functions, no family code. For few units: the cost grows with k.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from math import comb

import numpy as np
from numpy.typing import NDArray

Long = np.longdouble
Longs = NDArray[np.longdouble]
NONE, NO_END = Long(0), Long(np.inf)


@dataclass(frozen=True)
class Law:
    """A family by its formulas: quantile of (s, 1 - s), survival and cumulative of a value."""

    quantile: Callable[[Longs, Longs], Longs]
    survival: Callable[[Longs], Longs]
    cumulative: Callable[[Longs], Longs]
    low: Long = NONE
    high: Long = NO_END


def _log(s: Longs, rest: Longs) -> Longs:
    """Log of s, from the end that is near."""
    return np.where(s < 0.5, np.log(np.minimum(s, 0.5)), np.log1p(-np.minimum(rest, 0.5)))


def uniform(low: float, high: float) -> Law:
    """Law of the uniform family."""
    a, width = Long(low), Long(high) - Long(low)
    return Law(
        lambda _, rest: a + width * rest,
        lambda x: 1 - (x - a) / width,
        lambda x: (x - a) / width,
        a,
        Long(high),
    )


def power(exponent: float, high: float) -> Law:
    """Law of the power family."""
    a, top = Long(exponent), Long(high)
    return Law(
        lambda s, rest: top * np.exp(_log(rest, s) / a),
        lambda x: 1 - (x / top) ** a,
        lambda x: (x / top) ** a,
        high=top,
    )


def weibull(shape: float, scale: float) -> Law:
    """Law of the Weibull family."""
    a, b = Long(shape), Long(scale)
    return Law(
        lambda s, rest: b * (-_log(s, rest)) ** (1 / a),
        lambda x: np.exp(-((x / b) ** a)),
        lambda x: -np.expm1(-((x / b) ** a)),
    )


def exponential(scale: float) -> Law:
    """Law of the exponential family."""
    return weibull(1.0, scale)


def pareto(tail_index: float, scale: float) -> Law:
    """Law of the Pareto family."""
    xi, b = Long(tail_index), Long(scale)
    return Law(
        lambda s, rest: b * np.exp(-xi * _log(s, rest)),
        lambda x: (x / b) ** (-1 / xi),
        lambda x: -np.expm1(-np.log(x / b) / xi),
        b,
    )


def generalised_pareto(tail_index: float, scale: float) -> Law:
    """Law of the generalised Pareto family, tail index not 0."""
    xi, b = Long(tail_index), Long(scale)
    return Law(
        lambda s, rest: b / xi * np.expm1(-xi * _log(s, rest)),
        lambda x: np.maximum(1 + xi * x / b, 0) ** (-1 / xi),
        lambda x: -np.expm1(-np.log1p(xi * x / b) / xi),
        high=b / -xi if xi < 0 else Long(np.inf),
    )


def beta(a: float, b: float, high: float) -> Law:
    """Law of the beta family for a = 1, where it has a formula: ``P(value > x) = (1 - x)^b``."""
    assert a == 1
    power_of, top = Long(b), Long(high)
    return Law(
        lambda s, rest: -top * np.expm1(_log(s, rest) / power_of),
        lambda x: (1 - x / top) ** power_of,
        lambda x: 1 - (1 - x / top) ** power_of,
        high=top,
    )


FAMILIES: dict[str, Callable[..., Law]] = {
    "uniform": uniform,
    "power": power,
    "exponential": exponential,
    "weibull": weibull,
    "pareto": pareto,
    "generalised-pareto": generalised_pareto,
    "beta": beta,
}


def _rule(nodes: int) -> tuple[Longs, Longs, Longs]:
    """Tanh-sinh nodes on (0, 1): distance from either end, weight."""
    grid = np.linspace(Long(-5.4), Long(5.4), nodes)
    odds = np.exp(Long(np.pi) * np.sinh(grid))
    near, far = odds / (1 + odds), 1 / (1 + odds)
    return near, far, (grid[1] - grid[0]) * Long(np.pi) * np.cosh(grid) * near * far


class Joint:
    """The measures of one market, from joint densities.

    Parameters
    ----------
    law : Law
    bidders, units : int
    reserve, turnout : float
    nodes : int
        Of the rule in one and two dimensions; three dimensions take half as many in each.
    """

    def __init__(
        self, law: Law, bidders: int, units: int, reserve: float = 0.0, turnout: float = 1.0, nodes: int = 241
    ) -> None:
        self.law, self.n, self.k = law, bidders, units
        self.reserve, self.turnout, self.nodes = Long(reserve), Long(turnout), nodes
        below = self.reserve <= law.low
        self.reaches = Long(1) if below else law.survival(np.array([self.reserve]))[0]
        self.misses = Long(0) if below else law.cumulative(np.array([self.reserve]))[0]
        self.chance = self.turnout * self.reaches
        self.away = (1 - self.turnout) + self.turnout * self.misses

    def count(self, m: int) -> Long:
        """P(m bidders could win if there were room for all)."""
        return Long(comb(self.n, m)) * self.chance**m * self.away ** (self.n - m)

    @cached_property
    def sale(self) -> Long:
        """P(something is sold)."""
        if self.chance < 0.5:
            return -np.expm1(self.n * np.log1p(-self.chance))
        return 1 - self.away**self.n

    def bid(self, t: Longs, rest: Longs) -> Longs:
        """Bid whose tail probability is t times the reserve's, with ``rest = 1 - t``."""
        return self.law.quantile(self.reaches * t, self.misses + self.reaches * rest)

    def rank(self, j: int, t: Longs, rest: Longs) -> Longs:
        """Density of t where the j-th highest bid sits at t times the reserve's tail probability."""
        front = Long(comb(self.n, j) * j)
        return front * self.chance**j * t ** (j - 1) * (self.away + self.chance * rest) ** (self.n - j)

    # --- sums over the winners ---

    def welfare(self) -> Long:
        """Value of the units sold; what pay-as-bid earns."""
        t, rest, weight = _rule(self.nodes)
        others = sum(
            Long(comb(self.n - 1, j)) * (self.chance * t) ** j * (self.away + self.chance * rest) ** (self.n - 1 - j)
            for j in range(self.k)
        )
        return Long(self.n) * self.chance * (weight * others * self.bid(t, rest)).sum()

    def threshold_money(self) -> Long:
        """Units sold times the larger of the first rejected bid and the reserve."""
        t, rest, weight = _rule(self.nodes)
        full = self.k * (weight * self.rank(self.k + 1, t, rest) * self.bid(t, rest)).sum()
        return full + self.reserve * sum(m * self.count(m) for m in range(1, self.k + 1))

    def lowest_money(self) -> Long:
        """Units sold times the lowest accepted bid."""
        t, rest, weight = _rule(self.nodes)
        bid = self.bid(t, rest)
        full = self.k * (weight * self.rank(self.k, t, rest) * bid).sum()
        return full + sum(m * self.count(m) * (weight * m * t ** (m - 1) * bid).sum() for m in range(1, self.k))

    def unsold(self) -> Long:
        """Share of the units left."""
        return sum(((self.k - m) * self.count(m) for m in range(self.k)), Long(0)) / self.k

    # --- expectations given a sale ---

    def worst(self, *, best: bool) -> Long:
        """Mean room of the best winner, or of the lowest."""
        t, rest, weight = _rule(self.nodes)

        def density(m: int) -> Longs:
            return weight * m * (rest if best else t) ** (m - 1)

        total = Long(0)
        floor = self.bid(t, rest)
        for m in range(1, self.k + 1):
            total += self.count(m) * (density(m) * (1 - self.reserve / floor)).sum()
        outer = weight * self.rank(self.k + 1, t, rest)
        inside, gap = t[:, None] * t, rest[:, None] + t[:, None] * rest
        room = 1 - floor[:, None] / self.bid(inside, gap)
        return (total + outer @ (room @ density(self.k))) / self.sale

    def typical(self) -> Long:
        """Mean room of a winner taken at random."""
        t, rest, weight = _rule(self.nodes)
        floor = self.bid(t, rest)
        some = sum(self.count(m) for m in range(1, self.k + 1))
        total = some * (weight * (1 - self.reserve / floor)).sum()
        room = 1 - floor[:, None] / self.bid(t[:, None] * t, rest[:, None] + t[:, None] * rest)
        return (total + (weight * self.rank(self.k + 1, t, rest)) @ (room @ weight)) / self.sale

    def spread(self) -> Long:
        """Mean of 1 less the lowest winner over the best."""
        t, rest, weight = _rule(self.nodes)
        gap = 1 - self.bid(t, rest)[:, None] / self.bid(t[:, None] * t, rest[:, None] + t[:, None] * rest)
        total = Long(0)
        for m in range(2, self.k + 1):
            outer = self.rank(self.k, t, rest) if m == self.k else self.count(m) * m * t ** (m - 1)
            total += (weight * outer) @ (gap @ (weight * (m - 1) * rest ** (m - 2)))
        return total / self.sale

    def mean_under_lowest_price(self) -> Long:
        """Mean over the winners of (lowest winner - threshold) / winner."""
        t, rest, weight = _rule(self.nodes)
        lowest = self.bid(t, rest)
        over = lowest[:, None] / self.bid(t[:, None] * t, rest[:, None] + t[:, None] * rest)
        total = Long(0)
        for m in range(1, self.k + 1):
            share = (1 + (m - 1) * (over @ weight)) / m
            total += self.count(m) * (weight * m * t ** (m - 1) * (1 - self.reserve / lowest) * share).sum()
        return (total + self._contested_mean()) / self.sale

    def _contested_mean(self) -> Long:
        t, rest, weight = _rule(self.nodes // 2 | 1)
        outer = weight * self.rank(self.k + 1, t, rest)
        middle = weight * self.k * t ** (self.k - 1)
        total = Long(0)
        for at, gap, mass in zip(t, rest, outer, strict=True):
            lowest = self.bid(at * t, gap + at * rest)
            low, low_gap = (at * t)[:, None], (gap + at * rest)[:, None]
            over = lowest[:, None] / self.bid(low * t, low_gap + low * rest)
            room = 1 - self.bid(np.array([at]), np.array([gap])) / lowest
            total += mass * (middle * room * (1 + (self.k - 1) * (over @ weight)) / self.k).sum()
        return total

    def chance_above(self, level: float, *, best: bool) -> Long:
        """P(the room of the best, or of the lowest, winner exceeds `level`)."""
        keep = 1 - Long(level)

        def beyond(m: int, bid: Longs, at: Longs) -> Longs:
            needed = np.maximum(bid / keep, self.law.low)
            share = np.where(needed < self.law.high, self.law.survival(np.minimum(needed, self.law.high)), 0)
            share = np.clip(share / (self.reaches * at), 0, 1)
            return 1 - (1 - share) ** m if best else share**m

        one = np.ones(1, dtype=Long)
        total = sum(self.count(m) * beyond(m, self.reserve * one, one)[0] for m in range(1, self.k + 1))
        start = Long(0)
        if np.isfinite(self.law.high):  # no winner can be so high below this place
            start = np.minimum(self.law.survival(np.array([self.law.high * keep]))[0] / self.reaches, Long(1))
        near, far, weight = _rule(2 * self.nodes - 1)
        t, rest = start + (1 - start) * near, (1 - start) * far
        density = (1 - start) * weight * self.rank(self.k + 1, t, rest)
        return (total + (density * beyond(self.k, self.bid(t, rest), t)).sum()) / self.sale


def measure(joint: Joint, name: str, price: str, level: float) -> float | Long | None:
    """One measure under pay-as-bid (`price` "own"), or uniform price ("lowest" accepted or first "rejected")."""
    if name in {"welfare", "shaded_revenue", "revenue"}:
        money = {"own": joint.welfare, "lowest": joint.lowest_money, "rejected": joint.threshold_money}
        kind = {"welfare": "own", "shaded_revenue": "rejected", "revenue": price}[name]
        return money[kind]()
    if name == "efficiency":
        free = Joint(joint.law, joint.n, joint.k, 0.0, float(joint.turnout), joint.nodes)
        return joint.welfare() / free.welfare()
    if name == "units_unsold":
        return joint.unsold()
    if name == "no_sale":
        return joint.count(0)
    if price == "rejected":
        return 0.0
    routes: dict[str, Callable[[], Long]] = {
        "worst_gain": lambda: joint.worst(best=price == "own"),
        "worst_room": lambda: joint.worst(best=price == "own"),
        "mean_gain": joint.typical if price == "own" else joint.mean_under_lowest_price,
        "price_spread": joint.spread if price == "own" else lambda: Long(0),
        "gain_chance": lambda: joint.chance_above(level, best=price == "own"),
    }
    return routes[name]() if name in routes else None
