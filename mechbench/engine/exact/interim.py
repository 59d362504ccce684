"""Interim gain: what a bidder can expect who knows the crowd but not the rivals' bids.

A report b wins with chance ``G(b)``, that at most k - 1 of the n - 1 rivals bid more. Where the unit price is a
weighted mean of the own bid (weight own), the lowest accepted bid (weight lowest) and the first rejected one,
the expected gain from reporting b < v is, by parts,

    (v - b) G(b) - integral from b to v of W(x) dx,    W = (1 - own) G - lowest H,

with ``H(x)`` the chance that a report x wins and is the lowest winner. The measure is the integral over a bidder's
value of ``max_b gain(v, b) / v``, over the integral of ``G(v)``: the mean over truthful wins. The derivation is
checked in tests/ against simulation and, for one unit and uniform values, against the best response
``b = v (n - 1) / n`` (Krishna, *Auction Theory*, 2nd ed. 2010, section 2.3).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from mechbench.contract import Floats, InterimPrice
from mechbench.engine.exact.order import OrderLaw, binomial_at_most
from mechbench.engine.exact.resolution import LOOSE
from mechbench.engine.exact.sizes import Sizes
from mechbench.engine.exact.winners import Place

__all__ = ["interim_gain"]

_ORDER = 8
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(_ORDER)
_DEEP = np.interp(
    np.arange(0.0, 32.25, 0.25), np.arange(0.0, 36.0, 4.0), [0.0, 2.0, 4.0, 7.0, 11.0, 16.0, 22.0, 29.0, 36.0]
)
"""Panel edges below the bump of the law, where the win is certain: the weight falls like ``exp(-distance)``."""
_HALVINGS = 40
_MOST_PANELS = 2000
"""Panels open at once beyond which halving them further is given up: the error says so."""
_ROUNDING = 1e-13
_GOLDEN = 0.5 * (np.sqrt(5.0) - 1.0)


def interim_gain(sizes: Sizes, price: InterimPrice, error: float) -> tuple[Floats, Floats]:
    """Interim gain and a bound on its error, arrays (cells,).

    The integral over values runs on panels that are halved where they have not settled, because the best report
    may jump from one place to another as the value rises; all is done on two grids of reports.
    """
    pairs = [_one_size(sizes.some(slice(cell, cell + 1)), price, error) for cell in range(sizes.units.size)]
    return np.array([value for value, _ in pairs]), np.array([bound for _, bound in pairs])


def _one_size(sizes: Sizes, price: InterimPrice, error: float) -> tuple[float, float]:
    winners = float(_expected_winners(sizes)[0] / sizes.bidders[0])
    goal = 0.1 * error * winners
    loose = error >= LOOSE
    first = 6 if loose else 12
    coarse, _ = _gained(_grid(sizes, price, first, 12 if loose else 34), sizes, price, goal)
    for panels in (2 * first, 4 * first, 8 * first):
        fine, unsettled = _gained(
            _grid(sizes, price, panels, 12 if loose and panels == 2 * first else 34), sizes, price, goal
        )
        # halving stops at the goal, so errors well below it are not vouched for
        bound = (abs(fine - coarse) + max(unsettled, 0.1 * goal) + 1e-13 * fine) / winners
        if bound <= error:
            break
        coarse = fine
    return fine / winners, bound


def _expected_winners(sizes: Sizes) -> Floats:
    """Return the expected number of units sold as a sum of positive terms: up to k bids reach the reserve, or more."""
    chance, rest = np.array(sizes.chance), np.array(sizes.chance_not)
    few = sizes.bidders * chance * binomial_at_most(sizes.units - 1, sizes.bidders - 1, chance, rest)
    # more than k reach it when at most n - k - 1 do not
    many = binomial_at_most(sizes.bidders - sizes.units - 1, sizes.bidders, rest, chance)
    winners: Floats = few + sizes.units * many
    return winners


@dataclass(frozen=True)
class _Reports:
    """Possible reports on a grid of Gauss panels in the log-odds of their tail probability, rising.

    Attributes
    ----------
    edges : array (panels + 1,)
    y, s, place : the nodes, flat
    wins : array (nodes,)
        G.
    slope : array (nodes,)
        W times the report's slope over the log-odds.
    steps : int
        Golden-section steps towards the best report.
    """

    law: OrderLaw
    edges: Floats
    y: Floats
    s: Floats
    place: Place
    wins: Floats
    slope: Floats
    steps: int

    @cached_property
    def antiderivative(self) -> Floats:
        """Legendre coefficients of the integral of W from each panel's left end, array (panels, order + 1)."""
        table = self.slope.reshape(-1, _ORDER)
        basis = np.polynomial.legendre.legvander(_NODES, _ORDER - 1)
        coefficients = ((table * _WEIGHTS) @ basis) * (np.arange(_ORDER) + 0.5)
        integral: Floats = np.polynomial.legendre.legint(coefficients, lbnd=-1, axis=1).astype(np.float64)
        return integral

    @cached_property
    def from_panel(self) -> Floats:
        """Integral of W from the lowest report up to each panel's left end, array (panels,)."""
        whole = 0.5 * np.diff(self.edges) * (self.slope.reshape(-1, _ORDER) @ _WEIGHTS)
        summed: Floats = np.cumsum(whole[::-1])[::-1]
        return summed

    @cached_property
    def saved(self) -> Floats:
        """Integral of W from the lowest report to each node's, in currency."""
        return _saved_at(self, self.y)


