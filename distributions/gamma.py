"""Gamma: ``survival(x) = Q(shape, x / scale)``, the regularised upper incomplete gamma function.

The sum of `shape` exponential values where that is a whole number. The hazard rate rises for a shape above 1
(monotone hazard rate) and falls below 1, where the density explodes at 0; the tail index is 0.

The density is written around its peak, ``x f(x) = sqrt(a / 2 pi) e^(-delta(a) - a (t - 1 - log t))`` with
``t = x / (a scale)`` and ``delta`` the remainder of Stirling's formula for ``Gamma(a + 1)``: for a large
shape the usual ``x^(a-1) e^-x / Gamma(a)`` loses the digits of a log-gamma in the thousands.

The inverses of `scipy.special` were within 1e-14 of mpmath for shapes 0.05 to 500 (scipy 1.17), so they stand
uncorrected. A shape below 0.05 is refused: its quantiles leave the range of floats well inside (0, 1).

Sources
-------
1. Johnson, Kotz & Balakrishnan, Continuous Univariate Distributions, vol. 1, 2nd ed. 1994, ch. 17 (from
   memory).
2. NIST Digital Library of Mathematical Functions, equations 8.2.4 (the function) and 5.11.1 (Stirling's
   series) (from memory).
"""

from __future__ import annotations

import math

import numpy as np
from scipy.special import gammainc, gammaincc, gammainccinv, gammaincinv

from mechbench.contract import Distribution, Floats, Parameter

__all__ = ["Gamma"]


class Gamma(Distribution):
    """Values distributed as a sum of `shape` exponential ones of mean `scale`."""

    name = "gamma"
    title = "a sum of exponential values"
    parameters = (
        Parameter(
            "shape",
            "number of exponential values in the sum",
            low=0.05,
            low_included=True,
            high=1e5,
            high_included=True,
            typical=(2.5, 0.05, 0.5, 500.0),
        ),
        Parameter("scale", "mean of each of them", low=0, typical=(10.0, 1.0), default=1.0),
    )

    def prepare(self) -> None:
        """Read the settings."""
        self._shape, self._scale = self.number("shape"), self.number("scale")
        self._log_peak = 0.5 * math.log(self._shape / (2.0 * math.pi)) - _stirling_rest(self._shape)

    def upper_quantile(self, s: Floats) -> Floats:
        """Value exceeded with probability `s`."""
        return np.asarray(self._scale * gammainccinv(self._shape, s))

    def lower_quantile(self, u: Floats) -> Floats:
        """Value not exceeded with probability `u`, to the last digits where it vanishes."""
        return np.asarray(self._scale * gammaincinv(self._shape, u))

    def survival(self, x: Floats) -> Floats:
        """P(value > x)."""
        return np.asarray(gammaincc(self._shape, np.maximum(x, 0.0) / self._scale))

    def cumulative(self, x: Floats) -> Floats:
        """P(value <= x)."""
        return np.asarray(gammainc(self._shape, np.maximum(x, 0.0) / self._scale))

    def density(self, x: Floats) -> Floats:
        """Probability density; infinite at 0 for a shape below 1."""
        x = np.asarray(x)
        inside = (x > 0) & (x < np.inf)
        at = np.where(inside, np.minimum(x, _NOTHING * self._shape * self._scale), self._scale)
        with np.errstate(over="ignore"):
            height = np.where(inside, np.exp(self._log_mass(at / self._scale)) / at, 0.0)
        at_zero = np.inf if self._shape < 1 else (1.0 / self._scale if self._shape == 1 else 0.0)
        return np.where(x == 0, at_zero, height)

    @property
    def support(self) -> tuple[float, float]:
        """From 0 without end."""
        return 0.0, np.inf

    def inverse_hazard(self, s: Floats) -> Floats:
        """``s / density(Q(s))``."""
        part = np.asarray(gammainccinv(self._shape, s), dtype=np.float64)
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.asarray(self._scale * part * np.exp(np.log(s) - self._log_mass(part)))

    def _log_mass(self, part: Floats) -> Floats:
        """``log(x density(x))`` at ``x = part * scale``."""
        t = part / self._shape
        return self._log_peak - self._shape * (t - 1.0 - np.log(t))


_NOTHING = 1e10
"""Beyond so many means the density is 0 in floats."""


def _stirling_rest(a: float) -> float:
    """``log Gamma(a + 1) - (a + 1/2) log a + a - log(2 pi) / 2``, by its series where that has the digits."""
    if a < 15:  # noqa: PLR2004
        return math.lgamma(a + 1.0) - (a + 0.5) * math.log(a) + a - 0.5 * math.log(2.0 * math.pi)
    b = 1.0 / (a * a)
    return (1.0 / 12.0 - b * (1.0 / 360.0 - b * (1.0 / 1260.0 - b / 1680.0))) / a
