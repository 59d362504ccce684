"""The chance that a gain exceeds a level, from the functional of the worst gain."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from mechbench.contract import Floats, Functional
from mechbench.engine.exact.order import binomial_at_most
from mechbench.engine.exact.places import contested_nodes
from mechbench.engine.exact.resolution import NoRouteError, Resolution
from mechbench.engine.exact.rules import EXPONENT, settled
from mechbench.engine.exact.sizes import Sizes
from mechbench.engine.exact.slack import SlackDraws
from mechbench.engine.exact.winners import Place, Ranked

__all__ = ["chance_above"]

_STEPS = 56
"""Bisections to the last digit."""
_LEFT_OUT = 2.0 * float(np.exp(-EXPONENT))
_FURTHEST = 640.0
"""Log ratio that stands for "as high as values go"; tail probabilities stay representable."""


def chance_above(sizes: Sizes, functional: Functional, level: float, resolution: Resolution) -> tuple[Floats, Floats]:
    """P(the amount exceeds `level` and something is sold) and a bound on its error, arrays (cells,).

    The amount rises with the winner it runs over, so in each draw it exceeds the level when that winner sits
    beyond one log ratio from the threshold, which is found by bisection.

    Raises
    ------
    NoRouteError
        If the functional runs over anything but the best or the lowest winner.
    """
    if functional.over not in {"best", "lowest"}:
        raise NoRouteError(functional)
    value, error = _contested(sizes, functional, level, resolution)
    if sizes.chance < 1.0:
        more, more_error = _slack(sizes, functional, level, resolution)
        value, error = value + more, error + more_error
    # a chance may come from draws so rare that the rules leave them out, if they are contested at all
    contested = binomial_at_most(
        sizes.bidders - sizes.units - 1, sizes.bidders, np.array(sizes.chance_not), np.array(sizes.chance)
    )
    return value, error + np.minimum(_LEFT_OUT, contested)


def _amount(functional: Functional, place: Place, share: float, ratio: Floats) -> Floats:
    if functional.over == "best":
        return functional.amount(Ranked(place, share, winner=ratio))
    return functional.amount(Ranked(place, share, lowest=ratio))


def _bisect(passed: Callable[[Floats], NDArray[np.bool_]], low: Floats, high: Floats, steps: int) -> Floats:
    """Point where a rising condition starts to hold, between `low` (not yet) and `high`."""
    for _ in range(steps):
        middle = 0.5 * (low + high)
        holds = passed(middle)
        low, high = np.where(holds, low, middle), np.where(holds, middle, high)
    return high


def _ratio_at(functional: Functional, place: Place, share: float, level: float, steps: int) -> Floats:
    """Log ratio beyond which the amount exceeds the level; inf where it never does."""

    def passed(log_of_ratio: Floats) -> NDArray[np.bool_]:
        return _amount(functional, place, share, np.exp(log_of_ratio)) > level

    low = np.full(place.at.shape, np.log(1e-18))
    high = np.full(place.at.shape, np.log(_FURTHEST))
    ratio = np.exp(_bisect(passed, low, high, steps))
    reaches = passed(high)
    at_once = passed(low)
    return np.where(at_once, 0.0, np.where(reaches, ratio, np.inf))


def _contested(sizes: Sizes, functional: Functional, level: float, resolution: Resolution) -> tuple[Floats, Floats]:
    rank = sizes.units + 1.0
    value, error = np.zeros_like(rank), np.zeros_like(rank)
    start = _first_reach(sizes, functional, level)
    knots = () if resolution.loose else sizes.knots
    breaks = [_where_at_knot(sizes, functional, level, knot) for knot in knots]
    for nodes in contested_nodes(sizes, rank, 0.0, resolution, start, breaks):
        ratio = _ratio_at(functional, nodes.place, 1.0, level, _STEPS // 2 if resolution.loose else _STEPS)
        units = sizes.units[:, None]
        if functional.over == "best":
            with np.errstate(divide="ignore"):
                chance = -np.expm1(units * np.log1p(-np.exp(-ratio)))
        else:
            chance = np.exp(-units * ratio)
        more, more_error = settled(chance, nodes.weights)
        value, error = value + more, error + more_error
    return value, error


def _first_reach(sizes: Sizes, functional: Functional, level: float) -> Floats | None:
    """Log-odds of the threshold below which no winner, however high, exceeds the level; None if there is none."""
    law = sizes.law(sizes.units + 1.0)
    low, high = law.reach_below(0.0, sizes.chance, sizes.chance_not)

    def passed(y: Floats) -> NDArray[np.bool_]:
        s, rest, _ = law.at(y[:, None])
        place = sizes.place(s, rest)
        return _amount(functional, place, 1.0, np.full(s.shape, _FURTHEST))[:, 0] > level

    if passed(low).all():
        return None
    return _bisect(passed, low, high, _STEPS)


def _where_at_knot(sizes: Sizes, functional: Functional, level: float, knot: float) -> Floats:
    """Log-odds of the threshold for which the winner at the family's knot has just the level."""
    law = sizes.law(sizes.units + 1.0)
    low, high = law.reach_below(0.0, sizes.chance, sizes.chance_not)

    def passed(y: Floats) -> NDArray[np.bool_]:
        s, rest, _ = law.at(y[:, None])
        place = sizes.place(s, rest)
        below = place.at > knot
        ratio = np.log(np.where(below, place.at / knot, 1.0))
        return ((_amount(functional, place, 1.0, ratio) > level) & below)[:, 0]

    return _bisect(passed, low, high, _STEPS)


def _slack(sizes: Sizes, functional: Functional, level: float, resolution: Resolution) -> tuple[Floats, Floats]:
    floor, share = sizes.floor
    place = Place(sizes.values, floor.at[:, None], floor.rest[:, None])
    draws = SlackDraws(sizes, place, share, resolution)
    ratio = float(_ratio_at(functional, floor, share, level, _STEPS)[0])
    if np.isinf(ratio):
        return np.zeros_like(sizes.units), np.zeros_like(sizes.units)
    counted = Functional(functional.over, functional.uses, lambda _: np.ones((1, 1)))
    if functional.over == "best":
        edge = -sizes.bidders * np.log1p(-sizes.chance * np.exp(-ratio)) if ratio > 0 else draws.end
        draws.stop = np.minimum(draws.stop, edge)
        return draws.best(counted)
    edge = -sizes.bidders * np.log1p(sizes.chance * np.expm1(-ratio))
    draws.start = np.minimum(edge, draws.stop)
    return draws.lowest(counted)
