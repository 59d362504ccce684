"""Where the winners sit above a given bid: the inner rules over standard exponentials, and their nested sums."""

from __future__ import annotations

import numpy as np

from mechbench.contract import Floats
from mechbench.engine.exact.places import Contested
from mechbench.engine.exact.resolution import Resolution
from mechbench.engine.exact.rules import EXPONENT, bound, decaying, finite, nested, smooth

__all__ = ["best", "exponential_nodes", "fold", "settle", "typical"]

_DEEPEST = 600.0
"""Log ratio of tail probabilities beyond which nothing is evaluated: they stay above 1e-300."""


def typical(nodes: Contested, units: Floats, resolution: Resolution, growth: float = 0.0) -> tuple[Floats, Floats]:
    """Log ratios from a bid up to the lowest of `units` winners above it (to a typical one for 1), with weights.

    With ``growth`` the amount grows like ``exp(growth * E)``, so the rule is stretched to see its whole mass.
    """
    knots = [np.log(nodes.place.at / knot)[..., None] * units for knot in reversed(nodes.knots_below)]
    exponential, weights = exponential_nodes(knots, resolution, growth)
    return exponential / units, weights


def best(nodes: Contested, units: Floats, resolution: Resolution) -> tuple[Floats, Floats]:
    """Log ratios from a bid up to the best of `units` winners above it, with weights."""
    knots = [
        -units * np.log1p(-np.minimum(knot / nodes.place.at, 1.0 - 1e-16))[..., None] for knot in nodes.knots_below
    ]
    exponential, weights = exponential_nodes(knots, resolution, deep_first=True)
    return -np.log(-np.expm1(-exponential / units)), weights


def exponential_nodes(
    breaks: list[Floats], resolution: Resolution, growth: float = 0.0, *, deep_first: bool = False
) -> tuple[Floats, Floats]:
    """Nodes and nested weights for the mean over a standard exponential, split at rising breaks (..., 1).

    With `deep_first` the far end of the tail is at E = 0 and the function may be singular there.
    """
    nodes, weight = _growing(resolution, growth) if growth > 0 else decaying(resolution.inner)
    if not breaks:
        return nodes, weight
    limit = min(EXPONENT / (1.0 - growth), _DEEPEST)
    pieces, weights = [], []
    left = np.zeros_like(breaks[0][..., 0])
    for piece, stop in enumerate(breaks):
        right = np.clip(stop[..., 0], left, limit)
        if deep_first and piece == 0:
            from_left, _, weight_here = finite(left, right, resolution.cut)
            rule = nested(weight_here)
        else:
            from_left, _, rule = smooth(left, right, resolution.smooth)
        at = left[..., None] + from_left
        pieces.append(at)
        weights.append(rule * np.exp(-at)[..., None])
        left = right
    pieces.append(left[..., None] + nodes)
    weights.append(np.exp(-left)[..., None, None] * weight)
    return np.concatenate(pieces, axis=-1), np.concatenate(weights, axis=-2)


def _growing(resolution: Resolution, growth: float) -> tuple[Floats, Floats]:
    """Nodes and nested weights for the mean over a standard exponential of what grows like ``exp(growth * E)``.

    The rule is stretched to see the whole mass. Where that would leave the floats, it stops at `_DEEPEST` and a
    last node stands for the power tail beyond, whose mean is its edge's over ``1 - growth``.
    """
    stretch = 1.0 / (1.0 - growth)
    nodes, weight = decaying(resolution.inner)
    if stretch * float(nodes[-1]) < _DEEPEST:
        return nodes * stretch, weight * (np.exp(-nodes * stretch * growth) * stretch)[:, None]
    from_zero, _, weight = finite(np.zeros(1), np.full(1, _DEEPEST), resolution.cut)
    rule = nested(weight[0] * np.exp(-from_zero[0]))
    return np.append(from_zero[0], _DEEPEST), np.vstack([rule, np.full(3, np.exp(-_DEEPEST) * stretch)])


def fold(amount: Floats, outer: Floats, *inner: Floats) -> Floats:
    """Weighted sums of an amount (cells, outer nodes, inner nodes ...) under the nested rules.

    Returns
    -------
    array (cells, 9)
        The full sum, then the sums with steps 2 h and 4 h: for the outer rule alone, for each of up to two
        inner rules alone, and for all rules together (their errors can hide behind one another).
    """
    columns = np.empty((amount.shape[0], 9))
    levels = [amount, amount, amount]
    for depth, weights in reversed(list(enumerate(inner))):
        folded = _apply(levels[0], weights)
        for step in (1, 2):
            alone = folded[..., step]
            for shallower in reversed(inner[:depth]):
                alone = _apply(alone, shallower)[..., 0]
            columns[:, 2 + 2 * depth + step] = _apply_outer(alone, outer)[:, 0]
        together = (
            [_apply(levels[step], weights)[..., step] for step in (1, 2)]
            if depth < len(inner) - 1
            else [folded[..., 1], folded[..., 2]]
        )
        levels = [folded[..., 0], *together]
    columns[:, :3] = _apply_outer(levels[0], outer)
    columns[:, 7] = _apply_outer(levels[1], outer)[:, 1]
    columns[:, 8] = _apply_outer(levels[2], outer)[:, 2]
    columns[:, 3 + 2 * len(inner) : 7] = columns[:, :1]
    return columns


def settle(sums: Floats) -> tuple[Floats, Floats]:
    """Value and error bound from the columns of `fold`."""
    full = sums[:, :1]
    rules = np.empty((len(sums), 4, 3))
    rules[..., 0], rules[..., 1], rules[..., 2] = full, sums[:, 1::2], sums[:, 2::2]
    return sums[:, 0], bound(rules, 0.25 * np.abs(full)).sum(axis=1)


def _apply(amount: Floats, weights: Floats) -> Floats:
    """Sum the last axis under nested weights (nodes, 3) or (..., nodes, 3)."""
    if weights.ndim == 2:  # noqa: PLR2004
        return amount @ weights
    summed: Floats = np.einsum("...n,...nr->...r", amount, weights)
    return summed


def _apply_outer(amount: Floats, outer: Floats) -> Floats:
    return (amount[:, None, :] @ outer)[:, 0, :]