def _gained(grid: _Reports, sizes: Sizes, price: InterimPrice, goal: float) -> tuple[float, float]:
    """Integral over a bidder's tail probability of its best interim gain over its value, and its own error."""
    left, right = grid.edges[:-1], grid.edges[1:]
    whole = _panels(grid, sizes, price, left, right)
    done, error = 0.0, 0.0
    for _ in range(_HALVINGS):
        middle = 0.5 * (left + right)
        lower, upper = _panels(grid, sizes, price, left, middle), _panels(grid, sizes, price, middle, right)
        gap = np.abs(lower + upper - whole)
        # a gap of a few roundings will not close
        settled = gap <= np.maximum(goal / grid.edges.size, _ROUNDING * np.abs(whole))
        done += float((lower + upper)[settled].sum())
        error += float(gap[settled].sum())
        if settled.all():
            return done, error
        open_ = ~settled
        left = np.concatenate([left[open_], middle[open_]])
        right = np.concatenate([middle[open_], right[open_]])
        whole = np.concatenate([lower[open_], upper[open_]])
        if left.size > _MOST_PANELS:
            break
    return done + float(whole.sum()), error + float(gap[open_].sum())


def _panels(grid: _Reports, sizes: Sizes, price: InterimPrice, left: Floats, right: Floats) -> Floats:
    """Integral of the best gain over each panel of values, array (panels,)."""
    half = 0.5 * (right - left)
    values = _Values.at(grid, sizes, price, (left[:, None] + half[:, None] * (1.0 + _NODES)).ravel())
    best = np.empty_like(values.y)
    for start in range(0, values.y.size, 512):
        rows = values.rows(slice(start, start + 512))
        best[start : start + 512] = _best_gain(grid, sizes, price, rows)
    return half * ((best * values.density).reshape(-1, _ORDER) @ _WEIGHTS)


@dataclass(frozen=True)
class _Values:
    """A bidder's values: log-odds, tail probability, its density over log-odds, the bid, and `saved`."""

    y: Floats
    s: Floats
    density: Floats
    place: Place
    saved: Floats

    @classmethod
    def at(cls, grid: _Reports, sizes: Sizes, price: InterimPrice, y: Floats) -> _Values:
        s, rest, place = _place(sizes, grid.law, y)
        saved = _saved_at(grid, y) if price.own != 1.0 else np.zeros_like(y)
        return cls(y, s, s * rest, place, saved)

    def rows(self, some: slice) -> _Values:
        place = Place(self.place.values, self.place.at[some], self.place.rest[some])
        return _Values(self.y[some], self.s[some], self.density[some], place, self.saved[some])

    @cached_property
    def worth(self) -> Floats:
        bid = self.place.bid
        return np.where(bid > 0, bid, 1.0)


def _place(sizes: Sizes, law: OrderLaw, y: Floats) -> tuple[Floats, Floats, Place]:
    s, rest, _ = law.at(y[None, :])
    to_floor = None
    if sizes.chance_not > 0:
        cut = law.log_odds(sizes.chance, sizes.chance_not)[0]
        to_floor = (sizes.chance * rest * -np.expm1(np.minimum(y[None, :] - cut, 0.0)))[0]
    return s[0], rest[0], sizes.place(s[0], rest[0], to_floor)


def _best_gain(grid: _Reports, sizes: Sizes, price: InterimPrice, values: _Values) -> Floats:
    """Best interim gain over value: the best node of the grid, refined between its neighbours, or the floor."""
    # plain differences are enough to find the node; the gain itself comes from ratios
    gain = (values.worth[:, None] - grid.place.bid) * grid.wins
    if price.own != 1.0:
        gain -= values.saved[:, None] - grid.saved
    gain[grid.y < values.y[:, None]] = -np.inf
    at = gain.argmax(axis=1)
    best = np.maximum(_between_neighbours(grid, sizes, price, values, at), 0.0)
    return np.maximum(best, _at_floor(sizes, price, values))


