"""What an exact cell costs, as ratios to a plain nested quadrature of the same integral, all in one run.

Run with ``pytest benchmarks -s``. The yardstick integrates the worst gain of pay-as-bid,
``1 - Q(s) / Q(s x)`` over the laws of s = S_(k+1) and x = S_(1) / S_(k+1), with scipy's dblquad and functions from
`math`, asked for an error of 1e-9; the engine is asked for the same and returns its error bound as well.
"""

from __future__ import annotations

import math
import os
import time
from collections.abc import Callable, Sequence

import numpy as np
import pytest
from scipy import integrate

from mechbench.contract import IdenticalUnits
from mechbench.discovery import family_class, mechanism_class
from mechbench.engine.evaluate import evaluate_sizes
from mechbench.market.market import Market

UNITS = 31
PAY_AS_BID = mechanism_class("pay-as-bid")()
FAMILIES: dict[str, tuple[dict[str, float], Callable[[float], float]]] = {
    "exponential": ({"scale": 1.0}, lambda s: -math.log(s)),
    "weibull": ({"shape": 1.4, "scale": 30.0}, lambda s: 30.0 * (-math.log(s)) ** (1 / 1.4)),
    "pareto": ({"tail_index": 0.3, "scale": 1.0}, lambda s: s**-0.3),
}


def _markets(family: str, sizes: Sequence[int]) -> list[Market]:
    values = family_class(family)(**FAMILIES[family][0])
    return [Market(values, n, IdenticalUnits(UNITS)) for n in sizes]


def _yardstick(quantile: Callable[[float], float], n: int, k: int) -> float:
    log_norm = math.lgamma(n + 1) - math.lgamma(k + 1) - math.lgamma(n - k)

    def integrand(x: float, s: float) -> float:
        if x <= 0:
            return 0.0
        density = math.exp(log_norm + k * math.log(s) + (n - k - 1) * math.log1p(-s))
        return (1 - quantile(s) / quantile(s * x)) * k * (1 - x) ** (k - 1) * density

    mode, spread = k / n, math.sqrt(k) / n
    low, high = max(1e-300, mode - 12 * spread), min(1 - 1e-16, mode + 14 * spread)
    return integrate.dblquad(integrand, low, high, 0, 1, epsabs=1e-9, epsrel=1e-9)[0]


def _best_of(call: Callable[[], object], repeats: int) -> float:
    times = []
    for _ in range(repeats):
        start = time.perf_counter()
        call()
        times.append(time.perf_counter() - start)
    return min(times)


@pytest.mark.parametrize("family", FAMILIES)
def test_one_cell(benchmark, family):
    """One exact cell against the yardstick."""
    (market,) = _markets(family, range(1000, 1001))
    quantile = FAMILIES[family][1]
    estimate = benchmark(lambda: evaluate_sizes([market], PAY_AS_BID, "worst_gain"))[0]
    assert estimate.error <= 1e-9
    assert abs(estimate.value - _yardstick(quantile, 1000, UNITS)) < 1e-8
    ratio = _best_of(lambda: _yardstick(quantile, 1000, UNITS), 5) / benchmark.stats.stats.min
    benchmark.extra_info["times faster than dblquad"] = round(ratio)
    print(f"\none cell, {family}: {ratio:.0f} x dblquad ({os.cpu_count()} cores)")


@pytest.mark.parametrize("family", FAMILIES)
def test_a_curve_of_sizes(benchmark, family):
    """Two hundred sizes of one family in one call, per cell, against the yardstick."""
    sizes = np.unique(np.geomspace(100, 1e12, 200).astype(int)).tolist()
    markets = _markets(family, sizes)
    estimates = benchmark(lambda: evaluate_sizes(markets, PAY_AS_BID, "worst_gain"))
    assert all(estimate.error <= 1e-9 for estimate in estimates)
    cell = benchmark.stats.stats.min / len(markets)
    ratio = _best_of(lambda: _yardstick(FAMILIES[family][1], 1000, UNITS), 5) / cell
    benchmark.extra_info["times faster than dblquad"] = round(ratio)
    print(f"\na cell of a curve, {family}: {ratio:.0f} x dblquad ({os.cpu_count()} cores)")


def test_flat_in_the_number_of_bidders(benchmark):
    """A cell of 10^12 bidders costs what one of 100 does."""
    small, large = _markets("exponential", range(100, 101)) + _markets("exponential", range(10**12, 10**12 + 1))
    benchmark(lambda: evaluate_sizes([large], PAY_AS_BID, "worst_gain"))
    ratio = benchmark.stats.stats.min / _best_of(lambda: evaluate_sizes([small], PAY_AS_BID, "worst_gain"), 200)
    benchmark.extra_info["cost against 100 bidders"] = round(ratio, 2)
    print(f"\n10^12 bidders against 100: {ratio:.2f} x the time")
