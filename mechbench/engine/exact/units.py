"""Expectations over the winners of identical units, by quadrature in tail coordinates.

Two kinds of draw are integrated apart, because the threshold jumps in kind between them:

* *contested*: the first rejected bid is at least the reserve. Given its tail probability s = S_(k+1) the k winners'
  are s times k independent uniforms [1]_, so that the best sits at ``s (1 - exp(-E / k))``, the lowest at
  ``s exp(-E / k)`` and a typical one at ``s exp(-E)`` with E a standard exponential. One fixed rule for E therefore
  serves every k, and one rule for the log-odds of s every n.
* *slack*: at most k bidders reach the reserve, so that nobody who could win is rejected. Their number is binomial,
  and given it their tail probabilities are uniform below the reserve's; the sums over the number are binomial
  distribution functions.

.. [1] H. A. David and H. N. Nagaraja, *Order Statistics*, 3rd ed., Wiley 2003, theorem 2.5 (Markov property; from
   memory, checked against simulation in tests/).
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import astuple, dataclass
from itertools import pairwise

import numpy as np

from mechbench.contract import Floats, Functional
from mechbench.engine.exact.order import binomial_at_most, binomial_between
from mechbench.engine.exact.rules import (
    EXPONENT,
    FURTHEST,
    bound,
    cut_off,
    decaying,
    finite,
    nested,
    settled,
    smooth,
    tame,
)
from mechbench.engine.exact.sizes import Sizes
from mechbench.engine.exact.winners import Place, Ranked

__all__ = ["LOOSE", "Contested", "NoRouteError", "Resolution", "SlackDraws", "contested_nodes", "expectation"]

LOOSE = 1e-6
"""Errors asked for from here on are met with fewer nodes and shorter searches."""
_PARTS = 3
"""Pieces of a panel at neither of whose ends the integrand dies off."""
_DEEPEST = 600.0
"""Log ratio of tail probabilities beyond which nothing is evaluated: they stay above 1e-300."""
_BLOCK = 1 << 15
"""Quadrature nodes evaluated at once: what a core's cache holds, so that many sizes cost no more each than one."""


class NoRouteError(ValueError):
    """The functional looks at a combination that has no exact integral here; simulate instead."""


@dataclass(frozen=True)
class Resolution:
    """How many nodes each rule gets; every number is 4 m + 1."""

    outer: int = 65
    cut: int = 129
    inner: int = 65
    slack: int = 129
    smooth: int = 33

    @classmethod
    def enough_for(cls, error: float) -> Resolution:
        """Where to start for an error that is asked for."""
        return cls() if error < LOOSE else cls(outer=33, cut=65, inner=33, slack=65, smooth=17)

    @property
    def loose(self) -> bool:
        """Whether this is where a loose error starts, and not a refinement."""
        return self.smooth < 33  # noqa: PLR2004

    def finer(self) -> Resolution:
        """Twice the nodes."""
        return Resolution(*(2 * nodes - 1 for nodes in astuple(self)))


@dataclass(frozen=True)
class Contested:
    """Outer nodes: where the rejected (or lowest accepted) bid sits, with three nested weights that hold its density.

    Attributes
    ----------
    place : Place
        Arrays (cells, nodes).
    weights : array (cells, nodes, 3)
    knots_below : tuple of float
        Tail probabilities, among those who turn up, of the family's knots above this bid.
    """

    place: Place
    weights: Floats
    knots_below: tuple[float, ...]

    def block(self, cells: slice, nodes: slice) -> Contested:
        """Take some of the cells and nodes."""
        place = self.place
        part = Place(place.values, place.at[cells, nodes], place.rest[cells, nodes])
        return Contested(part, self.weights[cells, nodes], self.knots_below)


