"""95 % intervals for means and ratios of means, from the sums of equal batches of draws.

Every simulated measure is a ratio ``R = sum of X / sum of D`` over independent draws. Its half-width comes
from the scatter over the batches of ``X - R D`` (the delta method) and Student's t. Where X is 0 in most
batches that scatter says too little, and nothing at all where X never showed; the half-width then grows by
the terms that Wilson's score interval [1]_ adds for a proportion, at the scale of the X seen. A share is
therefore never reported without error for having come out 0 in finitely many draws. Chances use Wilson's
interval itself.

The half-width is the distance from the estimate to the farther end of the interval while five events or fewer
were seen. That end is on one side only, and to claim it on both covers too much (97 % at 60 events), so the
shift of the interval's centre fades beyond, as 5 over the events seen. A chance is then covered at least 94.2 %
of the time everywhere, and at most 96.8 % from 20 events on (computed in tests/test_simulate.py).

.. [1] E. B. Wilson, "Probable inference, the law of succession, and statistical inference", *Journal of the
   American Statistical Association* 22 (1927), 209-212.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.special import stdtrit

from mechbench.contract import Floats

__all__ = ["Ratio", "chance_half_width", "difference_half_width"]

_Z = 1.959963984540054
"""The 97.5 % point of the normal law."""
_FEW = 5.0
"""Events up to which the shift of Wilson's interval counts in full."""
_SAME = 1e-12
"""Relative scatter below which batches count as all the same."""
_ROUNDING = float(np.finfo(np.float64).eps)
"""What the arithmetic of a draw may leave in a share; it shows only where shares are as small."""


@dataclass(frozen=True)
class Ratio:
    """A measure as sums over equal batches of independent draws: ``start + sign * sum(top) / sum(under)``.

    Attributes
    ----------
    top, under : array (batches,)
        Sums of X and of D.
    count : float
        Draws that tell about the ratio: those with D above 0.
    bound : float
        The most that the ratio is taken to be where no X other than 0 was seen: 1 for a share.
    chance : bool
        Whether X is 0 or 1 and D counts the draws.
    start, sign : float
    """

    top: Floats
    under: Floats
    count: float
    bound: float = 1.0
    chance: bool = False
    start: float = 0.0
    sign: float = 1.0

    @property
    def known(self) -> bool:
        """Whether any draw tells about the ratio."""
        return bool(self.under.any())

    @property
    def value(self) -> float:
        """The estimate."""
        return self.start + self.sign * float(self.top.sum() / self.under.sum())

    @property
    def half_width(self) -> float:
        """Half-width of the 95 % interval around the estimate."""
        if self.chance:
            return chance_half_width(float(self.top.sum()), self.count)
        total = float(self.under.sum())
        residual = self.top - self.top.sum() / total * self.under
        return _half_width(residual, self.top, self.count, self.bound * total) / total


def chance_half_width(hits: float, count: float) -> float:
    """Half-width for a chance of which `hits` of `count` independent draws tell, after Wilson."""
    chance = hits / count
    shift = 0.5 * _Z**2 * abs(1.0 - 2.0 * chance) * _fading(min(hits, count - hits))
    spread = _Z * math.sqrt(count * chance * (1.0 - chance) + 0.25 * _Z**2)
    return (shift + spread) / (count + _Z**2)


def difference_half_width(first: Ratio, second: Ratio) -> float:
    """Half-width of ``first - second``, both over the same draws."""
    apart, drift = np.zeros_like(first.top), np.zeros_like(first.top)
    for ratio, side in ((first, first.sign), (second, -second.sign)):
        total = float(ratio.under.sum())
        apart += side * ratio.top / total
        drift += side * ratio.top.sum() / total**2 * ratio.under
    count, bound = min(first.count, second.count), max(first.bound, second.bound)
    return _half_width(apart - drift, apart, count, bound)


def _half_width(residual: Floats, top: Floats, count: float, bound: float) -> float:
    """Half-width of the sum of `top`, whose part that scatters is `residual`, arrays (batches,)."""
    batches = len(residual)
    seen = int(np.count_nonzero(top))
    scatter = float((residual**2).sum()) * batches / (batches - 1)
    if scatter <= (_SAME * float(np.abs(top).sum())) ** 2:
        return _Z**2 / (count + _Z**2) * bound
    rare = max(0.0, 1.0 - 2.0 * seen / batches)
    scale = math.sqrt(float((top**2).sum()) / seen)
    quantile = float(stdtrit(batches - 1, 0.975))
    spread = math.sqrt(quantile**2 * scatter + rare * (0.5 * _Z**2 * scale) ** 2)
    return 0.5 * rare * _fading(seen) * _Z**2 * scale + spread + _ROUNDING * bound


def _fading(events: float) -> float:
    return min(1.0, _FEW / max(events, 1.0))
