"""The highest bids of a crowd, drawn without drawing the crowd.

Of n independent uniforms the j-th smallest is ``S_(j) = 1 - exp(-sum over i <= j of E_i / (n - i + 1))``, the
E_i standard exponentials [1]_, so the m highest bids ``Q(S_(1)) >= Q(S_(2)) >= ...`` cost O(m) whatever n.

The exponentials of the first ``units + 1`` bids come from one generator, those of the next as many from
another, then twice as many, and so on (`tiers`). A mechanism that looks deeper therefore leaves the bids that
the others see as they were.

.. [1] A. Rényi, "On the theory of order statistics", *Acta Mathematica Academiae Scientiarum Hungaricae* 4
   (1953), 191-231 (from memory; checked against full draws in tests/test_simulate.py).
"""

from __future__ import annotations

import hashlib
from collections.abc import Iterator, Sequence

import numpy as np

from mechbench.contract import Floats, InputError, Mechanism
from mechbench.market.market import Market

__all__ = ["MOST_BIDS", "bids_at", "depth_of", "generators", "lowest_uniforms", "tiers"]

MOST_BIDS = 2_000_000
"""The most bids of one draw that are held at once: some 15 arrays of this size stay below 256 MiB."""

_TINY = float(np.finfo(np.float64).tiny)
_STRETCH = 2**15
"""Longer rows are worked through one by one, in stretches that stay in a cache."""
_NARROW = 32
"""Rows up to this wide are summed column by column, which NumPy does faster; the sums are the same."""
_SMALL = 1e-3
"""Up to here the first five terms of ``1 - exp(x)`` are exact to rounding: the sixth is x^5 / 720 of it."""
_MOSTLY_SMALL = 2e-4
"""Depth as a share of the crowd below which hardly an x is above `_SMALL`."""


def generators(market: Market, seed: int, purpose: int, count: int) -> list[np.random.Generator]:
    """Independent generators that depend on the seed, the market's content and the purpose alone."""
    content = f"{market.values!r} {market.bidders} {market.supply!r} {market.turnout!r}"
    key = np.frombuffer(hashlib.sha256(content.encode()).digest(), dtype=np.uint32)
    return [
        np.random.default_rng(np.random.SeedSequence([seed, *map(int, key)], spawn_key=(purpose, tier)))
        for tier in range(count)
    ]


def depth_of(mechanism: Mechanism, market: Market) -> int:
    """How many of the highest bids the mechanism must see in this market.

    Raises
    ------
    InputError
        If they are more than can be held at once.
    """
    declared = mechanism.depth(market.supply)
    depth = market.bidders if declared is None else min(declared, market.bidders)
    if depth > MOST_BIDS:
        why = "looks at all the bids" if declared is None else "looks at the bids down to the first rejected"
        msg = f"mechanism {mechanism.name} {why}: {depth} a draw; accepted for simulation is at most {MOST_BIDS}"
        raise InputError(msg)
    return depth


def tiers(units: int, bidders: int, depth: int) -> tuple[int, ...]:
    """Ranks at which the next generator takes over; the last is at least `depth`."""
    edges = [min(units + 1, bidders)]
    while edges[-1] < depth:
        edges.append(min(2 * edges[-1], bidders))
    return tuple(edges)


def lowest_uniforms(sources: Sequence[np.random.Generator], draws: int, bidders: int, edges: tuple[int, ...]) -> Floats:
    """Draw the smallest of `bidders` independent uniforms, without the others.

    Parameters
    ----------
    sources : sequence of Generator
        One for each of the `edges`.
    draws, bidders : int
        How many crowds, and how many uniforms in each (up to 10^15 without loss).
    edges : tuple of int
        See `tiers`; the last is how many are returned.

    Returns
    -------
    array (draws, edges[-1])
        Rising along each row, above 0.
    """
    work = np.empty((draws, edges[-1]))
    long = edges[-1] > _STRETCH
    mostly_small = edges[-1] < _MOSTLY_SMALL * bidders
    for rows in np.split(work, draws) if long else [work]:
        before: Floats | float = 0.0
        for rng, start, stop in _pieces(sources, edges):
            part = rows[:, start:stop]
            if part.flags.c_contiguous:
                rng.standard_exponential(out=part)
            else:
                part[...] = rng.standard_exponential(part.shape)
            _falling_sums(part, bidders - start, before)
            before = part[:, -1].copy()
            _one_minus_exp(part, mostly_small=mostly_small)
    np.maximum(work[:, 0], _TINY, out=work[:, 0])
    return work


def _pieces(
    sources: Sequence[np.random.Generator], edges: tuple[int, ...]
) -> Iterator[tuple[np.random.Generator, int, int]]:
    """Give the generator and the ends of each tier, long rows cut further into stretches that stay in a cache."""
    for rng, low, high in zip(sources, (0, *edges[:-1]), edges, strict=True):
        step = _STRETCH if edges[-1] > _STRETCH else high - low
        for start in range(low, high, step):
            yield rng, start, min(start + step, high)


def _falling_sums(x: Floats, bidders: int, before: Floats | float) -> None:
    """Make x the running sums along each row of ``-x_j / (bidders - j)``, on top of `before`."""
    x /= np.arange(x.shape[1], dtype=np.float64) - bidders
    x[:, 0] += before
    if x.shape[1] > _NARROW:
        np.cumsum(x, axis=1, out=x)
        return
    for j in range(1, x.shape[1]):
        x[:, j] += x[:, j - 1]


def _one_minus_exp(x: Floats, *, mostly_small: bool) -> None:
    """``1 - exp(x)`` in place, for x <= 0 falling along rows; where x is small by its series, which is faster."""
    if not mostly_small:
        np.expm1(x, out=x)
        np.negative(x, out=x)
        return
    large = x < -_SMALL if (x[:, -1] < -_SMALL).any() else None
    exact = None if large is None else -np.expm1(x[large])
    series = x / -120.0
    for coefficient in (1.0 / 24.0, 1.0 / 6.0, 1.0 / 2.0):
        series -= coefficient
        series *= x
    series -= 1.0
    x *= series
    if large is not None:
        x[large] = exact


def bids_at(market: Market, tails: Floats) -> Floats:
    """Truthful bids at upper-tail probabilities of the whole crowd, 0 for who did not turn up.

    `tails` is overwritten.
    """
    if market.turnout == 1.0:
        return market.values.upper_quantile(tails)
    tails /= market.turnout
    absent = tails >= 1.0
    np.minimum(tails, 1.0, out=tails)
    bids = np.array(market.values.upper_quantile(tails))
    bids[absent] = 0.0
    return bids
