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

import numpy as np
from numpy.typing import NDArray

from mechbench.contract import Floats, InterimPrice
from mechbench.engine.exact.order import OrderLaw, binomial_at_most
from mechbench.engine.exact.sizes import Sizes
from mechbench.engine.exact.supply_use import units_unsold
from mechbench.engine.exact.units import Resolution
from mechbench.engine.exact.winners import Place

__all__ = ["interim_gain"]

_ORDER = 8
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(_ORDER)
_DEEP = np.interp(
    np.arange(0.0, 32.25, 0.25), np.arange(0.0, 36.0, 4.0), [0.0, 2.0, 4.0, 7.0, 11.0, 16.0, 22.0, 29.0, 36.0]
)
"""Panel edges below the bump of the law, where the win is certain: the weight falls like ``exp(-distance)``."""
_GOLDEN = 0.5 * (np.sqrt(5.0) - 1.0)


def interim_gain(sizes: Sizes, price: InterimPrice, error: float) -> tuple[Floats, Floats]:
    """Interim gain and a bound on its error, arrays (cells,).

    The integral is taken on panels that are halved until two passes agree; the maximum over reports may move
    from one place to another as the value rises, so nothing faster than the difference of the passes is claimed.
    """
    pairs = [_one_size(_only(sizes, cell), price, error) for cell in range(sizes.units.size)]
    value, bounds = np.array(pairs).T
    return value, bounds


def _only(sizes: Sizes, cell: int) -> Sizes:
    return Sizes(
        sizes.values,
        sizes.turnout,
        sizes.reserve,
        sizes.bidders[cell : cell + 1],
        sizes.units[cell : cell + 1],
    )


def _one_size(sizes: Sizes, price: InterimPrice, error: float) -> tuple[float, float]:
    unsold, unsold_error = units_unsold(sizes, Resolution())
    winners = float((sizes.units * (1.0 - unsold))[0] / sizes.bidders[0])
    slack = float(unsold_error[0] * sizes.units[0] / sizes.bidders[0]) / winners
    coarse = _gained(sizes, price, 12) / winners
    for panels in (24, 48, 96):
        fine = _gained(sizes, price, panels) / winners
        spread = abs(fine - coarse) + (1e-13 + slack) * fine
        if spread <= error:
            break
        coarse = fine
    return fine, spread


@dataclass(frozen=True)
class _Reports:
    """Possible reports on a grid of Gauss panels in the log-odds of their tail probability, rising.

    Attributes
    ----------
    edges : array (panels + 1,)
    y, s, place : the nodes, flat
    step : array (nodes,)
        Weight of each node for an integral over s.
    wins : array (nodes,)
        G.
    saved : array (nodes,)
        Integral of W from the lowest report to the node's, in currency.
    """

    law: OrderLaw
    edges: Floats
    y: Floats
    s: Floats
    place: Place
    step: Floats
    wins: Floats
    saved: Floats
    slope: Floats


def _gained(sizes: Sizes, price: InterimPrice, panels: int) -> float:
    """Integral over a bidder's tail probability of its best interim gain over its value."""
    grid = _grid(sizes, price, panels)
    bid = grid.place.bid
    best, at = np.zeros_like(grid.y), np.zeros(grid.y.size, dtype=np.intp)
    for start in range(0, grid.y.size, 256):
        rows = np.arange(start, min(start + 256, grid.y.size))
        gain = _gain(
            grid, sizes, rows[:, None], grid.y[None, :], grid.wins[None, :], grid.saved[None, :], bid
        )
        gain[grid.y[None, :] < grid.y[rows][:, None]] = -np.inf
        at[rows] = gain.argmax(axis=1)
        best[rows] = np.maximum(gain.max(axis=1), 0.0)
    best = np.maximum(best, _refined(grid, sizes, price, at, bid))
    best = np.maximum(best, _at_floor(grid, sizes, price, bid))
    return float((grid.step * best).sum())


