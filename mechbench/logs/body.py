"""The body of the empirical law: a smooth quantile function below the threshold, from cell means.

The body's slope ``dQ/dE`` in ``E = -log s`` is piecewise linear between a few levels that depend on the size
of the log alone. Below the threshold the sorted bids are cut into cells of fixed shares of the bids; the
slopes at the levels are those, none negative, whose quantile function meets the cells' means best: a
non-negative least squares problem whose matrix is the same for every resample of a log.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from mechbench.contract import Floats

__all__ = ["Body", "body_plan"]


@dataclass(frozen=True)
class Body:
    """What is fixed before a body is fitted.

    Attributes
    ----------
    levels : array (levels + 1,)
        Upper-tail probabilities of the levels, from 1 down to the tail's share.
    cells : array (cells + 1,)
        Shares of the bids, from 0 to ``1 - tail_share``, at which the sorted bids are cut.
    below : array (cells, levels + 1)
        Mean over each cell of ``threshold - Q`` for a slope of 1 at one level and 0 at the others.
    drop : array (levels + 1,)
        The same at the lower end.
    """

    levels: Floats
    cells: Floats
    below: Floats
    drop: Floats

    def slopes(self, means: Floats, threshold: float, tail_scale: float) -> Floats:
        """Slopes ``dQ/dE`` at all levels but the last, where it is the tail's scale.

        Parameters
        ----------
        means : array (cells,)
            Mean bid of each cell, rising.
        threshold, tail_scale : float
            Value and slope at the last level.
        """
        from scipy.optimize import nnls  # noqa: PLC0415 - only a fit needs it

        least = _LEAST_SLOPE * threshold / -math.log(self.levels[-1])
        free = self.below[:, :-1]
        short = threshold - means - self.below[:, -1] * tail_scale - free.sum(axis=1) * least
        weight = np.sqrt(np.diff(self.cells)) / (means + _WEIGHT_FLOOR * np.median(means))
        drop, last = self.drop[:-1], self.drop[-1]
        room = threshold * (1.0 - _MARGIN) - last * tail_scale - drop.sum() * least
        found = nnls(free * weight[:, None], short * weight)[0]
        if found @ drop > room:
            heavy = _HEAVY * weight.max() / drop.max()
            rows = np.vstack([free * weight[:, None], heavy * drop])
            found = nnls(rows, np.append(short * weight, heavy * room))[0]
            found *= min(1.0, room / (found @ drop))
        slopes: Floats = found + least
        return slopes


@lru_cache(maxsize=64)
def body_plan(tail_share: float, widest_last: float = math.inf) -> Body:
    """Lay out levels and cells.

    Parameters
    ----------
    tail_share : float
        Share of the bids above the threshold.
    widest_last : float
        Widest last step in E: a tail that is steep beside its threshold needs a short one, or the body would
        have to start below 0.
    """
    end = -math.log(tail_share)
    low = [level for level in _LOW_LEVELS if level < end - _LEAST_STEP]
    count = min(max(1, math.ceil((end - low[-1]) / _STEP)), _MOST_STEPS)
    levels = np.append(low[:-1], np.linspace(low[-1], end, count + 1))
    if levels[-1] - levels[-2] > widest_last:
        levels = np.insert(levels, -1, end - widest_last)
    edges = [np.linspace(start, stop, _CELLS + 1)[:-1] for start, stop in itertools.pairwise(levels)]
    cells = 0.0 - np.expm1(-np.append(np.concatenate(edges), end))
    cells[-1] = 1.0 - tail_share
    nodes, weights = np.polynomial.legendre.leggauss(_NODES)
    shares = (cells[:-1, None] + cells[1:, None] + np.diff(cells)[:, None] * nodes) / 2
    below = _below(levels, 0.0 - np.log1p(-shares))
    probabilities = np.exp(-levels)
    probabilities[-1] = tail_share
    at_lower_end = _below(levels, np.zeros(1))[0]
    return Body(probabilities, cells, np.einsum("cnl,n->cl", below, weights / 2), at_lower_end)


def _below(levels: Floats, at: Floats) -> Floats:
    """``threshold - Q`` at each E for a slope of 1 at one level and 0 at the others; levels last."""
    steps = np.diff(levels)
    ones = np.eye(levels.size)
    rises = np.vstack([np.zeros(levels.size), np.cumsum(steps[:, None] * (ones[:-1] + ones[1:]) / 2, axis=0)])
    piece = np.clip(np.searchsorted(levels, at, side="right") - 1, 0, steps.size - 1)
    into = (at - levels[piece])[..., None]
    curve = (ones[piece + 1] - ones[piece]) / (2 * steps[piece])[..., None]
    below: Floats = rises[-1] - (rises[piece] + into * (ones[piece] + into * curve))
    return below


_LOW_LEVELS = (0.0, 0.05, 0.25, 0.7)
"""Levels of E near the lower end: 5, 22 and 50 of a hundred bids lie below."""
_STEP, _LEAST_STEP, _MOST_STEPS = 0.9, 0.3, 5
"""Widest step of E above them (narrower ones would follow noise), the least, and how many there may be."""
_CELLS, _NODES = 10, 6
"""Cells between two levels, and Gauss nodes in a cell."""
_WEIGHT_FLOOR = 0.1
"""A cell counts by its relative error, but bids below a tenth of the median are not worth more than those."""
_LEAST_SLOPE = 1e-6
"""Least mean slope as a share of threshold / E_u: Q must rise strictly."""
_MARGIN = 1e-9
"""Share of the threshold by which a lower end stays above 0, so that no rounding takes it below."""
_HEAVY = 1e4
"""Weight of the row that keeps the lower end at 0."""
