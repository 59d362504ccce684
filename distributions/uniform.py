"""Uniform: every value between a low and a high end is equally likely.

``survival(x) = (high - x) / (high - low)``, ``Q(s) = high - (high - low) s``. The upper end is reached like a
power of order one, so the tail index is -1 (Pickands 1975, the generalised Pareto with xi = -1).

Written as ``low + (high - low) (1 - s)`` the quantile is a sum of non-negative terms and keeps its digits
where it vanishes. With ``gap = s (1 - e^-d)`` the relative drop is
``gap / (low / (high - low) + (1 - s) + gap)``, again without a difference of near numbers.

Sources
-------
1. Johnson, Kotz & Balakrishnan, Continuous Univariate Distributions, vol. 2, 2nd ed. 1995, ch. 26 (from
   memory).
2. Pickands 1975, Statistical inference using extreme order statistics, Annals of Statistics 3 (from memory).
"""

from __future__ import annotations

import numpy as np

from mechbench.contract import Distribution, Floats, InputError, Parameter, number_words

__all__ = ["Uniform"]


class Uniform(Distribution):
    """Values spread evenly from `low` to `high`."""

    name = "uniform"
    title = "evenly spread between two ends"
    parameters = (
        Parameter("low", "lowest value", low=0, low_included=True, typical=(0.0, 5.0), default=0.0),
        Parameter("high", "highest value", low=0, typical=(10.0, 40.0), default=1.0),
    )

    def prepare(self) -> None:
        """Refuse ends that are not in order."""
        self._low, self._high = self.number("low"), self.number("high")
        if self._low >= self._high:
            low, high = number_words(self._low), number_words(self._high)
            msg = f"family uniform: low is {low} and high is {high}; accepted is low below high"
            raise InputError(msg)
        self._width = self._high - self._low

    def upper_quantile(self, s: Floats) -> Floats:
        """Value exceeded with probability `s`."""
        return np.minimum(self._low + self._width * (1.0 - s), self._high)

    def lower_quantile(self, u: Floats) -> Floats:
        """Value not exceeded with probability `u`, to the last digits where it vanishes."""
        return np.minimum(self._low + self._width * u, self._high)

    def survival(self, x: Floats) -> Floats:
        """P(value > x)."""
        return np.clip((self._high - x) / self._width, 0.0, 1.0)

    def cumulative(self, x: Floats) -> Floats:
        """P(value <= x)."""
        return np.clip((x - self._low) / self._width, 0.0, 1.0)

    def density(self, x: Floats) -> Floats:
        """Constant inside the support."""
        return np.where((x < self._low) | (x > self._high), 0.0, 1.0 / self._width)

    @property
    def support(self) -> tuple[float, float]:
        """The two ends."""
        return self._low, self._high

    @property
    def tail_index(self) -> float:
        """-1: the end is reached like a power of order one."""
        return -1.0

    def shortfall(self, s: Floats) -> Floats:
        """Upper end minus ``Q(s)``."""
        return self._width * s

    def inverse_hazard(self, s: Floats) -> Floats:
        """``s / density(Q(s))``: the shortfall."""
        return self._width * s

    def relative_drop(self, s: Floats, log_ratio: Floats) -> Floats:
        """``1 - Q(s) / Q(s * exp(-log_ratio))``: ``gap / (Q(s) / width + gap)``."""
        gap = s * -np.expm1(-log_ratio)
        base = self._low / self._width + (1.0 - s) + _LEAST
        return gap / (base + gap)


_LEAST = 5e-324
"""The smallest float: added to what may be 0, it makes 0 / 0 a plain 0 and changes nothing else."""
