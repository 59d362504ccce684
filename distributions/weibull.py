"""Weibull: ``survival(x) = exp(-(x / scale)^shape)``, an exponential value raised to the power 1/shape.

``Q(s) = scale L^(1/shape)`` with ``L = -log s``. The hazard rate rises for a shape above 1 (monotone hazard
rate), is constant at 1 and falls below 1, where the density explodes at 0. The tail index is 0 throughout.

The relative drop is ``-expm1(-log1p(d / L) / shape)``.

Sources
-------
1. Johnson, Kotz & Balakrishnan, Continuous Univariate Distributions, vol. 1, 2nd ed. 1994, ch. 21 (from
   memory).
"""

from __future__ import annotations

import numpy as np

from mechbench.contract import Distribution, Floats, Parameter

__all__ = ["Weibull"]


class Weibull(Distribution):
    """Values whose hazard rate is a power of the value."""

    name = "weibull"
    title = "hazard rate rising or falling like a power"
    parameters = (
        Parameter("shape", "above 1 the hazard rate rises, below 1 it falls", low=0, typical=(1.5, 0.5, 0.2, 20.0)),
        Parameter("scale", "value exceeded by 37 in a hundred", low=0, typical=(25.0, 1.0), default=1.0),
    )

    def prepare(self) -> None:
        """Read the settings."""
        self._shape, self._scale = self.number("shape"), self.number("scale")

    def upper_quantile(self, s: Floats) -> Floats:
        """Value exceeded with probability `s`."""
        with np.errstate(over="ignore"):
            return self._scale * np.power(0.0 - np.log(s), 1.0 / self._shape)

    def lower_quantile(self, u: Floats) -> Floats:
        """Value not exceeded with probability `u` < 1, to the last digits where it vanishes."""
        with np.errstate(over="ignore"):
            return self._scale * np.power(0.0 - np.log1p(-u), 1.0 / self._shape)

    def survival(self, x: Floats) -> Floats:
        """P(value > x)."""
        return np.exp(-self._hazard(x))

    def cumulative(self, x: Floats) -> Floats:
        """P(value <= x)."""
        return 0.0 - np.expm1(-self._hazard(x))

    def density(self, x: Floats) -> Floats:
        """Probability density; infinite at 0 for a shape below 1."""
        part = np.asarray(x) / self._scale
        with np.errstate(divide="ignore", over="ignore"):
            steepness = np.power(np.maximum(part, 0.0), self._shape - 1.0)
        tail = self.survival(x)
        inside = (part >= 0) & (tail > 0)
        return np.where(inside, self._shape / self._scale * np.where(inside, steepness, 0.0) * tail, 0.0)

    @property
    def support(self) -> tuple[float, float]:
        """From 0 without end."""
        return 0.0, np.inf

    def inverse_hazard(self, s: Floats) -> Floats:
        """``s / density(Q(s))``: ``scale L^(1/shape - 1) / shape``."""
        with np.errstate(divide="ignore", over="ignore"):
            steepness = np.power(0.0 - np.log(s), 1.0 / self._shape - 1.0)
        return self._scale / self._shape * steepness

    def relative_drop(self, s: Floats, log_ratio: Floats) -> Floats:
        """``1 - Q(s) / Q(s * exp(-log_ratio))``: ``1 - (1 + d / L)^(-1/shape)``."""
        with np.errstate(over="ignore"):
            rise = log_ratio / (_LEAST - np.log(s))
        return -np.expm1(np.log1p(rise) / -self._shape)

    def _hazard(self, x: Floats) -> Floats:
        """Cumulated hazard, ``-log survival``."""
        with np.errstate(over="ignore"):
            return np.power(np.maximum(x, 0.0) / self._scale, self._shape)


_LEAST = 5e-324
"""The smallest float: added to what may be 0, it makes 0 / 0 a plain 0 and changes nothing else."""