def contested_nodes(
    sizes: Sizes,
    rank: Floats,
    growth: float,
    resolution: Resolution,
    start: Floats | None = None,
    breaks: Sequence[Floats] = (),
) -> Iterator[Contested]:
    """Outer nodes for the rank-th highest bid where it is at least the reserve, panel by panel.

    With `start`, log-odds (cells,), only bids at or below that place are integrated over; `breaks` are further
    log-odds (cells,) at which the integrand is not smooth. With either, `knots_below` is not told.
    """
    law = sizes.law(rank)
    lo, hi = law.reach_below(growth, sizes.chance, sizes.chance_not)
    cut = law.log_odds(sizes.chance, sizes.chance_not)
    knots = sizes.knots
    told = start is None and not breaks
    if start is not None:
        lo = np.clip(start, lo, hi)
    elif told and not knots and (cut >= hi).all():
        y, weight = tame(lo, hi, law.slow_tail, resolution.outer)
        s, rest, density = law.at(y)
        yield Contested(sizes.place(s, rest, None), nested(weight * density), ())
        return
    stop = np.minimum(hi, cut)
    edges = [lo]
    for knot in knots:
        at = sizes.turnout * knot
        edges.append(np.clip(law.log_odds(at, 1.0 - at), lo, np.maximum(stop, lo)))
    edges += [np.clip(place, lo, np.maximum(stop, lo)) for place in breaks]
    edges = [*np.sort(np.stack(edges), axis=0), np.maximum(stop, lo)]
    for panel, (left, right) in enumerate(pairwise(edges)):
        if (right <= left).all():
            continue
        dies_left = start is None and bool((left <= lo).all())
        dies_right = bool((right >= hi).all())
        parts = _PARTS if panel == len(edges) - 2 or len(edges) <= _PARTS + 1 else 1
        # y = sinh t shortens the long exponential tails; the distance to the right end keeps its digits
        end = np.arcsinh(right)
        for from_hi, weights in _panel_rules(
            np.arcsinh(left), end, law.width, resolution, dies=(dies_left, dies_right), parts=parts
        ):
            t = end[:, None] - from_hi
            s, rest, density = law.at(np.sinh(t))
            density = density * np.cosh(t) * (right > left)[:, None]
            to_floor = None
            if sizes.chance_not > 0 and panel == len(edges) - 2:
                to_end = 2.0 * np.cosh(end[:, None] - 0.5 * from_hi) * np.sinh(0.5 * from_hi)
                to_cut = np.minimum((cut - right)[:, None] + to_end, 700.0)
                to_floor = sizes.chance * rest * -np.expm1(-to_cut)
            place = sizes.place(s, rest, to_floor)
            yield Contested(place, weights * density[..., None], tuple(knots[:panel]) if told else ())


def _panel_rules(
    begin: Floats, end: Floats, width: Floats, resolution: Resolution, *, dies: tuple[bool, bool], parts: int
) -> Iterator[tuple[Floats, Floats]]:
    """Distances of nodes below the end of one panel, with nested weights, for how the integrand goes at its ends.

    Where it dies off at neither, the panel is cut in parts, the last of which may end in any way.
    """
    if dies[0]:
        from_end, weight = cut_off(begin, end, width, resolution.cut)
        yield from_end, nested(weight)
    elif dies[1]:
        from_begin, weight = cut_off(begin, end, width, resolution.cut)
        yield (end - begin)[:, None] - from_begin, nested(weight)
    else:
        step = (end - begin) / parts
        for part in range(1, max(parts, 2)):
            left = begin + (part - 1) * step
            _, from_end, weights = smooth(left, left + step, resolution.smooth)
            yield from_end + (end - left - step)[:, None], weights
        if parts > 1:
            # perhaps the cut, where bids may fall to 0 like a power
            _, from_end, weight = finite(end - step, end, resolution.cut)
            yield from_end, nested(weight)


