"""Lognormal: the logarithm of the value is normal, ``survival(x) = ndtr(-log(x / scale) / sigma)``.

``Q(s) = scale e^(sigma z)`` with ``z = -ndtri(s)``; `scale` is the median. The tail index is 0, yet the tail
is heavier than any exponential. The class depends on sigma: alpha-strongly regular with a positive alpha for
a small sigma, irregular for a large one. The inverse hazard rate is ``sigma Q(s) m(z)`` with
``m(z) = sqrt(pi / 2) erfcx(z / sqrt 2)`` (Mills' ratio).

`scipy.special.ndtri` was within 2e-16 of mpmath from s = 1e-320 to 1 - 1e-12 (scipy 1.17), so it stands
uncorrected; the exponential turns that into about ``1e-16 sigma |z|`` of the value. A sigma above 15 is
refused: its quantiles leave the range of floats above s = 1e-300.

Sources
-------
1. Johnson, Kotz & Balakrishnan, Continuous Univariate Distributions, vol. 1, 2nd ed. 1994, ch. 14 (from
   memory).
"""

from __future__ import annotations

import math

import numpy as np
from scipy.special import erfcx, ndtr, ndtri

from mechbench.contract import Distribution, Floats, Parameter

__all__ = ["Lognormal"]


class Lognormal(Distribution):
    """Values whose logarithm is normal; `scale` is the median."""

    name = "lognormal"
    title = "normal on a logarithmic scale"
    parameters = (
        Parameter(
            "sigma",
            "standard deviation of the logarithm",
            low=0,
            high=15,
            high_included=True,
            typical=(0.8, 0.1, 3.0),
        ),
        Parameter("scale", "median value", low=0, typical=(23.0, 1.0), default=1.0),
    )

    def prepare(self) -> None:
        """Read the settings."""
        self._sigma, self._scale = self.number("sigma"), self.number("scale")

    def upper_quantile(self, s: Floats) -> Floats:
        """Value exceeded with probability `s`; ``inf`` where it is beyond the largest float."""
        with np.errstate(over="ignore"):
            return np.asarray(self._scale * np.exp(-self._sigma * ndtri(s)))

    def lower_quantile(self, u: Floats) -> Floats:
        """Value not exceeded with probability `u`, to the last digits where it vanishes."""
        with np.errstate(over="ignore"):
            return np.asarray(self._scale * np.exp(self._sigma * ndtri(u)))

    def survival(self, x: Floats) -> Floats:
        """P(value > x)."""
        return np.asarray(ndtr(-self._deviation(x)))

    def cumulative(self, x: Floats) -> Floats:
        """P(value <= x)."""
        return np.asarray(ndtr(self._deviation(x)))

    def density(self, x: Floats) -> Floats:
        """Probability density."""
        z = self._deviation(x)
        with np.errstate(over="ignore"):
            height = np.exp(-0.5 * z * z) / (math.sqrt(2.0 * math.pi) * self._sigma)
        inside = np.isfinite(z)
        return np.where(inside, height / np.where(inside, x, 1.0), 0.0)

    @property
    def support(self) -> tuple[float, float]:
        """From 0 without end."""
        return 0.0, np.inf

    def inverse_hazard(self, s: Floats) -> Floats:
        """``s / density(Q(s))``: the slope of the exponential times Mills' ratio."""
        z = -ndtri(s)
        mills = math.sqrt(math.pi / 2.0) * erfcx(z / math.sqrt(2.0))
        with np.errstate(over="ignore", invalid="ignore"):
            return np.asarray(self._sigma * self._scale * np.exp(self._sigma * z) * mills)

    def _deviation(self, x: Floats) -> Floats:
        """How many standard deviations the logarithm lies above the median's."""
        with np.errstate(divide="ignore", over="ignore"):
            return np.log(np.maximum(x, 0.0) / self._scale) / self._sigma
