"""Power law on a bounded range: ``cumulative(x) = (x / high)^exponent``.

``Q(s) = high (1 - s)^(1/exponent)``. Exponent 1 is uniform from 0; a large exponent crowds the values at the
high end, a small one at 0. The best of m uniform values is the case of exponent m.

With ``gap = s (1 - e^-d)`` the relative drop is ``-expm1(-log1p(gap / (1 - s)) / exponent)``.

Sources
-------
1. Johnson, Kotz & Balakrishnan, Continuous Univariate Distributions, vol. 2, 2nd ed. 1995, ch. 25: the beta
   law with second parameter 1 (from memory).
"""

from __future__ import annotations

import numpy as np

from mechbench.contract import Distribution, Floats, Parameter

__all__ = ["Power"]


class Power(Distribution):
    """Values on [0, high] whose cumulative is a power."""

    name = "power"
    title = "a power law up to a highest value"
    parameters = (
        Parameter("exponent", "power of the cumulative; 1 is uniform", low=0, typical=(2.0, 0.5, 0.1, 20.0)),
        Parameter("high", "highest value", low=0, typical=(10.0, 1.0), default=1.0),
    )

    def prepare(self) -> None:
        """Read the settings."""
        self._exponent, self._high = self.number("exponent"), self.number("high")

    def upper_quantile(self, s: Floats) -> Floats:
        """Value exceeded with probability `s`."""
        return self.lower_quantile(1.0 - s)

    def lower_quantile(self, u: Floats) -> Floats:
        """Value not exceeded with probability `u`, to the last digits where it vanishes."""
        return self._high * np.power(u, 1.0 / self._exponent)

    def survival(self, x: Floats) -> Floats:
        """P(value > x), with the digits of x where x nears the upper end."""
        part = np.clip(np.asarray(x) / self._high, 0.0, 1.0)
        below = np.clip((np.asarray(x) - self._high) / self._high, -1.0, 0.0)
        with np.errstate(divide="ignore"):
            log_part = np.where(part > 0.5, np.log1p(below), np.log(part))  # noqa: PLR2004
        return 0.0 - np.expm1(self._exponent * log_part)

    def cumulative(self, x: Floats) -> Floats:
        """P(value <= x)."""
        return np.power(np.clip(np.asarray(x) / self._high, 0.0, 1.0), self._exponent)

    def density(self, x: Floats) -> Floats:
        """Probability density; infinite at 0 for an exponent below 1."""
        part = np.asarray(x) / self._high
        inside = (part >= 0) & (part <= 1)
        with np.errstate(divide="ignore", over="ignore"):
            height = self._exponent / self._high * np.power(np.where(inside, part, 1.0), self._exponent - 1.0)
        return np.where(inside, height, 0.0)

    @property
    def support(self) -> tuple[float, float]:
        """From 0 to `high`."""
        return 0.0, self._high

    @property
    def tail_index(self) -> float:
        """-1: the end is reached like a power of order one."""
        return -1.0

    def shortfall(self, s: Floats) -> Floats:
        """Upper end minus ``Q(s)``."""
        with np.errstate(divide="ignore"):
            return -self._high * np.expm1(np.log1p(-s) / self._exponent)

    def inverse_hazard(self, s: Floats) -> Floats:
        """``s / density(Q(s))``: ``high s (1 - s)^(1/exponent - 1) / exponent``."""
        with np.errstate(divide="ignore"):
            steepness = np.power(1.0 - s, 1.0 / self._exponent - 1.0)
        return self._high / self._exponent * s * steepness

    def relative_drop(self, s: Floats, log_ratio: Floats) -> Floats:
        """``1 - Q(s) / Q(s * exp(-log_ratio))``: ``1 - (1 + gap / (1 - s))^(-1/exponent)``."""
        gap = s * -np.expm1(-log_ratio)
        with np.errstate(over="ignore"):
            rise = gap / (1.0 - s + _LEAST)
        return -np.expm1(np.log1p(rise) / -self._exponent)


_LEAST = 5e-324
"""The smallest float: added to what may be 0, it makes 0 / 0 a plain 0 and changes nothing else."""
