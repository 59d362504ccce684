"""Quadrature rules: trapezoidal sums after a change of variable, nested so that the error is seen for free.

After a change of variable under which the integrand dies off doubly exponentially at both ends, the trapezoidal
rule converges exponentially [1]_. Halving the step re-uses every node, so one set of N = 4 m + 1 nodes holds
three rules (step h, 2 h, 4 h), and the differences between them bound the error (`bound`).

.. [1] H. Takahasi and M. Mori, "Double exponential formulas for numerical integration", *Publ. RIMS* 9 (1974),
   721-741.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np

from mechbench.contract import Floats

__all__ = ["EXPONENT", "FURTHEST", "bound", "cut_off", "decaying", "finite", "nested", "settled", "smooth", "tame"]

EXPONENT = 34.0
"""Mass below ``exp(-34) = 2e-15`` of the peak is left out."""

FURTHEST = 5.9
"""Where the tanh-sinh grid ends at the latest: distances from an end then go down to about ``exp(-573)``."""

_EPSILON = float(np.finfo(np.float64).eps)


def tame(lo: Floats, hi: Floats, slow: Floats, nodes: int) -> tuple[Floats, Floats]:
    """Nodes and weights on [lo, hi] around 0 for an integrand with exponentially thin tails.

    Parameters
    ----------
    lo, hi : array (cells,)
        Ends beyond which the integrand is negligible; ``lo < 0 < hi``.
    slow : array (cells,)
        -1 where only the left tail is as slow as an exponential and the right one falls doubly exponentially,
        1 the other way round, 0 where both are slow or both fast.
    nodes : int
        4 m + 1.

    Returns
    -------
    y, weight : arrays (cells, nodes)
    """
    flip = np.where(slow > 0, -1.0, 1.0)
    lo, hi = np.minimum(flip * lo, flip * hi), np.maximum(flip * lo, flip * hi)
    even = slow == 0
    # y(t) is (t + 1 - exp(-t)) / 2, or (t + sinh t) / 2 where both tails are alike: slope 1 at 0.
    # The ends in t are bounds, not inverses.
    start = np.maximum(lo, -np.log1p(-np.where(even, 4.0, 2.0) * lo))
    stop = np.minimum(hi, np.log1p(4.0 * hi)) if even.all() else np.minimum(2.0 * hi, hi + 0.5 * hi * hi)
    if even.any() and not even.all():
        stop = np.where(even, np.minimum(hi, np.log1p(4.0 * hi)), stop)
    step = ((stop - start) / (nodes - 1))[:, None]
    grid = start[:, None] + step * np.arange(nodes)
    if not even.any():
        # expm1 keeps the digits of a node near 0, where the law of very many bidders lives
        falling = np.expm1(-grid)
        y, slope = 0.5 * (grid - falling), 0.5 * (2.0 + falling)
    else:
        both = np.broadcast_to(even[:, None], grid.shape)
        y = 0.5 * (grid + np.where(both, np.sinh(np.where(both, grid, 0.0)), -np.expm1(-grid)))
        slope = 0.5 * (1.0 + np.where(both, np.cosh(np.where(both, grid, 0.0)), np.exp(-grid)))
    return flip[:, None] * y, step * slope


def finite(lo: Floats, hi: Floats, nodes: int, growth: float = 0.0) -> tuple[Floats, Floats, Floats]:
    """Tanh-sinh nodes on [lo, hi], for any behaviour at the ends that is integrable.

    Parameters
    ----------
    lo, hi : arrays of one shape
    nodes : int
    growth : float
        The integrand may grow like the distance from an end to the power ``-growth``, below 1.

    Returns
    -------
    from_lo, from_hi, weight : arrays (..., nodes)
        Distances of each node from the two ends, each with all its digits.
    """
    reach = 3.4 if growth <= 0 else min(float(np.arcsinh((EXPONENT + 12.0) / (1.0 - growth) / np.pi)), FURTHEST)
    near, far, weight = _tanh_sinh(nodes, reach)
    width = (hi - lo)[..., None]
    return width * near, width * far, width * weight


@lru_cache(maxsize=32)
def _tanh_sinh(nodes: int, reach: float) -> tuple[Floats, Floats, Floats]:
    grid = np.linspace(-reach, reach, nodes)
    odds = np.exp(np.pi * np.sinh(grid))
    near, far = odds / (1.0 + odds), 1.0 / (1.0 + odds)
    return near, far, (grid[1] - grid[0]) * np.pi * np.cosh(grid) * near * far


def smooth(lo: Floats, hi: Floats, nodes: int) -> tuple[Floats, Floats, Floats]:
    """Clenshaw-Curtis nodes on [lo, hi] for an integrand that is smooth up to both ends.

    Parameters
    ----------
    lo, hi : arrays of one shape
    nodes : int
        4 m + 1.

    Returns
    -------
    from_lo, from_hi : arrays (..., nodes)
        Distances of each node from the two ends, each with all its digits.
    weights : array (..., nodes, 3)
        Nested: all nodes, every second, every fourth.
    """
    near, weights = _clenshaw_curtis(nodes)
    width = (hi - lo)[..., None]
    return width * near, width * near[::-1], width[..., None] * weights


@lru_cache(maxsize=32)
def _clenshaw_curtis(nodes: int) -> tuple[Floats, Floats]:
    """Nodes and nested weights on [0, 1]."""
    near = np.sin(np.linspace(0.0, 0.5 * np.pi, nodes)) ** 2
    weights = np.zeros((nodes, 3))
    for column, step in enumerate((1, 2, 4)):
        count = (nodes - 1) // step
        angle = np.pi * np.arange(count + 1) / count
        harmonic = np.arange(1, count // 2 + 1)
        share = np.where(2 * harmonic == count, 1.0, 2.0) / (4.0 * harmonic**2 - 1.0)
        rule = (1.0 - np.cos(2.0 * np.outer(angle, harmonic)) @ share) / count
        rule[[0, -1]] *= 0.5
        weights[::step, column] = rule
    return near, weights


def cut_off(lo: Floats, hi: Floats, width: Floats, nodes: int) -> tuple[Floats, Floats]:
    """Nodes on [lo, hi] for a bump of about the given width that may be cut off anywhere, in any way, at hi.

    Doubly exponential towards `hi`, evenly spaced away from it.

    Parameters
    ----------
    lo, hi, width : arrays (cells,)
    nodes : int

    Returns
    -------
    from_hi, weight : arrays (cells, nodes)
        Distance of each node below `hi`, with all its digits.
    """
    span = np.maximum(hi - lo, 1e-300)
    width = np.minimum(width, 0.3 * span)
    # hi - y = width * softplus(t - exp(-t)); the last t is a bound, not an inverse
    level = np.log(np.expm1(np.minimum(span / width, 700.0)))
    stop = level + np.exp(-np.maximum(level, 0.0))
    step = ((stop + 3.6) / (nodes - 1))[:, None]
    grid = -3.6 + step * np.arange(nodes)
    falling = np.exp(-grid)
    bent = np.exp(grid - falling)
    slope = bent / (1.0 + bent) * (1.0 + falling)
    return width[:, None] * np.log1p(bent), width[:, None] * slope * step


@lru_cache(maxsize=32)
def decaying(nodes: int) -> tuple[Floats, Floats]:
    """Nodes E and nested weights w so that ``sum w f(E)`` is the mean of f over a standard exponential.

    The function may be singular like a logarithm or a power at 0, and grow like a power of E.
    """
    ends = np.log1p(EXPONENT + np.sqrt(2.0 * EXPONENT))
    y, weight = tame(np.array([-EXPONENT - 1.0]), np.array([ends]), np.array([-1]), nodes)
    exponential = np.exp(y[0])
    return exponential, nested(weight[0] * exponential * np.exp(-exponential))


def nested(weights: Floats) -> Floats:
    """Stack a rule with the two coarser ones that live on every second and every fourth node.

    Parameters
    ----------
    weights : array (..., nodes)

    Returns
    -------
    array (..., nodes, 3)
        Weights of the steps h, 2 h and 4 h, zero where a coarser rule skips the node.
    """
    stacked = np.zeros((*weights.shape, 3))
    stacked[..., 0] = weights
    stacked[..., ::2, 1] = 2.0 * weights[..., ::2]
    stacked[..., ::4, 2] = 4.0 * weights[..., ::4]
    return stacked


def bound(sums: Floats, size: Floats) -> Floats:
    """Bound on the error of the finest of three nested sums.

    Parameters
    ----------
    sums : array (..., 3)
        Sums with steps h, 2 h and 4 h.
    size : array (...)
        Integral of the absolute value, or more: rounding is a share of it.

    Notes
    -----
    The difference of the first two is about the error of the second. Were there one kind of error, that of the
    first would be smaller by the factor by which the second beat the third, or more; but where a small part of
    the integrand is rougher than the rest, the second may already be down to that part. The square root of the
    factor and 30 in hand cover it. The cube catches a difference that is small by accident: under exponential
    convergence the error of the first is about the fourth power of that of the third.
    """
    fine = np.abs(sums[..., 0] - sums[..., 1])
    coarse = np.abs(sums[..., 1] - sums[..., 2])
    scale = np.where(size > 0, size, 1.0)
    ratio = np.minimum(1.0, 30.0 * np.sqrt(fine / np.maximum(coarse, 1e-300)))
    accident = scale * np.minimum(1.0, coarse / scale) ** 3
    worst: Floats = np.maximum(fine * ratio, np.minimum(accident, coarse)) + 64.0 * _EPSILON * size
    return worst


def settled(integrand: Floats, weights: Floats) -> tuple[Floats, Floats]:
    """Integral of a function of one sign and a bound on its error, arrays (cells,).

    Parameters
    ----------
    integrand : array (cells, nodes)
    weights : array (cells, nodes, 3)
        From `nested`.
    """
    sums = (integrand[:, None, :] @ weights)[:, 0, :]
    return sums[:, 0], bound(sums, np.abs(sums[:, 0]))
