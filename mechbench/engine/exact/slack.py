"""Slack draws: at most as many bidders as there are units reach the reserve, and nobody who could win is rejected."""

from __future__ import annotations

from collections.abc import Iterator
from itertools import pairwise

import numpy as np

from mechbench.contract import Floats, Functional
from mechbench.engine.exact.above import exponential_nodes, fold, settle
from mechbench.engine.exact.order import binomial_at_most, binomial_between
from mechbench.engine.exact.resolution import NoRouteError, Resolution
from mechbench.engine.exact.rules import EXPONENT, FURTHEST, bound, finite, nested, settled
from mechbench.engine.exact.sizes import Sizes
from mechbench.engine.exact.winners import Place, Ranked

__all__ = ["SlackDraws", "slack_expectation"]


def slack_expectation(sizes: Sizes, functional: Functional, resolution: Resolution) -> tuple[Floats, Floats]:
    """Return the part of an expectation that slack draws make, and a bound on its error, arrays (cells,)."""
    over, uses = functional.over, functional.uses
    n, k, s, rest = sizes.bidders, sizes.units, sizes.chance, sizes.chance_not
    floor, share = sizes.floor
    if over == "sum" and uses == {"threshold"}:
        sold = n * s * binomial_at_most(k - 1, n - 1, np.array(s), np.array(rest))
        price = functional.amount(Ranked(floor, share))
        return sold * price, 1e-14 * sold * price
    if over in {"mean", "sum"} and uses <= {"threshold", "winner"} and "winner" in uses:
        growth = sizes.growth if over == "sum" else 0.0
        knots = [np.array([[np.log(floor.at[0] / knot)]]) for knot in sizes.knots[::-1]]
        ratio, weights = exponential_nodes(knots, resolution, growth)
        one = functional.amount(Ranked(floor, share, winner=ratio.ravel())) @ weights.reshape(-1, 3)
        many = (
            binomial_between(k, n, np.array(s), np.array(rest))
            if over == "mean"
            else n * s * binomial_at_most(k - 1, n - 1, np.array(s), np.array(rest))
        )
        return many * one[0], many * (bound(one, np.abs(one[0])) + 1e-14 * np.abs(one[0]))
    place = Place(sizes.values, floor.at[:, None], floor.rest[:, None])
    draws = SlackDraws(sizes, place, share, resolution)
    routes = {
        ("best", frozenset({"threshold", "winner"})): draws.best,
        ("lowest", frozenset({"threshold", "lowest"})): draws.lowest,
        ("sum", frozenset({"lowest"})): draws.sum_of_lowest,
        ("best", frozenset({"winner", "lowest"})): draws.best_and_lowest,
        ("mean", frozenset({"threshold", "winner", "lowest"})): draws.mean_with_lowest,
    }
    if (over, uses) not in routes:
        raise NoRouteError(functional)
    return routes[over, uses](functional)


