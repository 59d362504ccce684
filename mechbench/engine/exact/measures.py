"""From a mechanism's functionals to estimates, refined until the error asked for is reached."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np

from mechbench.contract import MONEY, Floats, Functional, InterimPrice, Mechanism
from mechbench.engine.estimate import Estimate
from mechbench.engine.exact.chance import chance_above
from mechbench.engine.exact.interim import interim_gain
from mechbench.engine.exact.resolution import NoRouteError, Resolution
from mechbench.engine.exact.sizes import Sizes
from mechbench.engine.exact.supply_use import lost_welfare, no_sale, units_unsold
from mechbench.engine.exact.units import expectation
from mechbench.market.market import Market

__all__ = ["exact"]

_REFINEMENTS = 3
_UNDERFLOW = 1e-300
"""A value that a float holds as 0 need not be 0."""
_INFINITE = "infinite"
_UNDEFINED = "undefined: an infinite share of an infinite welfare"
_NEVER = "no sale"

_Route = Callable[[Sizes, Resolution], tuple[Floats, Floats]]


def exact(
    markets: Sequence[Market],
    mechanism: Mechanism,
    measure: str,
    *,
    error: float = 1e-9,
    threshold: float = 0.05,
) -> list[Estimate] | None:
    """One measure of one mechanism in markets that differ in size alone.

    Parameters
    ----------
    markets : sequence of Market
        Of one family, turnout and reserve.
    mechanism : Mechanism
    measure : str
        A name in `mechbench.contract.MEASURES`.
    error : float
        The bound to reach: absolute for shares, relative for money.
    threshold : float
        The level of `gain_chance`.

    Returns
    -------
    list of Estimate, or None where the mechanism declares nothing that can be integrated.
    """
    sizes = Sizes.of(markets)
    functional = _declared(mechanism, measure, markets[0])
    if functional is None:
        return None
    if isinstance(functional, float | int):
        return [_estimate(float(functional), 0.0, "ok")] * len(markets)
    if measure != "interim_gain":
        status = _infinity(sizes, measure, functional)
        if status:
            return [_estimate(np.inf if status == _INFINITE else np.nan, np.inf, status)] * len(markets)
    try:
        value, bounds = _solve(sizes, measure, functional, error, threshold)
    except NoRouteError:
        return None
    allowed = error * np.abs(value) if measure in MONEY else np.full_like(value, error)
    return [
        _estimate(float(v), float(b) + _UNDERFLOW, "ok" if b <= a else "not converged")
        for v, b, a in zip(value, bounds, allowed, strict=True)
    ]


def _estimate(value: float, error: float, status: str) -> Estimate:
    return Estimate(value, error, "exact", status)


def _declared(mechanism: Mechanism, measure: str, market: Market) -> Functional | InterimPrice | float | None:
    """Return what is integrated for the measure: the mechanism's own word, or what follows from others."""
    declared = mechanism.functional(measure, market.supply)
    if declared is not None:
        return declared
    if measure == "gain_chance":
        worst = mechanism.functional("worst_gain", market.supply)
        return worst if isinstance(worst, Functional) else None
    if measure in {"efficiency", "units_unsold", "no_sale"}:
        welfare = mechanism.functional("welfare", market.supply)
        if isinstance(welfare, Functional) and welfare.over == "sum" and welfare.uses == {"winner"}:
            return welfare
    return None


def _infinity(sizes: Sizes, measure: str, functional: Functional | InterimPrice) -> str:
    """Why an expectation is not a number, or an empty string."""
    if not isinstance(functional, Functional) or functional.over != "sum":
        return ""
    if measure in {"units_unsold", "no_sale"}:
        return ""
    if measure == "efficiency":
        kept = sizes.reserve <= sizes.values.support[0]
        return "" if kept or sizes.values.tail_index < 1.0 else _UNDEFINED
    rank = 1.0
    if functional.uses == {"threshold"}:
        rank = float(sizes.units.min()) + 1.0
    elif functional.uses == {"lowest"} and sizes.chance == 1.0:
        rank = float(sizes.units.min())
    return _INFINITE if sizes.values.tail_index >= rank else ""


def _solve(
    sizes: Sizes,
    measure: str,
    functional: Functional | InterimPrice,
    error: float,
    threshold: float,
) -> tuple[Floats, Floats]:
    """Value and bound of a measure at every size, arrays (cells,)."""
    if measure == "no_sale":
        none = no_sale(sizes)
        return none, 4e-16 * np.maximum(1.0, sizes.bidders * sizes.chance) * none
    if isinstance(functional, InterimPrice):
        return interim_gain(sizes, functional, error)
    if measure == "units_unsold":
        return _refined(sizes, units_unsold, error, relative=False)
    if measure == "efficiency":
        return _efficiency(sizes, functional, error)
    if measure in MONEY:
        return _refined(sizes, lambda some, fine: expectation(some, functional, fine), error, relative=True)

    def given_a_sale(some: Sizes, fine: Resolution) -> tuple[Floats, Floats]:
        if measure == "gain_chance":
            value, bounds = chance_above(some, functional, threshold, fine)
        else:
            value, bounds = expectation(some, functional, fine)
        return value / some.sale, np.minimum(bounds / some.sale, 1.0)

    return _refined(sizes, given_a_sale, error, relative=False)


def _efficiency(sizes: Sizes, welfare: Functional, error: float) -> tuple[Floats, Floats]:
    if sizes.reserve <= sizes.values.support[0]:
        return np.ones_like(sizes.units), np.zeros_like(sizes.units)
    free = Sizes(sizes.values, sizes.turnout, 0.0, sizes.bidders, sizes.units)
    most, most_error = _refined(free, lambda some, fine: expectation(some, welfare, fine), 0.1 * error, relative=True)
    lost, lost_error = _refined(sizes, lost_welfare, 0.1 * error, relative=True)
    share = lost / most
    return 1.0 - share, lost_error / most + share * most_error / most + 2e-16


def _refined(sizes: Sizes, route: _Route, error: float, *, relative: bool) -> tuple[Floats, Floats]:
    """Run a route on finer and finer rules, each time only where the bound is still too large."""
    resolution = Resolution.enough_for(error)
    value, bounds = route(sizes, resolution)
    for _ in range(_REFINEMENTS):
        allowed = error * np.abs(value) if relative else np.full_like(value, error)
        todo = ~(bounds <= allowed)
        if not todo.any():
            break
        resolution = resolution.finer()
        finer, finer_bounds = route(sizes.some(todo), resolution)
        better = finer_bounds < bounds[todo]
        value[todo] = np.where(better, finer, value[todo])
        bounds[todo] = np.where(better, finer_bounds, bounds[todo])
    return value, bounds
