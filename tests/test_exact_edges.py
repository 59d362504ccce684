"""Where integrals are hard: means made far up a tail, laws cut off, sales that hardly happen."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import special

from mechbench.contract import IdenticalUnits
from mechbench.discovery import family_class, mechanism_class
from mechbench.engine.estimate import Estimate
from mechbench.engine.evaluate import evaluate, evaluate_sizes
from mechbench.engine.exact.order import OrderLaw, binomial_at_most
from mechbench.market.market import Market

OWN = mechanism_class("pay-as-bid")()
LOWEST = mechanism_class("uniform-price")(price_at="last-accepted")


def exactly(market: Market, name: str, rule: object = OWN, threshold: float = 0.05) -> Estimate:
    """Compute one measure exactly."""
    return evaluate(market, rule, [name], method="exact", threshold=threshold)[name]


@pytest.mark.parametrize(
    ("family", "settings", "mean"),
    [("lognormal", {"sigma": sigma, "scale": 1.0}, math.exp(sigma**2 / 2)) for sigma in (1.0, 5.0, 8.0, 15.0)]
    + [("weibull", {"shape": a, "scale": 1.0}, math.gamma(1 + 1 / a)) for a in (0.3, 0.1, 0.05, 0.02)]
    + [("pareto", {"tail_index": xi, "scale": 1.0}, 1 / (1 - xi)) for xi in (0.5, 0.9, 0.95, 0.99)],
)
def test_both_of_two_bids_make_twice_the_mean(family: str, settings: dict[str, float], mean: float):
    """Of two bidders the higher and the lower bid add up to two means, however far up the tail a mean is made."""
    market = Market(family_class(family)(**settings), 2, IdenticalUnits(1))
    higher, lower = exactly(market, "welfare"), exactly(market, "shaded_revenue")
    doubt = higher.error + lower.error + 1e-14 * mean
    assert abs(higher.value + lower.value - 2 * mean) <= doubt
    assert higher.value + lower.value == pytest.approx(2 * mean, rel=1e-9)


@pytest.mark.parametrize("turnout", [0.1, 1e-4, 1e-8, 1e-12])
@pytest.mark.parametrize("bidders", [2, 50])
def test_hardly_anybody_turns_up(turnout: float, bidders: int):
    """Uniform values, one unit: welfare is the mean of the best of those who come, however rarely two do."""
    uniform = family_class("uniform")(low=0.0, high=1.0)
    found = exactly(Market(uniform, bidders, IdenticalUnits(1), turnout), "welfare")
    # 1 - (1 - (1-p)^(n+1)) / (p (n+1)), as a series in p without the cancellation
    those = bidders + 1
    truth = math.fsum(math.comb(those, j) * (-turnout) ** j for j in range(2, those + 1)) / (turnout * those)
    assert found.value == pytest.approx(truth, rel=1e-9)
    assert abs(found.value - truth) <= found.error + 4e-15 * truth


@pytest.mark.parametrize(
    ("chance", "bidders"), [(0.3, 100), (0.35, 100), (0.36, 100), (0.5, 1_000), (0.02, 10**4), (0.9, 30)]
)
def test_a_tiny_share_of_unsold_units_keeps_its_digits(chance: float, bidders: int):
    """With one unit the share left unsold is the chance that nobody bids, to 9 digits however small."""
    uniform = family_class("uniform")(low=0.0, high=1.0)
    found = exactly(Market(uniform, bidders, IdenticalUnits(1), chance), "units_unsold")
    truth = math.exp(bidders * math.log1p(-chance))
    assert found.value == pytest.approx(truth, rel=1e-9)


@pytest.mark.parametrize("family", ["uniform", "pareto"])
@pytest.mark.parametrize("bidders", [10**3, 10**6, 10**9, 10**12])
def test_one_unit_short_of_all_with_a_lowest_value_above_0(family: str, bidders: int):
    """With k = n - 1 and values from 1 on, the two lowest differ by about their slope / n, and all digits are kept."""
    law = {"uniform": {"low": 1.0, "high": 2.0}, "pareto": {"tail_index": 0.5, "scale": 1.0}}[family]
    slope = {"uniform": 1.0, "pareto": 0.5}[family]
    market = Market(family_class(family)(**law), bidders, IdenticalUnits(bidders - 1))
    found = exactly(market, "worst_gain", LOWEST)
    assert found.value == pytest.approx(slope / bidders, rel=5 / bidders + 1e-9)


@pytest.mark.parametrize("price_at", ["first-rejected", "last-accepted"])
def test_an_infinite_expectation_is_a_status(price_at: str):
    """Revenue of a tail index of 1 or more is infinite where the price is an extreme bid, and finite further in."""
    pareto = family_class("pareto")(tail_index=1.5, scale=1.0)
    rule = mechanism_class("uniform-price")(price_at=price_at)
    first = 1 if price_at == "first-rejected" else 2
    assert exactly(Market(pareto, 10, IdenticalUnits(first)), "revenue", rule).status == "ok"
    assert exactly(Market(pareto, 10, IdenticalUnits(first)), "welfare", rule).status == "infinite"
    if first == 2:
        assert exactly(Market(pareto, 10, IdenticalUnits(1)), "revenue", rule).value == math.inf


def test_sizes_together_are_the_sizes_alone():
    """A curve of sizes gives the very numbers of its cells, each within both bounds."""
    values = family_class("weibull")(shape=0.7, scale=1.0)
    markets = [Market(values, n, IdenticalUnits(k), 0.8) for n, k in ((2, 1), (30, 7), (10**5, 40), (10**12, 10**6))]
    for name in ("worst_gain", "mean_gain", "gain_chance", "revenue", "units_unsold"):
        together = evaluate_sizes(markets, OWN, name)
        assert together is not None
        for market, found in zip(markets, together, strict=True):
            alone = exactly(market, name)
            assert abs(found.value - alone.value) <= found.error + alone.error


@pytest.mark.parametrize(("rank", "count"), [(1, 1), (1, 2), (2, 2), (5, 10), (1, 1e12), (1e6, 1e12), (1e12, 1e12)])
@pytest.mark.parametrize("growth", [0.0, 0.9])
def test_the_reach_of_a_law_leaves_nothing_out(rank: float, count: float, growth: float):
    """Beyond its reach the density, times a power of 1/s, is below 1e-14 of its mass; within, it adds up to it."""
    law = OrderLaw(np.array([rank]), np.array([count]))
    low, high = law.reach(growth)
    y = np.linspace(low[0], high[0], 200_001)[None, :]
    s, _, density = law.at(y)
    mass = density * np.where(s > 0, s, 1.0) ** -growth / float(law.mode[0]) ** -growth
    total = np.trapezoid(mass[0], y[0])
    width = float(law.width[0])
    assert mass[0, 0] * max(width, 1 / max(rank - growth, 1e-9)) < 3e-14 * total
    assert mass[0, -1] * width < 3e-14 * total
    if growth == 0:
        assert total == pytest.approx(1.0, rel=1e-7)


def test_huge_binomials_agree_with_the_incomplete_beta_function():
    """The uniform expansion that serves huge counts has scipy's values, near the mean and far from it."""
    for low, high in ((2e8, 2e8), (1.5e8, 1e12), (3e11, 7e11)):
        mean = low / (low + high)
        spread = np.sqrt(mean * (1 - mean) / (low + high))
        chance = mean + spread * np.array([-9.0, -3.0, -1.0, -1e-3, 1e-3, 0.7, 2.0, 6.0])
        found = binomial_at_most(np.array(low - 1), np.array(low + high - 1), chance, 1 - chance)
        expected = special.betaincc(low, high, chance)
        # a rounding of the chance moves the value by up to rounding * 0.4 / spread
        np.testing.assert_allclose(found, expected, rtol=0, atol=2e-12 + 1e-16 * mean / spread)