def _grid(sizes: Sizes, price: InterimPrice, panels: int, steps: int) -> _Reports:
    law = OrderLaw(sizes.units, sizes.bidders - 1.0)
    lo, hi = (float(end[0]) for end in law.reach(0.0))
    cut = float(law.log_odds(sizes.chance, sizes.chance_not)[0])
    deep = min(lo, cut)
    edges = [deep - _DEEP[:: max(1, 192 // panels)][::-1]]
    if cut > lo:
        stop = min(hi, cut)
        edges.append(np.linspace(lo, stop, 1 + panels)[1:])
        if cut <= hi and sizes.turnout < 1:
            # at or just beyond the cut the lowest values may fall to 0 like a power: panels shrink towards it
            edges.append(stop - (stop - lo) / panels * 0.5 ** np.arange(1, 25))
    knots = [law.log_odds(sizes.turnout * knot, 1.0 - sizes.turnout * knot) for knot in sizes.knots]
    last = max(float(part[-1]) for part in edges)
    edge = np.unique(np.concatenate([*edges, *[k for k in knots if edges[0][0] < k[0] < last]]))
    half = 0.5 * np.diff(edge)
    y = (edge[:-1, None] + half[:, None] * (1.0 + _NODES)).ravel()
    s, rest, place = _place(sizes, law, y)
    wins = binomial_at_most(sizes.units[0] - 1, sizes.bidders[0] - 1, s, rest)
    slope = np.zeros_like(y)
    if price.own != 1.0:
        with np.errstate(divide="ignore", over="ignore"):
            steep = s * rest / (sizes.turnout * sizes.values.density(place.bid))
        slope = np.where(np.isfinite(steep), steep, 0.0) * _weight(sizes, price, s, rest, wins)
    return _Reports(law, edge, y, s, place, wins, slope, steps)


def _weight(sizes: Sizes, price: InterimPrice, s: Floats, rest: Floats, wins: Floats) -> Floats:
    """W of the module's formula: ``(1 - own) G - lowest H``, as ``(1 - own - lowest) G + lowest (G - H)``."""
    units, rivals = sizes.units[0], sizes.bidders[0] - 1.0
    fewer = binomial_at_most(units - 2, rivals, s, rest)
    alone = np.zeros_like(s)
    if sizes.chance < 1:
        # the rivals between the report and the reserve stay away: kept is the chance of any one doing so
        kept = sizes.chance_not + s
        alone = np.exp(rivals * np.log(kept)) * binomial_at_most(units - 2, rivals, s / kept, sizes.chance_not / kept)
    return (1.0 - price.own - price.lowest) * wins + price.lowest * np.maximum(fewer - alone, 0.0)


def _saved_at(grid: _Reports, y: Floats) -> Floats:
    """Return `saved` between the nodes: the panel's own polynomial, integrated."""
    half = 0.5 * np.diff(grid.edges)
    panel = np.clip(np.searchsorted(grid.edges, y, side="right") - 1, 0, half.size - 1)
    x = np.clip((y - grid.edges[panel]) / half[panel] - 1.0, -1.0, 1.0)
    powers = np.polynomial.legendre.legvander(x, _ORDER)
    inside = half[panel] * np.einsum("ij,ij->i", powers, grid.antiderivative[panel])
    saved: Floats = grid.from_panel[panel] - inside
    return saved


def _between_neighbours(
    grid: _Reports, sizes: Sizes, price: InterimPrice, values: _Values, at: NDArray[np.intp]
) -> Floats:
    """Best gain over value between the neighbours of the best node, by golden section."""
    last = grid.y.size - 1
    low = np.maximum(np.where(at > 0, grid.y[np.maximum(at - 1, 0)], grid.edges[0]), values.y)
    high = np.where(at < last, grid.y[np.minimum(at + 1, last)], grid.edges[-1])
    high = np.maximum(high, low)

    def gain(y: Floats) -> Floats:
        s, rest, report = _place(sizes, grid.law, y)
        wins = binomial_at_most(sizes.units[0] - 1, sizes.bidders[0] - 1, s, rest)
        shaded = report.drop_from(np.maximum(np.log(s / values.s), 0.0)) * wins
        if price.own == 1.0:
            return shaded
        return shaded - (values.saved - _saved_at(grid, y)) / values.worth

    left, right = high - _GOLDEN * (high - low), low + _GOLDEN * (high - low)
    at_left, at_right = gain(left), gain(right)
    best = np.maximum(np.maximum(at_left, at_right), 0.0)
    for _ in range(grid.steps):
        lower = at_left > at_right
        low, high = np.where(lower, low, left), np.where(lower, right, high)
        probe = np.where(lower, high - _GOLDEN * (high - low), low + _GOLDEN * (high - low))
        at_probe = gain(probe)
        left, right = np.where(lower, probe, right), np.where(lower, left, probe)
        at_left, at_right = np.where(lower, at_probe, at_right), np.where(lower, at_left, at_probe)
        best = np.maximum(best, at_probe)
    return best


def _at_floor(sizes: Sizes, price: InterimPrice, values: _Values) -> Floats:
    """Gain over value of reporting the lowest bid that can win."""
    floor, share = sizes.floor
    wins = float(
        binomial_at_most(sizes.units[0] - 1, sizes.bidders[0] - 1, np.array(sizes.chance), np.array(sizes.chance_not))
    )
    ratio = np.maximum(np.log(floor.at[0] / values.place.at), 0.0)
    drop = Place(sizes.values, np.full_like(ratio, floor.at[0]), np.full_like(ratio, floor.rest[0])).drop_from(ratio)
    room = np.ones_like(ratio) if share == 0 else drop + (1.0 - drop) * (1.0 - share)
    # from the lowest value down to a reserve below it, whoever wins is the lowest winner: W is constant there
    below_all = max(sizes.values.support[0] - sizes.reserve, 0.0)
    saved = values.saved + (1.0 - price.own - price.lowest) * wins * below_all
    return room * wins - saved / values.worth
