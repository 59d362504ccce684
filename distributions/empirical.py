"""Empirical: what a bid log becomes, a smooth body and a generalised Pareto tail above a threshold.

With ``E = -log s`` (the exponential scale of the upper-tail probability s) the slope ``dQ/dE`` is the
reciprocal of the hazard rate at the value Q. Here it is piecewise linear in E up to the threshold, and
exponential beyond it::

    1 / hazard = b_j + (b_(j+1) - b_j) (E - E_j) / (E_(j+1) - E_j)     between the levels E_j, E_(j+1)
    1 / hazard = scale exp(xi (E - E_u))                               beyond the last level E_u

so that Q is a quadratic spline with a continuous slope, strictly rising in E, and above the threshold u
the generalised Pareto law ``Q = u + scale (exp(xi (E - E_u)) - 1) / xi`` with tail index xi. Both invert in
closed form. The few levels are the only places where Q is less than smooth.

`mechbench.logs.fit` finds the settings from a log; they suffice to build the law again.

Sources
-------
1. Pickands, Statistical inference using extreme order statistics, Annals of Statistics 3 (1975) 119-131: the
   generalised Pareto law above a high threshold (from memory).
"""

from __future__ import annotations

import math
from typing import ClassVar

import numpy as np

from mechbench.contract import Distribution, Floats, InputError, Setting

__all__ = ["Empirical"]


