"""From a bid log to a law of values, and to the log's own sampling error.

The threshold rule: the tail is the ``3 sqrt(bids)`` highest bids (no more than half of them), that is 42 of
200, 134 of 2,000, 671 of 50,000. The tail is `mechbench.logs.tail`'s, the body below it that of
`mechbench.logs.body`; together they make the family `empirical`.

The sampling error comes from a bootstrap that repeats everything, threshold and tail included, on resampled
logs: whole auctions where the log tells them apart, single bids otherwise.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from mechbench import discovery
from mechbench.contract import Distribution, Floats
from mechbench.logs.body import body_plan
from mechbench.logs.tail import Tail, fit_tail

if TYPE_CHECKING:
    from mechbench.logs.read import BidLog
    from mechbench.market.market import Market

__all__ = ["Fit", "depends_on_tail", "fit_log", "log_interval", "resampled_fits"]


@dataclass(frozen=True)
class Fit:
    """A law of values fitted to a bid log.

    Attributes
    ----------
    values : Distribution
        The `empirical` family with its settings.
    bids : int
        Bids above 0 that it rests on.
    threshold : float
        Value from which on the tail is generalised Pareto, in the log's currency.
    exceedances : int
        Bids above it.
    tail_index, tail_index_error : float
        Tail index and its standard error.
    tail_scale : float
        Scale of the tail, in the log's currency.
    misfit : float
        How far the smooth law is from the log at most: the largest relative gap between a cell's mean bid in the
        log and in the law, over the cells between the median and the threshold. Resampling does not see it.
    notes : tuple of str
        What a reader of the numbers should know about the log, in sentences.
    """

    values: Distribution
    bids: int
    threshold: float
    exceedances: int
    tail_index: float
    tail_index_error: float
    tail_scale: float
    misfit: float
    notes: tuple[str, ...]


def fit_log(log: BidLog) -> Fit:
    """Fit the `empirical` family to a log.

    The threshold stands half-way between the two bids that the threshold rule parts.

    Parameters
    ----------
    log : BidLog
        As `mechbench.logs.read.read_log` gives it.

    Returns
    -------
    Fit
    """
    fit = _fit(log, log.weights.astype(np.float64), discovery.family_class("empirical"))
    if fit.misfit < _LARGE_MISFIT:
        return fit
    note = (
        f"The smooth law misses the upper half of the log by up to {100 * fit.misfit:.0f} % of a bid (bids in "
        f"clusters, or a few popular ones): the log's sampling error does not cover that."
    )
    return replace(fit, notes=(*fit.notes, note))


def resampled_fits(log: BidLog, count: int, rng: np.random.Generator) -> Iterator[Fit]:
    """Refit, threshold and tail included, on `count` logs resampled from this one.

    Whole auctions are drawn where the log tells them apart: bids of one auction are seldom independent. Of a
    summary every value is drawn as often as a multinomial law of its weights gives.

    Parameters
    ----------
    log : BidLog
    count : int
        How many resamples; 200 give the intervals whose coverage is tested.
    rng : Generator

    Yields
    ------
    Fit
    """
    family = discovery.family_class("empirical")
    for _ in range(count):
        yield _fit(log, _resampled_weights(log, rng), family)


def log_interval(point: float, resampled: Sequence[float] | Floats) -> tuple[float, float, float]:
    """Return the 95 % interval of a number that rests on a log, and its half-width.

    Parameters
    ----------
    point : float
        The number from the log itself, >= 0.
    resampled : sequence of float
        The same number from each of `resampled_fits`.

    Returns
    -------
    low, high : float
        1.96 root mean square deviations of the resampled numbers from the point, to either side, on the scale
        of logarithms: ``point * exp(+-1.96 rms)``. Deviations from the point rather than from their mean let
        the interval answer for the bootstrap's own bias. Where a number is 0 the scale is the plain one.
    half_width : float
        Half of ``high - low``. Infinite, like `high`, if a resampled number is infinite.

    Raises
    ------
    ValueError
        If there are fewer than two resampled numbers.
    """
    others = np.asarray(resampled, dtype=np.float64)
    if others.size < 2:  # noqa: PLR2004
        msg = f"an interval needs at least 2 resampled numbers, not {others.size}"
        raise ValueError(msg)
    finite = others[np.isfinite(others)]
    if math.isinf(point) or finite.size == 0:
        return 0.0, math.inf, math.inf
    if point > 0 and (finite > 0).all():
        spread = math.exp(_NORMAL * math.sqrt(float(np.mean(np.log(finite / point) ** 2))))
        low, high = point / spread, point * spread
    else:
        reach = _NORMAL * math.sqrt(float(np.mean((finite - point) ** 2)))
        low, high = max(point - reach, 0.0), point + reach
    if finite.size < others.size:
        high = math.inf
    return low, high, (high - low) / 2


def depends_on_tail(bids: int, market: Market) -> str | None:
    """Say that a market's numbers rest on the fitted tail rather than on bids that were seen, if they do.

    The best of n bidders typically sits where one value in n is higher. Of so high a value a log of N bids
    shows about N / n; where that is under 10, its sampling error exceeds 30 % and the generalised Pareto
    form, an extrapolation, carries the number.

    Parameters
    ----------
    bids : int
        Bids above 0 in the log.
    market : Market

    Returns
    -------
    str or None
        A note to put beside the numbers, or ``None`` if the log reaches as far as the market.
    """
    turn_up = market.bidders * market.turnout
    seen = bids / turn_up
    if seen >= _ENOUGH_SEEN:
        return None
    return (
        f"depends on the tail: the best of {turn_up:,.0f} bidders lies where a log of {bids:,} bids shows "
        f"about {seen:.1g} ({_ENOUGH_SEEN} would do), so the fitted tail, not the log alone, gives the number"
    )


def _fit(log: BidLog, weights: Floats, family: type[Distribution]) -> Fit:
    """Fit tail and body to the log's values, each as often as its weight says."""
    reached = np.cumsum(weights)
    total = reached[-1]
    tail_share = _tail_share(log.bids)
    threshold, tail = _tail_above(log.values, weights, reached, total * (1.0 - tail_share))
    plan = body_plan(tail_share)
    if tail.scale * math.log(plan.levels[-2] / tail_share) > threshold:
        plan = body_plan(tail_share, threshold / (2.0 * tail.scale))
    sums = np.append(0.0, np.cumsum(log.values * weights))
    at_cells = np.interp(plan.cells * total, np.append(0.0, reached), sums)
    means = np.diff(at_cells) / (np.diff(plan.cells) * total)
    slopes = plan.slopes(means, threshold, tail.scale)
    settings: dict[str, float | tuple[float, ...]] = {
        "tail_index": tail.index,
        "tail_scale": tail.scale,
        "threshold": threshold,
        "tail_share": tail_share,
        "levels": tuple(plan.levels[:-1].tolist()),
        "reciprocal_hazards": tuple(slopes.tolist()),
    }
    upper = plan.cells[1:] > 0.5  # noqa: PLR2004 - the median
    smooth = threshold - plan.below @ np.append(slopes, tail.scale)
    misfit = float(np.abs(smooth / means - 1.0)[upper].max(initial=0.0))
    return Fit(
        values=family(**settings),
        bids=round(total),
        threshold=threshold,
        exceedances=round(total * tail_share),
        tail_index=tail.index,
        tail_index_error=tail.index_error,
        tail_scale=tail.scale,
        misfit=misfit,
        notes=log.notes,
    )