class SlackDraws:
    """Integrals over the best or the lowest eligible bidder of a slack draw.

    With x the position of that bidder below the reserve (its tail probability over the reserve's), the variable is
    ``E = -n log(1 - chance * distance)``, distance x for the best and 1 - x for the lowest: then ``exp(-E) dE`` is the
    chance that one bidder sits there and nobody else further out, and what remains is a binomial count.
    """

    def __init__(self, sizes: Sizes, place: Place, share: float, resolution: Resolution) -> None:
        self.place, self.share, self.sizes, self.resolution = place, share, sizes, resolution
        self.n, self.k = sizes.bidders[:, None], sizes.units[:, None]
        self.chance, self.rest = sizes.chance, sizes.chance_not
        with np.errstate(divide="ignore"):
            log_none = np.log1p(-self.chance) if self.chance < 0.5 else np.log(self.rest)  # noqa: PLR2004
        self.end = -sizes.bidders * log_none
        self.start = np.zeros_like(self.end)
        self.stop = np.minimum(self.end, EXPONENT + 6.0)

    def _panels(self, knots_at: list[Floats], growth: float = 0.0) -> Iterator[tuple[Floats, Floats, Floats]]:
        """Exponential nodes, their distance to the end and nested weights, panel by panel between knots (cells,)."""
        edges = [self.start, *(np.clip(knot, self.start, self.stop) for knot in knots_at), self.stop]
        for left, right in pairwise(edges):
            from_left, from_right, weight = finite(left, right, self.resolution.slack, growth)
            at = left[:, None] + from_left
            to_end = (self.end - right)[:, None] + from_right
            yield at, to_end, nested(weight * np.exp(-at))

    def _total(self, amount: Floats, weights: Floats) -> tuple[Floats, Floats]:
        value, error = settled(amount, weights)
        return value, error + 1e-13 * np.abs(value)

    def best(self, functional: Functional) -> tuple[Floats, Floats]:
        """Return the best eligible bidder's amount and its error."""
        value, error = np.zeros_like(self.stop), np.zeros_like(self.stop)
        knots = [-self.sizes.bidders * np.log1p(-self.sizes.turnout * knot) for knot in self.sizes.knots]
        for exponent, _, weights in self._panels(knots):
            reached = -np.expm1(-exponent / self.n)
            ratio = np.log(self.chance / reached)
            left = np.exp(-exponent / self.n)
            others = binomial_at_most(
                self.k - 1, self.n - 1, np.maximum(self.chance - reached, 0.0) / left, self.rest / left
            )
            amount = functional.amount(Ranked(self.place, self.share, winner=np.maximum(ratio, 0.0)))
            more, more_error = self._total(amount * others, weights)
            value, error = value + more, error + more_error
        return value, error

    def _lowest_nodes(self, growth: float = 0.0) -> Iterator[tuple[Floats, Floats, Floats, Floats]]:
        """(log ratio up to the lowest, chance of another further up, its complement, nested weights)."""
        knots = [
            -self.sizes.bidders * np.log1p(-self.sizes.turnout * (self.sizes.eligible[0] - knot))
            for knot in reversed(self.sizes.knots)
        ]
        for exponent, to_end, weights in self._panels(knots, growth):
            outside = -np.expm1(-exponent / self.n)
            kept = np.exp(-exponent / self.n)
            inside = np.where(
                outside < 0.5 * self.chance,
                self.chance - outside,
                self.rest * np.expm1(np.minimum(to_end / self.n, 700.0)),
            )
            ratio = np.where(
                outside < 0.5 * self.chance,
                -np.log1p(-np.minimum(outside / self.chance, 0.5)),
                np.log(self.chance / np.maximum(inside, 1e-300)),
            )
            yield ratio, inside / kept, self.rest / kept, weights

    def lowest(self, functional: Functional) -> tuple[Floats, Floats]:
        """Return the lowest eligible bidder's amount and its error."""
        value, error = np.zeros_like(self.stop), np.zeros_like(self.stop)
        for ratio, more, less, weights in self._lowest_nodes():
            others = binomial_at_most(self.k - 1, self.n - 1, more, less)
            amount = functional.amount(Ranked(self.place, self.share, lowest=ratio))
            part, part_error = self._total(amount * others, weights)
            value, error = value + part, error + part_error
        return value, error

    def sum_of_lowest(self, functional: Functional) -> tuple[Floats, Floats]:
        """Return the number of winners times an amount of the lowest."""
        growth = self.sizes.growth
        value, error = np.zeros_like(self.stop), np.zeros_like(self.stop)
        for ratio, more, less, weights in self._lowest_nodes(growth):
            # contested draws here are those whose k-th bid is at least the reserve: at most k - 1 remain
            first = binomial_at_most(self.k - 2, self.n - 1, more, less)
            rest = (self.n - 1) * more * binomial_at_most(self.k - 3, self.n - 2, more, less)
            amount = functional.amount(Ranked(self.place, self.share, lowest=ratio))
            part, part_error = self._total(amount * (first + rest), weights)
            value, error = value + part, error + part_error
        # one winner alone may sit nearer the end than the grid goes
        unseen = np.exp(-(1.0 - growth) * np.pi * np.sinh(FURTHEST))
        return value, error + unseen * value

    def best_and_lowest(self, functional: Functional) -> tuple[Floats, Floats]:
        """Return an amount of the best and the lowest of at most k - 1 winners; one alone is both."""
        value, error = np.zeros_like(self.stop), np.zeros_like(self.stop)
        for to_lowest, more, less, weights in self._lowest_nodes():
            alone = binomial_at_most(np.minimum(0.0, self.k - 2), self.n - 1, more, less)
            amount = functional.amount(Ranked(self.place, self.share, lowest=to_lowest, winner=np.zeros(1)))
            part, part_error = self._total(amount * alone, weights)
            value, error = value + part, error + part_error
            log_none = np.log1p(-np.minimum(more, 1.0 - 1e-16))
            stop = np.minimum(-(self.n - 1) * log_none, EXPONENT + 6.0)
            exponent, _, panel = finite(np.zeros_like(stop), stop, self.resolution.slack)
            n, k = self.n[..., None], self.k[..., None]
            reached = -np.expm1(-exponent / (n - 1))
            left = np.exp(-exponent / (n - 1))
            ratio = np.maximum(np.log(more[..., None] / reached), 0.0)
            count = binomial_at_most(
                k - 3, n - 2, np.maximum(more[..., None] - reached, 0.0) / left, less[..., None] / left
            )
            deep = Place(self.place.values, self.place.at[..., None], self.place.rest[..., None])
            pair = functional.amount(Ranked(deep, self.share, lowest=to_lowest[..., None], winner=ratio))
            inner = nested(panel * np.exp(-exponent))
            part, part_error = settle(fold(pair * count, weights, inner))
            value, error = value + part, error + part_error
        return value, error

    def mean_with_lowest(self, functional: Functional) -> tuple[Floats, Floats]:
        """Mean over the winners of an amount that also looks at the lowest of them."""
        value, error = np.zeros_like(self.stop), np.zeros_like(self.stop)
        for to_lowest, more, less, weights in self._lowest_nodes():
            some = binomial_between(self.k, self.n, more, less) / (self.n * more)
            others = np.maximum(binomial_at_most(self.k - 1, self.n - 1, more, less) - some, 0.0)
            itself = functional.amount(Ranked(self.place, self.share, lowest=to_lowest))
            part, part_error = self._total(itself * some, weights)
            value, error = value + part, error + part_error
            knots = [(np.log(self.place.at / knot) - to_lowest)[..., None] for knot in reversed(self.sizes.knots)]
            to_other, inner = exponential_nodes([np.maximum(k, 0.0) for k in knots], self.resolution)
            deep = Place(self.place.values, self.place.at[..., None], self.place.rest[..., None])
            amount = functional.amount(Ranked(deep, self.share, lowest=to_lowest[..., None], winner=to_other))
            part, part_error = settle(fold(amount * others[..., None], weights, inner))
            value, error = value + part, error + part_error
        return value, error