def expectation(sizes: Sizes, functional: Functional, resolution: Resolution) -> tuple[Floats, Floats]:
    """Unconditional expectation of a functional and a bound on its error, arrays (cells,).

    Raises
    ------
    NoRouteError
        If there is no exact integral for what the functional looks at.
    """
    value, error = _contested(sizes, functional, resolution)
    if sizes.chance < 1.0:
        more, more_error = _slack(sizes, functional, resolution)
        value, error = value + more, error + more_error
        # the cut at the reserve is known to the last digit of its tail probability, no better
        law = sizes.law(sizes.units + 1.0)
        steepness = np.sqrt(law.rank * law.above / sizes.bidders)
        error = error + 2e-16 * steepness * value
    return value, error


# --- contested draws ---------------------------------------------------------------------------------------


def _contested(sizes: Sizes, functional: Functional, resolution: Resolution) -> tuple[Floats, Floats]:
    uses, units = functional.uses, sizes.units
    rank = units + 1.0 if "threshold" in uses or "lowest" not in uses else units
    growth = sizes.growth if functional.over == "sum" else 0.0
    value, error = np.zeros_like(units), np.zeros_like(units)
    for nodes in contested_nodes(sizes, rank, growth, resolution):
        outer = nodes.place.at.shape[1]
        inner = _inner_size(functional, nodes, resolution)
        some_cells = max(1, _BLOCK // (outer * inner))
        some_nodes = max(1, _BLOCK // inner)
        for cell in range(0, units.size, some_cells):
            cells = slice(cell, cell + some_cells)
            sums = sum(
                _inner(sizes.some(cells), functional, nodes.block(cells, slice(at, at + some_nodes)), resolution)
                for at in range(0, outer, some_nodes)
            )
            more, more_error = _settle(np.asarray(sums))
            value[cells] += more
            error[cells] += more_error
    return value, error


def _inner_size(functional: Functional, nodes: Contested, resolution: Resolution) -> int:
    panels = 1 + len(nodes.knots_below)
    dimensions = max(0, len(functional.uses) - 1)
    if "winner" in functional.uses and len(functional.uses) == 1:
        dimensions = 1
    return int((resolution.inner if panels == 1 else resolution.inner + panels * resolution.smooth) ** dimensions)


def _inner(sizes: Sizes, functional: Functional, nodes: Contested, resolution: Resolution) -> Floats:
    """Sum over one block of outer nodes; returns the columns of `_fold`."""
    over, uses, units = functional.over, functional.uses, sizes.units[:, None, None]
    place = Place(sizes.values, nodes.place.at[..., None], nodes.place.rest[..., None])
    if over == "sum" and uses in ({"threshold"}, {"lowest"}):
        amount = functional.amount(Ranked(place, 1.0))[..., 0]
        return _fold(sizes.units[:, None] * amount, nodes.weights)
    if over == "lowest" and uses == {"threshold", "lowest"}:
        ratio, weights = _typical(nodes, units, resolution)
        return _fold(functional.amount(Ranked(place, 1.0, lowest=ratio)), nodes.weights, weights)
    if over == "best" and uses == {"threshold", "winner"}:
        ratio, weights = _best(nodes, units, resolution)
        return _fold(functional.amount(Ranked(place, 1.0, winner=ratio)), nodes.weights, weights)
    if over == "best" and uses == {"winner", "lowest"}:
        ratio, weights = _best(nodes, np.maximum(units - 1.0, 1.0), resolution)
        amount = functional.amount(Ranked(place, 1.0, winner=ratio)) * (units > 1.0)
        return _fold(amount, nodes.weights, weights)
    if over in {"mean", "sum"} and uses <= {"threshold", "winner"} and "winner" in uses:
        growth = sizes.growth if over == "sum" else 0.0
        ratio, weights = _typical(nodes, np.ones((1, 1, 1)), resolution, growth)
        amount = functional.amount(Ranked(place, 1.0, winner=ratio))
        return _fold(amount * units if over == "sum" else amount, nodes.weights, weights)
    if over == "mean" and uses == {"threshold", "winner", "lowest"}:
        return _mean_with_lowest(sizes, functional, nodes, resolution)
    raise NoRouteError(_no_route(functional))


def _no_route(functional: Functional) -> str:
    return f"no exact integral over {functional.over} of what uses {', '.join(sorted(functional.uses))}"


def _mean_with_lowest(sizes: Sizes, functional: Functional, nodes: Contested, resolution: Resolution) -> Floats:
    """Mean over the winners of an amount that also looks at the lowest of them: three dimensions."""
    units = sizes.units[:, None, None]
    place = Place(sizes.values, nodes.place.at[..., None], nodes.place.rest[..., None])
    to_lowest, weights = _typical(nodes, units, resolution)
    itself = functional.amount(Ranked(place, 1.0, lowest=to_lowest)) / units
    sums = _fold(itself, nodes.weights, weights)
    if (sizes.units > 1.0).any():
        lowest = place.up(to_lowest)
        below = Contested(lowest, nodes.weights, nodes.knots_below)
        to_other, other_weights = _typical(below, np.ones((1, 1, 1, 1)), resolution)
        deep = Place(sizes.values, place.at[..., None], place.rest[..., None])
        ranked = Ranked(deep, 1.0, lowest=to_lowest[..., None], winner=to_other)
        others = functional.amount(ranked) * ((units - 1.0) / units)[..., None]
        sums = sums + _fold(others, nodes.weights, weights, other_weights)
    return sums


def _typical(nodes: Contested, units: Floats, resolution: Resolution, growth: float = 0.0) -> tuple[Floats, Floats]:
    """Log ratios from a bid up to the lowest of `units` winners above it (to a typical one for 1), with weights.

    With ``growth`` the amount grows like ``exp(growth * E)``, so the rule is stretched to see its whole mass.
    """
    knots = [np.log(nodes.place.at / knot)[..., None] * units for knot in reversed(nodes.knots_below)]
    exponential, weights = _exponential(knots, resolution, growth)
    return exponential / units, weights


def _best(nodes: Contested, units: Floats, resolution: Resolution) -> tuple[Floats, Floats]:
    """Log ratios from a bid up to the best of `units` winners above it, with weights."""
    knots = [
        -units * np.log1p(-np.minimum(knot / nodes.place.at, 1.0 - 1e-16))[..., None] for knot in nodes.knots_below
    ]
    exponential, weights = _exponential(knots, resolution, deep_first=True)
    return -np.log(-np.expm1(-exponential / units)), weights


def _exponential(
    breaks: list[Floats], resolution: Resolution, growth: float = 0.0, *, deep_first: bool = False
) -> tuple[Floats, Floats]:
    """Nodes and nested weights for the mean over a standard exponential, split at rising breaks (..., 1).

    With `deep_first` the far end of the tail is at E = 0 and the function may be singular there.
    """
    nodes, weight = _growing(resolution, growth) if growth > 0 else decaying(resolution.inner)
    if not breaks:
        return nodes, weight
    limit = min(EXPONENT / (1.0 - growth), _DEEPEST)
    pieces, weights = [], []
    left = np.zeros_like(breaks[0][..., 0])
    for piece, stop in enumerate(breaks):
        right = np.clip(stop[..., 0], left, limit)
        if deep_first and piece == 0:
            from_left, _, weight_here = finite(left, right, resolution.cut)
            rule = nested(weight_here)
        else:
            from_left, _, rule = smooth(left, right, resolution.smooth)
        at = left[..., None] + from_left
        pieces.append(at)
        weights.append(rule * np.exp(-at)[..., None])
        left = right
    pieces.append(left[..., None] + nodes)
    weights.append(np.exp(-left)[..., None, None] * weight)
    return np.concatenate(pieces, axis=-1), np.concatenate(weights, axis=-2)


def _growing(resolution: Resolution, growth: float) -> tuple[Floats, Floats]:
    """Nodes and nested weights for the mean over a standard exponential of what grows like ``exp(growth * E)``.

    The rule is stretched to see the whole mass. Where that would leave the floats, it stops at `_DEEPEST` and a
    last node stands for the power tail beyond, whose mean is its edge's over ``1 - growth``.
    """
    stretch = 1.0 / (1.0 - growth)
    nodes, weight = decaying(resolution.inner)
    if stretch * float(nodes[-1]) < _DEEPEST:
        return nodes * stretch, weight * (np.exp(-nodes * stretch * growth) * stretch)[:, None]
    from_zero, _, weight = finite(np.zeros(1), np.full(1, _DEEPEST), resolution.cut)
    rule = nested(weight[0] * np.exp(-from_zero[0]))
    return np.append(from_zero[0], _DEEPEST), np.vstack([rule, np.full(3, np.exp(-_DEEPEST) * stretch)])


def _fold(amount: Floats, outer: Floats, *inner: Floats) -> Floats:
    """Weighted sums of an amount (cells, outer nodes, inner nodes ...) under the nested rules.

    Returns
    -------
    array (cells, 9)
        The full sum, then the sums with steps 2 h and 4 h: for the outer rule alone, for each of up to two
        inner rules alone, and for all rules together (their errors can hide behind one another).
    """
    columns = np.empty((amount.shape[0], 9))
    levels = [amount, amount, amount]
    for depth, weights in reversed(list(enumerate(inner))):
        folded = _apply(levels[0], weights)
        for step in (1, 2):
            alone = folded[..., step]
            for shallower in reversed(inner[:depth]):
                alone = _apply(alone, shallower)[..., 0]
            columns[:, 2 + 2 * depth + step] = _apply_outer(alone, outer)[:, 0]
        together = (
            [_apply(levels[step], weights)[..., step] for step in (1, 2)]
            if depth < len(inner) - 1
            else [folded[..., 1], folded[..., 2]]
        )
        levels = [folded[..., 0], *together]
    columns[:, :3] = _apply_outer(levels[0], outer)
    columns[:, 7] = _apply_outer(levels[1], outer)[:, 1]
    columns[:, 8] = _apply_outer(levels[2], outer)[:, 2]
    columns[:, 3 + 2 * len(inner) : 7] = columns[:, :1]
    return columns


def _settle(sums: Floats) -> tuple[Floats, Floats]:
    """Value and error bound from the columns of `_fold`."""
    full = sums[:, :1]
    rules = np.stack([np.broadcast_to(full, (full.size, 4)), sums[:, 1::2], sums[:, 2::2]], axis=-1)
    return sums[:, 0], bound(rules, 0.25 * np.abs(full)).sum(axis=1)


def _apply(amount: Floats, weights: Floats) -> Floats:
    """Sum the last axis under nested weights (nodes, 3) or (..., nodes, 3)."""
    if weights.ndim == 2:  # noqa: PLR2004
        return amount @ weights
    summed: Floats = np.einsum("...n,...nr->...r", amount, weights)
    return summed


def _apply_outer(amount: Floats, outer: Floats) -> Floats:
    return (amount[:, None, :] @ outer)[:, 0, :]


# --- slack draws: at most `units` bidders reach the reserve -------------------------------------------------


def _slack(sizes: Sizes, functional: Functional, resolution: Resolution) -> tuple[Floats, Floats]:
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
        ratio, weights = _exponential(knots, resolution, growth)
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
        raise NoRouteError(_no_route(functional))
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
            part, part_error = _settle(_fold(pair * count, weights, inner))
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
            to_other, inner = _exponential([np.maximum(k, 0.0) for k in knots], self.resolution)
            deep = Place(self.place.values, self.place.at[..., None], self.place.rest[..., None])
            amount = functional.amount(Ranked(deep, self.share, lowest=to_lowest[..., None], winner=to_other))
            part, part_error = _settle(_fold(amount * others[..., None], weights, inner))
            value, error = value + part, error + part_error
        return value, error
