"""What top-only draws cost, as ratios measured in one run (design bounds: at most 4, at least 50 and 4,000).

Run with ``pytest benchmarks/test_simulated_draws.py -s``; every ratio is printed. A bound on a ratio of two
times in one run is asserted; a time never is.
"""

from __future__ import annotations

import time
from collections.abc import Callable

import numpy as np
import pytest

from mechbench.contract import Floats
from mechbench.discovery import family_class
from mechbench.engine.simulated.draws import lowest_uniforms

_BIDS = 2**15


def _ratio(one: Callable[[], object], other: Callable[[], object], repeats: int = 60) -> float:
    """Least time of one over the least of the other, taken in turns so that both meet the same machine."""
    least = [float("inf")] * 2
    for _ in range(repeats):
        for place, work in enumerate((one, other)):
            start = time.perf_counter()
            work()
            least[place] = min(least[place], time.perf_counter() - start)
    return least[0] / least[1]


def _top(rng: np.random.Generator, bidders: int, depth: int) -> tuple[Callable[[], Floats], int]:
    draws = max(1, _BIDS // depth)
    return lambda: lowest_uniforms([rng], draws, bidders, (depth,)), draws


@pytest.mark.parametrize("bidders", [1_000, 10**12])
@pytest.mark.parametrize("depth", [2, 11, 101, 500_001])
def test_against_drawing_exponentials(bidders, depth):
    """The draws cost at most 4 times as many standard exponentials from NumPy."""
    if depth >= bidders:
        pytest.skip("deeper than the crowd")
    rng = np.random.default_rng(1)
    work, draws = _top(rng, bidders, depth)
    ratio = _ratio(work, lambda: rng.standard_exponential((draws, depth)))
    print(f"\ntop {depth} of {bidders}: {ratio:.2f} x the same number of exponentials")
    assert ratio <= 4


@pytest.mark.parametrize(("bidders", "least"), [(1_000, 50), (100_000, 4_000)])
def test_against_full_draws(bidders, least):
    """For 10 units, the draws beat sampling all bids and partitioning by the factor of the design (uniform values)."""
    rng = np.random.default_rng(1)
    values = family_class("uniform")(low=0.0, high=1.0)
    depth = 11
    tails, draws = _top(rng, bidders, depth)
    rows = max(1, 2**20 // bidders)

    def full() -> Floats:
        bids = values.upper_quantile(rng.random((rows, bidders)))
        return np.partition(bids, bidders - depth, axis=1)[:, -depth:]

    ratio = _ratio(full, lambda: values.upper_quantile(tails())) * draws / rows
    print(f"\ntop {depth} of {bidders}: {ratio:.0f} x faster than sampling all bids and partitioning")
    assert ratio >= least
