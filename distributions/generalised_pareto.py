"""Generalised Pareto: what lies above a high threshold, whatever the law (Pickands 1975).

``survival(x) = (1 + xi x / scale)^(-1/xi)`` from 0 on, ``e^(-x / scale)`` for xi = 0; for a negative tail
index xi the values end at ``-scale / xi``. With ``L = -log s``,
``Q(s) = scale (e^(xi L) - 1) / xi = scale L exprel(xi L)``, one formula through xi = 0. The law is
alpha-strongly regular with alpha = 1 - xi.

With ``A = e^(-|xi| L)``, ``p = 1 - e^(-|xi| L)`` and ``q = 1 - e^(-|xi| d)`` the relative drop is
``q / (p + A q)`` for xi > 0, ``A q / (p + A q)`` for xi < 0 and ``d / (L + d)`` for xi = 0: sums of
non-negative terms alone.

Sources
-------
1. Pickands 1975, Statistical inference using extreme order statistics, Annals of Statistics 3 (from memory).
2. Embrechts, Klueppelberg & Mikosch 1997, Modelling Extremal Events, section 3.4 (from memory).
"""

from __future__ import annotations

import numpy as np
from scipy.special import exprel

from mechbench.contract import Distribution, Floats, Parameter

__all__ = ["GeneralisedPareto"]


class GeneralisedPareto(Distribution):
    """Values from 0 on with a tail of any index."""

    name = "generalised-pareto"
    title = "a tail of any index, from 0 on"
    parameters = (
        Parameter("tail_index", "above 0 a power tail, below 0 a bounded end", typical=(0.3, 0.0, -0.3, -2.0, 1.5)),
        Parameter("scale", "reciprocal of the density at 0", low=0, typical=(20.0, 1.0), default=1.0),
    )

    def prepare(self) -> None:
        """Read the settings; an index too small to matter is taken as 0."""
        self._xi, self._scale = self.number("tail_index"), self.number("scale")
        if abs(self._xi) < _NO_INDEX:
            self._xi = 0.0
        self._high = self._scale / -self._xi if self._xi < 0 else np.inf

    def upper_quantile(self, s: Floats) -> Floats:
        """Value exceeded with probability `s`; ``inf`` where it is beyond the largest float."""
        return self._at(0.0 - np.log(s))

    def lower_quantile(self, u: Floats) -> Floats:
        """Value not exceeded with probability `u` < 1, to the last digits where it vanishes."""
        return self._at(0.0 - np.log1p(-u))

    def survival(self, x: Floats) -> Floats:
        """P(value > x)."""
        return np.exp(-self._hazard(x))

    def cumulative(self, x: Floats) -> Floats:
        """P(value <= x)."""
        return 0.0 - np.expm1(-self._hazard(x))

    def density(self, x: Floats) -> Floats:
        """Probability density; infinite at a bounded end for a tail index below -1."""
        x = np.asarray(x)
        with np.errstate(divide="ignore", over="ignore", invalid="ignore"):
            height = np.exp(-(1.0 + self._xi) * self._hazard(x)) / self._scale
        if self._xi == -1.0:
            height = np.full_like(height, 1.0 / self._scale)
        return np.where((x < 0) | (x > self._high), 0.0, height)

    @property
    def support(self) -> tuple[float, float]:
        """From 0 to ``-scale / tail_index``, or without end."""
        return 0.0, self._high

    @property
    def tail_index(self) -> float:
        """The tail index itself."""
        return self._xi

    def shortfall(self, s: Floats) -> Floats:
        """Upper end minus ``Q(s)``; ``inf`` when there is no upper end."""
        if self._xi >= 0:
            return np.full(np.shape(s), np.inf)
        return self._high * np.power(s, -self._xi)

    def inverse_hazard(self, s: Floats) -> Floats:
        """``s / density(Q(s))``: ``scale s^(-tail_index)``."""
        with np.errstate(over="ignore"):
            return self._scale * np.power(s, -self._xi)

    def relative_drop(self, s: Floats, log_ratio: Floats) -> Floats:
        """``1 - Q(s) / Q(s * exp(-log_ratio))``."""
        rate = abs(self._xi)
        log_s = np.log(s)
        if rate == 0:
            return log_ratio / ((_LEAST - log_s) + log_ratio)
        further = -np.expm1(-rate * log_ratio)
        here = _LEAST - np.expm1(rate * log_s)
        step = np.exp(rate * log_s) * further
        return np.asarray((further if self._xi > 0 else step) / (here + step))

    def _at(self, hazard: Floats) -> Floats:
        """Value at which the cumulated hazard is reached."""
        with np.errstate(over="ignore"):
            value: Floats = self._scale * hazard * exprel(self._xi * hazard)
        return np.asarray(np.minimum(value, self._high))

    def _hazard(self, x: Floats) -> Floats:
        """Cumulated hazard, ``-log survival``: infinite from the upper end on."""
        part = np.clip(x, 0.0, self._high) / self._scale
        if self._xi == 0:
            return part
        with np.errstate(divide="ignore"):
            return np.log1p(np.maximum(self._xi * part, -1.0)) / self._xi


_NO_INDEX = 1e-18
"""Below it a tail index moves no quantile down to s = 1e-300 by more than a float's last digit."""
_LEAST = 5e-324
"""The smallest float: added to what may be 0, it makes 0 / 0 a plain 0 and changes nothing else."""
