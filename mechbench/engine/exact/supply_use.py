"""What happens to the supply when the highest bids win: units left unsold, no sale at all, welfare lost."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from mechbench.contract import Floats
from mechbench.engine.exact.order import OrderLaw, binomial_at_most
from mechbench.engine.exact.resolution import Resolution
from mechbench.engine.exact.rules import finite, nested, settled
from mechbench.engine.exact.sizes import Sizes

__all__ = ["lost_welfare", "no_sale", "units_unsold"]


def no_sale(sizes: Sizes) -> Floats:
    """P(nothing is sold), array (cells,)."""
    if sizes.chance_not <= 0:
        return np.zeros_like(sizes.bidders)
    small = sizes.chance < 0.5  # noqa: PLR2004
    nobody: Floats = np.exp(sizes.bidders * (np.log1p(-sizes.chance) if small else np.log(sizes.chance_not)))
    return nobody


def units_unsold(sizes: Sizes, resolution: Resolution) -> tuple[Floats, Floats]:
    """Return the expected share of the units left unsold and a bound on its error, arrays (cells,).

    Given that the k-th smallest tail probability s misses the reserve's, so do it and each of the k - 1 before
    it with chance ``1 - chance / s``: every term is positive, so a tiny share keeps its digits.
    """
    if sizes.chance_not <= 0:
        return np.zeros_like(sizes.units), np.zeros_like(sizes.units)
    law = sizes.law(sizes.units)

    def missed(s: Floats, rest: Floats, density: Floats, beyond: Floats) -> Floats:
        del rest
        units = sizes.units[:, None]
        return density * (1.0 + (units - 1.0) * beyond / s) / units

    return _beyond_floor(sizes, law, np.full_like(law.rank, np.inf), missed, resolution)


def lost_welfare(sizes: Sizes, resolution: Resolution) -> tuple[Floats, Floats]:
    """Return the expected value of the units kept from the highest bidders, arrays (cells,).

    A bidder with tail probability t below the reserve would get a unit with the chance that at most k - 1 of the
    others come before it.
    """
    if sizes.reserve <= sizes.values.support[0]:
        return np.zeros_like(sizes.units), np.zeros_like(sizes.units)
    law = OrderLaw(sizes.units, sizes.bidders - 1.0)
    turnout = np.array(sizes.turnout)
    end = law.log_odds(float(turnout), 1.0 - float(turnout))

    def lost(s: Floats, rest: Floats, density: Floats, beyond: Floats) -> Floats:
        del density, beyond
        ahead = binomial_at_most(sizes.units[:, None] - 1, sizes.bidders[:, None] - 1, s, rest)
        return sizes.bidders[:, None] * ahead * sizes.place(s, rest).bid * s * rest

    return _beyond_floor(sizes, law, end, lost, resolution)


def _beyond_floor(
    sizes: Sizes,
    law: OrderLaw,
    end: Floats,
    integrand: Callable[[Floats, Floats, Floats, Floats], Floats],
    resolution: Resolution,
) -> tuple[Floats, Floats]:
    """Integrate over the log-odds from the reserve's up to `end`, of (s, rest, density, s - chance)."""
    lo, hi = law.reach(0.0)
    cut = law.log_odds(sizes.chance, sizes.chance_not)
    # past the bump the log-density falls at least as steeply as at the cut, and no slower than at the bump
    fall = np.maximum((sizes.bidders + 1.0) * sizes.chance - law.rank, 1e-3)
    stop = np.minimum(np.where(cut > 0, cut + np.minimum(hi, 40.0 / fall), hi), end)
    middle = np.clip(lo, cut, stop)
    value, error = np.zeros_like(cut), np.zeros_like(cut)
    for left, right in ((cut, middle), (middle, np.maximum(stop, middle))):
        if (right <= left).all():
            continue
        begin, finish = np.arcsinh(left), np.arcsinh(right)
        from_lo, from_hi, weight = finite(begin, finish, resolution.cut)
        t = np.where(from_lo < from_hi, begin[:, None] + from_lo, finish[:, None] - from_hi)
        s, rest, density = law.at(np.sinh(t))
        past = (left - cut)[:, None] + 2.0 * np.cosh(begin[:, None] + 0.5 * from_lo) * np.sinh(0.5 * from_lo)
        beyond = s * sizes.chance_not * -np.expm1(-past)
        amount = integrand(s, rest, density, beyond)
        more, more_error = settled(amount, nested(weight * np.cosh(t)))
        value, error = value + more, error + more_error
    with np.errstate(divide="ignore"):
        # a density of exp(-700) is known to 700 roundings
        return value, error + 2e-15 * value * np.minimum(np.abs(np.log(value)), 750.0)
