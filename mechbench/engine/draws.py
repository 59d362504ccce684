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
from collections.abc import Sequence

import numpy as np

from mechbench.contract import Floats, InputError, Mechanism
from mechbench.market.market import Market

__all__ = ["MOST_BIDS", "bids_at", "depth_of", "generators", "lowest_uniforms", "tiers"]

MOST_BIDS = 2_000_000
"""The most bids of one draw that are held at once: some 15 arrays of this size stay below 256 MiB."""

_TINY = float(np.finfo(np.float64).tiny)
_NARROW = 32
"""Rows up to this wide are summed column by column, which NumPy does faster; the sums are the same."""


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
        msg = (
            f"mechanism {mechanism.name} {why}: {depth} a draw; "
            f"accepted for simulation is at most {MOST_BIDS}"
        )
        raise InputError(msg)
    return depth


def tiers(units: int, bidders: int, depth: int) -> tuple[int, ...]:
    """Ranks at which the next generator takes over; the last is at least `depth`."""
    edges = [min(units + 1, bidders)]
    while edges[-1] < depth:
        edges.append(min(2 * edges[-1], bidders))
    return tuple(edges)


def lowest_uniforms(
    sources: Sequence[np.random.Generator], draws: int, bidders: int, edges: tuple[int, ...]
) -> Floats:
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
    if len(edges) == 1:
        work = sources[0].standard_exponential((draws, edges[0]))
    else:
        widths = np.diff(edges, prepend=0)
        parts = [rng.standard_exponential((draws, width)) for rng, width in zip(sources, widths, strict=True)]
        work = np.concatenate(parts, axis=1)
    width = edges[-1]
    np.divide(work, np.arange(width, dtype=np.float64) - bidders, out=work)
    if width <= _NARROW:
        for column in range(1, width):
            work[:, column] += work[:, column - 1]
    else:
        np.cumsum(work, axis=1, out=work)
    np.expm1(work, out=work)
    np.negative(work, out=work)
    np.maximum(work[:, 0], _TINY, out=work[:, 0])
    return work


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