@pytest.mark.parametrize("units", [10**6, 5 * 10**11, 10**12 - 1])
def test_interim_gains_of_huge_markets_settle(units):
    """Interim gains of 10^12 bidders reach the bound, whatever the number of units."""
    market = Market(family_class("exponential")(scale=1.0), 10**12, IdenticalUnits(units))
    found = evaluate(market, mechanism_class("pay-as-bid")(), ["interim_gain"], method="exact")["interim_gain"]
    assert found.status == "ok"


@pytest.mark.parametrize(("reserve", "turnout"), [(25.0, 1.0), (0.0, 1e-9), (25.0, 1e-3)])
def test_chances_given_a_rare_sale(reserve, turnout):
    """With next to no sale, the one bidder there is gains more than the threshold with a chance in closed form."""
    market = Market(family_class("exponential")(scale=1.0), 100, IdenticalUnits(10, reserve), turnout)
    found = evaluate(market, mechanism_class("pay-as-bid")(), ["gain_chance"], method="exact")["gain_chance"]
    assert found.status == "ok"
    # alone above the reserve r, the bidder gains 1 - r / v: above 0.05 with chance exp(r - r / 0.95)
    alone = np.exp(reserve - reserve / 0.95)
    # a second bidder is there about 50 times the chance of one
    assert abs(found.value - alone) < found.error + 100 * turnout * np.exp(-reserve)
