"""Pareto: a pure power tail, ``survival(x) = (x / scale)^(-1/tail_index)`` from `scale` on.

``Q(s) = scale s^(-tail_index)``. The tail index xi is the reciprocal of the Pareto exponent; the mean is
infinite from xi = 1 on. The law is alpha-strongly regular with alpha = 1 - xi.

The relative drop is ``1 - e^(-xi d)``, the same at every `s`.

Sources
-------
1. Johnson, Kotz & Balakrishnan, Continuous Univariate Distributions, vol. 1, 2nd ed. 1994, ch. 20, the Pareto
   law of the first kind (from memory).
"""

from __future__ import annotations

import numpy as np

from mechbench.contract import Distribution, Floats, Parameter

__all__ = ["Pareto"]


class Pareto(Distribution):
    """Values from `scale` on with a pure power tail."""

    name = "pareto"
    title = "a pure power tail from a lowest value on"
    parameters = (
        Parameter("tail_index", "weight of the tail; the mean is infinite from 1 on", low=0, typical=(0.5, 0.1, 2.0)),
        Parameter("scale", "lowest value", low=0, typical=(10.0, 1.0), default=1.0),
    )

    def prepare(self) -> None:
        """Read the settings."""
        self._xi, self._scale = self.number("tail_index"), self.number("scale")

    def upper_quantile(self, s: Floats) -> Floats:
        """Value exceeded with probability `s`; ``inf`` where it is beyond the largest float."""
        with np.errstate(over="ignore"):
            return self._scale * np.power(s, -self._xi)

    def lower_quantile(self, u: Floats) -> Floats:
        """Value not exceeded with probability `u` < 1."""
        with np.errstate(over="ignore"):
            return self._scale * np.exp(-self._xi * np.log1p(-u))

    def survival(self, x: Floats) -> Floats:
        """P(value > x)."""
        return np.power(np.maximum(x, self._scale) / self._scale, -1.0 / self._xi)

    def cumulative(self, x: Floats) -> Floats:
        """P(value <= x), with the digits of x where x nears the lower end."""
        above = np.maximum(np.asarray(x) - self._scale, 0.0) / self._scale
        return 0.0 - np.expm1(np.log1p(above) / -self._xi)

    def density(self, x: Floats) -> Floats:
        """Probability density."""
        at = np.maximum(x, self._scale)
        return np.where(np.asarray(x) < self._scale, 0.0, self.survival(at) / at / self._xi)

    @property
    def support(self) -> tuple[float, float]:
        """From `scale` without end."""
        return self._scale, np.inf

    @property
    def tail_index(self) -> float:
        """The tail index itself."""
        return self._xi

    def inverse_hazard(self, s: Floats) -> Floats:
        """``s / density(Q(s))``: ``tail_index Q(s)``."""
        return self._xi * self.upper_quantile(s)

    def relative_drop(self, s: Floats, log_ratio: Floats) -> Floats:
        """``1 - Q(s) / Q(s * exp(-log_ratio))``: ``1 - e^(-xi d)``, a read-only view where `s` is wider."""
        drop = 0.0 - np.expm1(-self._xi * np.asarray(log_ratio))
        return np.broadcast_to(drop, np.broadcast_shapes(np.shape(s), np.shape(drop)))
