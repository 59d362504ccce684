"""Exponential: ``survival(x) = e^(-x / scale)``, the law with a constant hazard rate.

``Q(s) = -scale log s``. It is the border of the monotone hazard rate class (alpha-strongly regular with
alpha = 1 exactly) and the generalised Pareto law with tail index 0.

With ``L = -log s`` the relative drop is ``d / (L + d)``.

Sources
-------
1. Johnson, Kotz & Balakrishnan, Continuous Univariate Distributions, vol. 1, 2nd ed. 1994, ch. 19 (from
   memory).
"""

from __future__ import annotations

import numpy as np

from mechbench.contract import Distribution, Floats, Parameter

__all__ = ["Exponential"]


class Exponential(Distribution):
    """Values with a constant hazard rate; the mean is `scale`."""

    name = "exponential"
    title = "constant hazard rate"
    parameters = (Parameter("scale", "mean value", low=0, typical=(25.0, 1.0), default=1.0),)

    def prepare(self) -> None:
        """Read the settings."""
        self._scale = self.number("scale")

    def upper_quantile(self, s: Floats) -> Floats:
        """Value exceeded with probability `s`."""
        return 0.0 - self._scale * np.log(s)

    def lower_quantile(self, u: Floats) -> Floats:
        """Value not exceeded with probability `u` < 1, to the last digits where it vanishes."""
        return 0.0 - self._scale * np.log1p(-u)

    def survival(self, x: Floats) -> Floats:
        """P(value > x)."""
        return np.exp(np.maximum(x, 0.0) / -self._scale)

    def cumulative(self, x: Floats) -> Floats:
        """P(value <= x)."""
        return 0.0 - np.expm1(np.maximum(x, 0.0) / -self._scale)

    def density(self, x: Floats) -> Floats:
        """Probability density."""
        return np.where(np.asarray(x) < 0, 0.0, self.survival(x) / self._scale)

    @property
    def support(self) -> tuple[float, float]:
        """From 0 without end."""
        return 0.0, np.inf

    def inverse_hazard(self, s: Floats) -> Floats:
        """``s / density(Q(s))``: constant."""
        return np.full(np.shape(s), self._scale)

    def relative_drop(self, s: Floats, log_ratio: Floats) -> Floats:
        """``1 - Q(s) / Q(s * exp(-log_ratio))``: ``d / (L + d)``."""
        return log_ratio / ((_LEAST - np.log(s)) + log_ratio)


_LEAST = 5e-324
"""The smallest float: added to what may be 0, it makes 0 / 0 a plain 0 and changes nothing else."""