class Empirical(Distribution):
    """Values as a bid log shows them.

    Parameters
    ----------
    tail_index : float
        Extreme-value index xi of the tail above the threshold, of any sign.
    tail_scale : float
        Scale of that tail: the reciprocal hazard rate at the threshold, > 0.
    threshold : float
        Value u from which on the tail holds, > 0.
    tail_share : float
        P(value > threshold), between 0 and 1.
    levels : tuple of float
        Upper-tail probabilities of the body's levels, falling from exactly 1 and above `tail_share`.
    reciprocal_hazards : tuple of float
        ``1 / hazard rate`` at each of them, > 0, in units of the values.

    Raises
    ------
    InputError
        If a setting is out of its domain, or the body reaches below 0.
    """

    name = "empirical"
    title = "fitted to a bid log: a smooth body and a generalised Pareto tail"
    from_log: ClassVar[bool] = True

    def __init__(
        self,
        *,
        tail_index: float,
        tail_scale: float,
        threshold: float,
        tail_share: float,
        levels: tuple[float, ...],
        reciprocal_hazards: tuple[float, ...],
    ) -> None:
        self.settings: dict[str, Setting] = {
            "tail_index": float(tail_index),
            "tail_scale": float(tail_scale),
            "threshold": float(threshold),
            "tail_share": float(tail_share),
            "levels": tuple(float(level) for level in levels),
            "reciprocal_hazards": tuple(float(slope) for slope in reciprocal_hazards),
        }
        self.prepare()

    def prepare(self) -> None:
        """Check the settings together and lay out the pieces of the spline."""
        self._index, self._scale = self.number("tail_index"), self.number("tail_scale")
        self._threshold, share = self.number("threshold"), self.number("tail_share")
        levels = np.append(np.asarray(self.settings["levels"], dtype=np.float64), share)
        slopes = np.append(np.asarray(self.settings["reciprocal_hazards"], dtype=np.float64), self._scale)
        self._check(levels, slopes)
        if abs(self._index) < _NO_INDEX:
            self._index = 0.0
        self._knots = tuple(levels[1:].tolist())
        self._starts = 0.0 - np.log(levels)
        steps = np.diff(self._starts)
        rises = np.append(0.0, np.cumsum(steps * (slopes[:-1] + slopes[1:]) / 2))
        values = self._threshold - (rises[-1] - rises)
        if values[0] < -_ROUNDING * self._threshold:
            _refuse("the body's lower end", values[0], "levels and reciprocal hazards that stay above 0")
        values[0] = max(values[0], 0.0)
        self._values, self._slopes = values, slopes[:-1]
        self._curves = np.diff(slopes) / (2 * steps)
        self._end = float(self._starts[-1])
        self._steps = steps
        self._furthest = _LEAST_SHARE
        if self._index > 0:
            in_floats = self._end + (_LARGEST + math.log(self._index / self._scale)) / self._index
            self._furthest = min(_LEAST_SHARE, in_floats)

    def _check(self, levels: Floats, slopes: Floats) -> None:
        """Refuse settings that make no law."""
        if not math.isfinite(self._index):
            _refuse("tail_index", self._index, "a finite number")
        if not (math.isfinite(self._threshold) and self._threshold > 0):
            _refuse("threshold", self._threshold, "a number above 0")
        if levels.ndim != 1 or levels.size < 2 or levels[0] != 1 or not levels[-1] > 0:  # noqa: PLR2004
            _refuse("levels", levels[:-1].tolist(), "probabilities that start at 1, and a tail_share above 0")
        if not (np.diff(levels) < 0).all():
            _refuse("levels", levels.tolist(), "probabilities that fall, the tail_share last")
        if slopes.shape != levels.shape or not (np.isfinite(slopes).all() and (slopes > 0).all()):
            _refuse("reciprocal_hazards", slopes.tolist(), "one number above 0 for each level")

    @property
    def tail_index(self) -> float:
        """Tail index of the generalised Pareto tail."""
        return self._index

    @property
    def knots(self) -> tuple[float, ...]:
        """The body's inner levels and the threshold's: there the third and the second derivative jump."""
        return self._knots

    @property
    def support(self) -> tuple[float, float]:
        """From the body's lower end to infinity, or to ``threshold + scale / |xi|`` for a negative index."""
        above = -self._scale / self._index if self._index < 0 else math.inf
        return float(self._values[0]), self._threshold + above

    def upper_quantile(self, s: Floats) -> Floats:
        """Value exceeded with probability `s`."""
        return self._quantile(0.0 - np.log(s))

    def lower_quantile(self, u: Floats) -> Floats:
        """Value not exceeded with probability `u` < 1, to the last digits at the lower end."""
        return self._quantile(0.0 - np.log1p(-np.asarray(u)))

    def survival(self, x: Floats) -> Floats:
        """P(value > x)."""
        return np.exp(-self._exponential_scale(x))

    def cumulative(self, x: Floats) -> Floats:
        """P(value <= x)."""
        return 0.0 - np.expm1(-self._exponential_scale(x))

    def density(self, x: Floats) -> Floats:
        """Probability density: the survival over the reciprocal hazard rate."""
        x = np.asarray(x, dtype=np.float64)
        low, high = self.support
        inside = (x >= low) & (x < high)
        scale = self._exponential_scale(np.where(inside, x, low))
        return np.where(inside, np.exp(-scale) / self._slope(scale), 0.0)

    def shortfall(self, s: Floats) -> Floats:
        """Upper end minus ``Q(s)`` of a bounded tail, to the last digits at small s; else infinite."""
        if self._index >= 0:
            return np.full(np.shape(s), math.inf)
        scale = 0.0 - np.log(s)
        body = self._threshold - self._body(np.minimum(scale, self._end))
        return body - self._scale / self._index * np.exp(self._index * np.maximum(scale - self._end, 0.0))

    def inverse_hazard(self, s: Floats) -> Floats:
        """``-dQ(s) / d log s``: as set at the levels, straight between them, a power beyond."""
        return self._slope(0.0 - np.log(s))

    def relative_drop(self, s: Floats, log_ratio: Floats) -> Floats:
        """``1 - Q(s) / Q(s * exp(-log_ratio))``, small ones by steps along the spline."""
        lower = np.minimum(0.0 - np.log(s), self._furthest)
        higher_value = self._quantile(np.minimum(lower + log_ratio, self._furthest))
        drop = np.asarray(higher_value - self._quantile(lower))
        near = drop < _NEAR * higher_value
        if near.any():
            lower, step = (np.broadcast_to(part, drop.shape)[near] for part in (lower, log_ratio))
            drop[near] = self._rise(lower, np.minimum(step, self._furthest - lower))
        return drop / (higher_value + _LEAST)

    def _piece(self, at: Floats) -> tuple[np.ndarray, Floats]:
        """Which piece of the body holds each E <= E_u, and how far into it."""
        piece = np.searchsorted(self._starts[1:-1], at, side="right")
        return piece, at - self._starts[piece]

    def _slope(self, scale: Floats) -> Floats:
        """``dQ/dE`` as a function of E."""
        at = np.minimum(scale, self._end)
        piece, into = self._piece(at)
        body = self._slopes[piece] + 2.0 * into * self._curves[piece]
        with np.errstate(over="ignore"):
            slope: Floats = body * np.exp(self._index * (scale - at))
        return slope

    def _body(self, at: Floats) -> Floats:
        """Q at E <= E_u."""
        value = np.full(np.shape(at), self._values[0])
        into, rise = np.empty_like(value), np.empty_like(value)
        pieces = zip(self._starts[:-1], self._steps, self._slopes, self._curves, strict=True)
        for (
            start,
            step,
            slope,
            curve,
        ) in pieces:  # a gather of each value's own piece takes three times as long
            np.subtract(at, start, out=into)
            np.maximum(into, 0.0, out=into)
            np.minimum(into, step, out=into)
            np.multiply(into, curve, out=rise)
            rise += slope
            rise *= into
            value += rise
        return value

    def _tail(self, beyond: Floats) -> Floats:
        """Rise of Q over a step in E that starts at the threshold."""
        if self._index == 0:
            return self._scale * beyond
        with np.errstate(over="ignore"):
            return self._scale / self._index * np.expm1(self._index * beyond)

    def _quantile(self, scale: Floats) -> Floats:
        """Q as a function of E."""
        at = np.minimum(scale, self._end)
        beyond = scale - at
        return self._body(at) + self._tail(beyond)

    def _exponential_scale(self, x: Floats) -> Floats:
        """Invert `_quantile`: 0 below the support, infinite above it."""
        x = np.asarray(x, dtype=np.float64)
        piece = np.searchsorted(self._values[1:-1], x, side="right")
        above = np.clip(x, self._values[0], self._threshold) - self._values[piece]
        slope = self._slopes[piece]
        root = np.sqrt(np.maximum(slope * slope + 4.0 * self._curves[piece] * above, 0.0))
        body: Floats = np.minimum(self._starts[piece] + 2.0 * above / (slope + root), self._end)
        excess = np.maximum(x - self._threshold, 0.0) / self._scale
        if self._index == 0:
            body += excess
            return body
        with np.errstate(divide="ignore"):
            beyond = np.log1p(np.maximum(self._index * excess, -1.0)) / self._index
        body += beyond if self._index > 0 else np.where(x < self.support[1], beyond, math.inf)
        return body

    def _rise(self, lower: Floats, step: Floats) -> Floats:
        """``Q(E + step) - Q(E)`` as a sum of positive parts, arrays (nodes,)."""
        beyond = np.minimum(step, np.maximum(lower + step - self._end, 0.0))
        within = step - beyond
        start = np.minimum(lower, self._end)
        first, into = self._piece(start)
        last, _ = self._piece(np.minimum(start + within, self._end))
        to_next = np.where(last > first, self._starts[first + 1] - start, within)
        between = np.where(last > first, self._starts[last] - self._starts[first + 1], 0.0)
        rest = np.maximum(within - to_next - between, 0.0)
        rise: Floats = to_next * (self._slopes[first] + (2.0 * into + to_next) * self._curves[first])
        rise += np.where(last > first, self._values[last] - self._values[first + 1], 0.0)
        rise += rest * (self._slopes[last] + rest * self._curves[last])
        rise += np.exp(self._index * np.maximum(lower - self._end, 0.0)) * self._tail(beyond)
        return rise


def _refuse(name: str, found: object, accepted: str) -> None:
    msg = f"family empirical: {name} is {found}; accepted is {accepted}"
    raise InputError(msg)


_ROUNDING = 1e-12
"""Share of the threshold by which a lower end of 0 may come out below 0 for rounding alone."""
_NO_INDEX = 1e-16
"""Size of the tail index below which the tail is exponential to the last digit."""
_NEAR = 1e-3
"""Relative drop below which a difference of quantiles would lose more than 3 digits."""
_LEAST_SHARE = 744.0
"""E of the least float: relative drops from beyond it are taken from there."""
_LARGEST = 709.0
"""Logarithm of the largest float, rounded down: relative drops stop short of values beyond it."""
_LEAST = 5e-324
"""The smallest float: added to what may be 0, it makes 0 / 0 a plain 0 and changes nothing else."""
