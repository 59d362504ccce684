"""Laws of order statistics and binomial counts, accurate for a handful of bidders and for 10^12.

``S_(j)``, the j-th smallest of n uniforms, follows Beta(j, n - j + 1) [1]_. The engine integrates over its
log-odds, measured from the mode, where the density is log-concave and its logarithm has no large terms to
cancel: with a = j, b = n - j + 1, N = a + b, m = a / N the density of the log-odds y is
``C exp(a log(s / m) + b log((1 - s) / (1 - m)))``, and both logarithms are taken without their common linear
part [2]_.

.. [1] H. A. David and H. N. Nagaraja, *Order Statistics*, 3rd ed., Wiley 2003, section 2.3 (from memory; checked
   in tests/published/ against mpmath).
.. [2] C. Loader, "Fast and accurate computation of binomial probabilities", 2000: the deviance form and the
   Stirling remainder (from memory; checked against mpmath).
.. [3] N. M. Temme, "Asymptotic inversion of the incomplete beta function", *Journal of Computational and Applied
   Mathematics* 41 (1992) 145-157, section 2: the uniform expansion (from memory; checked against scipy).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import special

from mechbench.contract import Floats
from mechbench.engine.exact.rules import EXPONENT

__all__ = ["OrderLaw", "at_least_one", "binomial_at_most", "binomial_between"]


_MANY = 1e8
"""Exponents of a beta law from which on its distribution function comes from the uniform expansion."""
_DEEP = -0.9
"""``s / mode - 1`` below which the logarithm of ``s / mode`` comes from the log-odds: nothing cancels there."""


@dataclass(frozen=True)
class OrderLaw:
    """The law of ``S_(j)`` among n uniforms, one cell per element.

    Attributes
    ----------
    rank : array (cells,)
        j, at least 1.
    count : array (cells,)
        n, at least j.
    """

    rank: Floats
    count: Floats

    @property
    def above(self) -> Floats:
        """The other exponent of the beta law, n - j + 1."""
        return self.count - self.rank + 1.0

    @property
    def mode(self) -> Floats:
        """The point from which log-odds are measured."""
        return self.rank / (self.count + 1.0)

    @property
    def width(self) -> Floats:
        """Standard deviation of the log-odds, about, for laws that are nearly normal there."""
        return np.sqrt((self.count + 1.0) / (self.rank * self.above))

    @property
    def slow_tail(self) -> Floats:
        """Which tail of the log-odds is far slower than the other: -1 the left, 1 the right, 0 neither."""
        return np.where(self.above >= 10.0 * self.rank, -1, np.where(self.rank >= 10.0 * self.above, 1, 0))

    def reach(self, growth: float) -> tuple[Floats, Floats]:
        """Log-odds from the mode beyond which ``s**-growth`` times the density is negligible.

        The bounds invert ``exp(x) >= 1 + x + x**2 / 2`` instead of the density; tests show that they hold.
        """
        low, high = np.maximum(self.rank - growth, 0.02), self.above
        total = low + high
        curve = EXPONENT * total / (low * high)
        root = np.sqrt(2.0 * curve)
        left = np.minimum(np.log1p(curve + root) + EXPONENT / low, EXPONENT / low + root)
        right = np.minimum(np.log1p(curve + root) + EXPONENT / high, EXPONENT / high + root)
        # measured from this law's own mode, which the growth moved to the right of the other's
        shift = np.log(low / self.rank)
        return shift - left, right

    def reach_below(self, growth: float, chance: float, rest: float) -> tuple[Floats, Floats]:
        """`reach`, but of what lies below a cut at the tail probability `chance`, however little that is.

        Left of the mode the log-density rises towards the cut at least as steeply as at it, and no slower than
        it does towards the mode.
        """
        lo, hi = self.reach(growth)
        if rest <= 0:
            return lo, hi
        cut = self.log_odds(chance, rest)
        rise = self.rank - growth - (self.count + 1.0 - growth) * chance
        further = np.minimum(-lo, 1.2 * EXPONENT / np.maximum(rise, 1e-3))
        start: Floats = np.where(rise > 0, np.minimum(lo, cut - further), lo)
        return start, hi

    def log_odds(self, s: float, rest: float) -> Floats:
        """Where the tail probability `s`, with ``rest = 1 - s``, lies on the log-odds axis; inf for 1."""
        if rest <= 0:
            return np.full_like(self.rank, np.inf)
        if s <= 0:
            return np.full_like(self.rank, -np.inf)
        return np.log(s / rest * (self.above / self.rank))

    def at(self, y: Floats) -> tuple[Floats, Floats, Floats]:
        """Tail probability, its complement and the density over log-odds.

        Parameters
        ----------
        y : array (cells, nodes)

        Returns
        -------
        s, rest, density : arrays (cells, nodes)
        """
        low, high, mode = self.rank[:, None], self.above[:, None], self.mode[:, None]
        growth, odds = np.expm1(y), np.exp(y)
        other = high / (low + high)
        scale = other + mode * odds  # a sum of positive terms: a mode next to 1 keeps its digits
        s = np.minimum(mode * odds / scale, 1.0)  # not 1 + growth: deep in the tail that is 0
        rest = other / scale
        both = np.stack([growth * other / scale, -mode * growth / scale])
        beyond = _log1p_beyond_linear(both)
        exponent = low * beyond[0] + high * beyond[1]
        deep = both[0] < _DEEP
        if deep.any():
            # 1 + over would be 0 from y = -37 on, but the tail matters where the amount grows up it
            apart = low * (y - np.log(scale) - both[0]) + high * beyond[1]
            exponent = np.where(deep, apart, exponent)
        return s, rest, np.exp(exponent + self._log_peak()[:, None])

    def _log_peak(self) -> Floats:
        low, high = self.rank, self.above
        total = low + high
        remainders = _stirling_remainder(np.stack([total, low, high]))
        stirling: Floats = remainders[0] - remainders[1] - remainders[2]
        return 0.5 * np.log(low / total * high / (2.0 * np.pi)) + stirling


def _log1p_beyond_linear(x: Floats) -> Floats:
    """``log(1 + x) - x`` with its relative digits at small x."""
    small = np.abs(x) < 0.3  # noqa: PLR2004
    if small.all():
        return _log1p_beyond_linear_series(x)
    result = np.empty_like(x)
    result[small] = _log1p_beyond_linear_series(x[small])
    large = np.maximum(x[~small], -1.0 + 1e-300)
    with np.errstate(divide="ignore"):
        result[~small] = np.log1p(large) - large
    return result


def _log1p_beyond_linear_series(x: Floats) -> Floats:
    ratio = x / (2.0 + x)
    square = ratio * ratio
    series = np.full_like(x, 1.0 / 21.0)
    for odd in range(19, 1, -2):
        series *= square
        series += 1.0 / odd
    return ratio * (2.0 * square * series - x)


def _stirling_remainder(z: Floats) -> Floats:
    """``log Gamma(z) - ((z - 1/2) log z - z + log(2 pi) / 2)`` for z >= 1."""
    inverse = 1.0 / np.maximum(z, 16.0)
    square = inverse * inverse
    series = inverse * (1 / 12 - square * (1 / 360 - square * (1 / 1260 - square * (1 / 1680 - square / 1188))))
    if (z >= 16.0).all():  # noqa: PLR2004
        return series
    low = np.minimum(z, 16.0)
    direct = special.gammaln(low) - ((low - 0.5) * np.log(low) - low + 0.5 * np.log(2.0 * np.pi))
    return np.where(z < 16.0, direct, series)  # noqa: PLR2004


def binomial_at_most(limit: Floats, trials: Floats, chance: Floats, rest: Floats) -> Floats:
    """P(Bin(trials, chance) <= limit), with ``rest = 1 - chance`` given so that both ends keep their digits."""
    limit, trials, chance, rest = np.broadcast_arrays(limit, trials, chance, rest)
    inside = (limit >= 0) & (limit < trials)
    low, high = np.where(inside, limit + 1.0, 1.0), np.where(inside, trials - limit, 1.0)
    many = np.minimum(low, high) > _MANY
    if many.all():
        return np.where(inside, _beta_above(low, high, chance, rest), np.where(limit < 0, 0.0, 1.0))
    if many.any():
        result = np.empty(limit.shape)
        for part in (many, ~many):
            result[part] = binomial_at_most(limit[part], trials[part], chance[part], rest[part])
        return result
    use_rest = rest < 0.5  # noqa: PLR2004
    near = special.betaincc(low, high, np.clip(np.where(use_rest, 0.5, chance), 0.0, 1.0))
    if use_rest.any():
        near = np.where(use_rest, special.betainc(high, low, np.clip(rest, 0.0, 1.0)), near)
    return np.where(inside, near, np.where(limit < 0, 0.0, 1.0))


def _beta_above(low: Floats, high: Floats, s: Floats, rest: Floats) -> Floats:
    """P(Beta(low, high) > s) for two huge exponents, by the uniform expansion to its first correction [3]_.

    The next term is of the order of ``min(low, high) ** -1.5``, below 1e-12 here.
    """
    total = low + high
    away = np.where(s < 0.5, s - low / total, high / total - rest)  # noqa: PLR2004
    both = _log1p_beyond_linear(np.stack([away * (total / low), -away * (total / high)]))
    deviance = -(low * both[0] + high * both[1])
    side = np.sign(away)
    eta = side * np.sqrt(2.0 * deviance / total)
    root = np.sqrt(low / total * (high / total))
    apart = np.abs(eta) > 1e-11  # noqa: PLR2004
    level = np.where(
        apart,
        1.0 / np.where(apart, eta, 1.0) - root / np.where(apart, away, 1.0),
        (low - high) / total / (3.0 * root),
    )
    correction = np.exp(-deviance) / np.sqrt(2.0 * np.pi * total) * level
    chance: Floats = np.clip(0.5 * special.erfc(side * np.sqrt(deviance)) - correction, 0.0, 1.0)
    return chance


def at_least_one(trials: Floats, chance: Floats, rest: Floats) -> Floats:
    """P(Bin(trials, chance) >= 1), accurate when it is tiny."""
    with np.errstate(divide="ignore"):
        log_rest = np.where(chance < 0.5, np.log1p(-np.minimum(chance, 0.5)), np.log(rest))  # noqa: PLR2004
    return -np.expm1(trials * log_rest)


def binomial_between(limit: Floats, trials: Floats, chance: Floats, rest: Floats) -> Floats:
    """P(1 <= Bin(trials, chance) <= limit), accurate when it is tiny."""
    limit, trials, chance, rest = np.broadcast_arrays(limit, trials, chance, rest)
    some = at_least_one(trials, chance, rest)
    at_most = binomial_at_most(limit, trials, chance, rest)
    inside = limit < trials
    too_many = special.betainc(
        np.where(inside, limit + 1.0, 1.0), np.where(inside, trials - limit, 1.0), np.clip(chance, 0.0, 1.0)
    )
    sparse = trials * chance < 1.0
    return np.where(sparse, some - np.where(inside, too_many, 0.0), at_most - (1.0 - some))