def _gain(
    grid: _Reports, sizes: Sizes, value: NDArray[np.intp], y: Floats, wins: Floats, saved: Floats, bid: Floats
) -> Floats:
    """Gain over value of reporting the bid at log-odds `y` when the value is that of node `value`."""
    s, rest, _ = grid.law.at(np.atleast_2d(y))
    report = sizes.place(s, rest)
    ratio = np.maximum(np.log(s / grid.s[value]), 0.0)
    shaded = report.drop_from(ratio) * wins
    worth = np.where(bid[value] > 0, bid[value], 1.0)
    return shaded - (grid.saved[value] - saved) / worth


def _grid(sizes: Sizes, price: InterimPrice, panels: int) -> _Reports:
    law = OrderLaw(sizes.units, sizes.bidders - 1.0)
    lo, hi = (float(end[0]) for end in law.reach(0.0))
    cut = float(law.log_odds(sizes.chance, sizes.chance_not)[0])
    deep = min(lo, cut)
    edges = [deep - _DEEP[:: max(1, 192 // panels)][::-1]]
    if cut > lo:
        stop = min(hi, cut)
        edges.append(np.linspace(lo, stop, 1 + panels)[1:])
        if cut <= hi and sizes.reserve == 0:
            # the lowest values may fall to 0 like a power at the cut: panels shrink towards it
            edges.append(stop - (stop - lo) / panels * 0.5 ** np.arange(1, 25))
    knots = [law.log_odds(sizes.turnout * knot, 1.0 - sizes.turnout * knot) for knot in sizes.knots]
    last = max(float(part[-1]) for part in edges)
    edge = np.unique(np.concatenate([*edges, *[k for k in knots if edges[0][0] < k[0] < last]]))
    half = 0.5 * np.diff(edge)
    y = (edge[:-1, None] + half[:, None] * (1.0 + _NODES)).ravel()
    s, rest, _ = law.at(y[None, :])
    to_floor = None
    if sizes.chance_not > 0:
        to_floor = sizes.chance * rest * -np.expm1(np.minimum(y[None, :] - cut, 0.0))
    place = sizes.place(s, rest, to_floor)
    place = Place(place.values, place.at[0], place.rest[0])
    step = (half[:, None] * _WEIGHTS).ravel() * s[0] * rest[0]
    wins = binomial_at_most(sizes.units[0] - 1, sizes.bidders[0] - 1, s[0], rest[0])
    slope = np.zeros_like(y)
    if price.own != 1.0:
        with np.errstate(divide="ignore", over="ignore"):
            steep = s[0] * rest[0] / (sizes.turnout * sizes.values.density(place.bid))
        slope = np.where(np.isfinite(steep), steep, 0.0) * _weight(sizes, price, s[0], rest[0], wins)
    saved = _from_below(slope, half)
    return _Reports(law, edge, y, s[0], place, step, wins, saved, slope)


def _weight(sizes: Sizes, price: InterimPrice, s: Floats, rest: Floats, wins: Floats) -> Floats:
    """W of the module's formula: ``(1 - own) G - lowest H``, as ``(1 - own - lowest) G + lowest (G - H)``."""
    units, rivals = sizes.units[0], sizes.bidders[0] - 1.0
    fewer = binomial_at_most(units - 2, rivals, s, rest)
    alone = np.zeros_like(s)
    if sizes.chance < 1:
        # the rivals between the report and the reserve stay away: kept is the chance of any one doing so
        kept = sizes.chance_not + s
        alone = np.exp(rivals * np.log(kept)) * binomial_at_most(
            units - 2, rivals, s / kept, sizes.chance_not / kept
        )
    return (1.0 - price.own - price.lowest) * wins + price.lowest * np.maximum(fewer - alone, 0.0)


_INTEGRATE = np.array(
    [
        np.polynomial.legendre.legval(_NODES, np.polynomial.legendre.legint(np.eye(_ORDER)[degree], lbnd=-1))
        for degree in range(_ORDER)
    ]
).T @ ((np.arange(_ORDER)[:, None] + 0.5) * np.polynomial.legendre.legvander(_NODES, _ORDER - 1).T * _WEIGHTS)
"""Values at a panel's nodes to the integral from the panel's left end to each node (for half-width 1)."""


def _from_below(slope: Floats, half: Floats) -> Floats:
    """Integral over the log-odds from each node to the right end, i.e. up from the lowest report."""
    table = slope.reshape(-1, _ORDER)
    whole = half * (table @ _WEIGHTS)
    inside = half[:, None] * (table @ _INTEGRATE.T)
    to_right = whole[:, None] - inside
    beyond = np.concatenate([np.cumsum(whole[::-1])[::-1][1:], [0.0]])
    return (to_right + beyond[:, None]).ravel()


def _saved_at(grid: _Reports, y: Floats) -> Floats:
    """`saved` between the nodes: the panel's own polynomial, integrated."""
    half = 0.5 * np.diff(grid.edges)
    panel = np.clip(np.searchsorted(grid.edges, y, side="right") - 1, 0, half.size - 1)
    table = grid.slope.reshape(-1, _ORDER)
    coefficients = (
        (np.arange(_ORDER) + 0.5) * (table * _WEIGHTS) @ np.polynomial.legendre.legvander(_NODES, _ORDER - 1)
    )
    whole = half * (table @ _WEIGHTS)
    beyond = np.concatenate([np.cumsum(whole[::-1])[::-1][1:], [0.0]])
    x = np.clip((y - grid.edges[panel]) / half[panel] - 1.0, -1.0, 1.0)
    antiderivative = np.polynomial.legendre.legint(coefficients.T, lbnd=-1)
    powers = np.polynomial.legendre.legvander(x, _ORDER)
    inside = half[panel] * np.einsum("ij,ji->i", powers, antiderivative[:, panel])
    return whole[panel] - inside + beyond[panel]


def _refined(grid: _Reports, sizes: Sizes, price: InterimPrice, at: NDArray[np.intp], bid: Floats) -> Floats:
    """Best gain between the neighbours of the best node, by golden section."""
    node = np.arange(grid.y.size)
    low = np.maximum(grid.y[np.maximum(at - 1, 0)], grid.y)
    high = grid.y[np.minimum(at + 1, grid.y.size - 1)]
    high = np.where(at + 1 >= grid.y.size, grid.edges[-1], high)
    high = np.maximum(high, low)

    def gain(y: Floats) -> Floats:
        s, rest, _ = grid.law.at(y[None, :])
        wins = binomial_at_most(sizes.units[0] - 1, sizes.bidders[0] - 1, s[0], rest[0])
        saved = _saved_at(grid, y) if price.own != 1.0 else np.zeros_like(y)
        return _gain(grid, sizes, node, y, wins, saved, bid)[0]

    left, right = high - _GOLDEN * (high - low), low + _GOLDEN * (high - low)
    at_left, at_right = gain(left), gain(right)
    best = np.maximum(np.maximum(at_left, at_right), 0.0)
    for _ in range(34):
        lower = at_left > at_right
        low, high = np.where(lower, low, left), np.where(lower, right, high)
        probe = np.where(lower, high - _GOLDEN * (high - low), low + _GOLDEN * (high - low))
        at_probe = gain(probe)
        left, right = np.where(lower, probe, right), np.where(lower, left, probe)
        at_left, at_right = np.where(lower, at_probe, at_right), np.where(lower, at_left, at_probe)
        best = np.maximum(best, at_probe)
    return best


def _at_floor(grid: _Reports, sizes: Sizes, price: InterimPrice, bid: Floats) -> Floats:
    """Gain over value of reporting the lowest bid that can win."""
    floor, share = sizes.floor
    wins = float(
        binomial_at_most(
            sizes.units[0] - 1, sizes.bidders[0] - 1, np.array(sizes.chance), np.array(sizes.chance_not)
        )
    )
    ratio = np.maximum(np.log(floor.at[0] / grid.place.at), 0.0)
    drop = Place(
        sizes.values, np.full_like(ratio, floor.at[0]), np.full_like(ratio, floor.rest[0])
    ).drop_from(ratio)
    room = np.ones_like(ratio) if share == 0 else drop + (1.0 - drop) * (1.0 - share)
    worth = np.where(bid > 0, bid, 1.0)
    # from the lowest value down to a reserve below it, whoever wins is the lowest winner: W is constant there
    below_all = max(sizes.values.support[0] - sizes.reserve, 0.0)
    saved = grid.saved + (1.0 - price.own - price.lowest) * wins * below_all
    return room * wins - saved / worth