def _tail_above(values: Floats, weights: Floats, reached: Floats, cut: float) -> tuple[float, Tail]:
    """Find the threshold below which `cut` bids lie, and fit the tail above it; `reached` are summed weights."""
    last = int(np.searchsorted(reached, cut * (1.0 - _ROUNDING)))
    first = int(np.searchsorted(reached, cut * (1.0 + _ROUNDING), side="right"))
    threshold = float(values[last] + values[first]) / 2
    excesses = np.maximum(values[first:] - threshold, _LEAST_EXCESS * threshold)
    tail_weights = weights[first:].copy()
    tail_weights[0] = reached[first] - cut
    there = tail_weights > 0
    tail = fit_tail(excesses[there], tail_weights[there])
    scale = min(max(tail.scale, _LEAST_SCALE * threshold), _MOST_SCALE * threshold)
    return threshold, replace(tail, scale=scale)


def _tail_share(bids: int) -> float:
    """Share of the bids that make the tail."""
    return min(round(_TAIL_BIDS * math.sqrt(bids)), bids // 2) / bids


def _resampled_weights(log: BidLog, rng: np.random.Generator) -> Floats:
    """How often each value of the log occurs in a resample of it."""
    if log.auctions is not None:
        drawn = rng.integers(log.auction_count, size=log.auction_count)
        times = np.bincount(drawn, minlength=log.auction_count)
        return times[log.auctions].astype(np.float64)
    if log.exact:
        drawn = rng.integers(log.bids, size=log.bids)
        return np.bincount(drawn, minlength=log.bids).astype(np.float64)
    return rng.multinomial(log.bids, log.weights / log.bids).astype(np.float64)


_NORMAL = 1.959964
"""Two-sided 5 % point of the normal law."""
_TAIL_BIDS = 3.0
_ENOUGH_SEEN = 10
_LARGE_MISFIT = 0.15
_LEAST_EXCESS = 1e-12
"""Least excess as a share of the threshold, for bids that equal it."""
_LEAST_SCALE, _MOST_SCALE = 1e-6, 1e6
"""Bounds on the scale of the tail as a share of the threshold, for exceedances that all but equal it or dwarf it."""
_ROUNDING = 1e-12
