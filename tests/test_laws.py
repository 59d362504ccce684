"""Laws of the rules, on draws and on exact values, and the counterexamples to what is not a law."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as arrays

from mechbench.contract import MEASURES, MONEY, Distribution, Floats, IdenticalUnits
from mechbench.discovery import family_class, mechanism_class
from mechbench.engine.evaluate import evaluate
from mechbench.market.market import Market

OWN = mechanism_class("pay-as-bid")()
REJECTED = mechanism_class("uniform-price")(price_at="first-rejected")
LOWEST = mechanism_class("uniform-price")(price_at="last-accepted")
SHARES = [name for name in MEASURES if name not in MONEY and name != "interim_gain"]
EXPENSIVE = settings(max_examples=40, deadline=None)

BIDS = arrays.arrays(
    np.float64, st.tuples(st.just(5), st.integers(3, 8)), elements=st.floats(0.0, 100.0, allow_subnormal=False)
)
FAMILIES = st.sampled_from(
    [
        family_class("uniform")(low=0.0, high=1.0),
        family_class("uniform")(low=3.0, high=4.0),
        family_class("power")(exponent=0.3, high=2.0),
        family_class("exponential")(scale=1.0),
        family_class("weibull")(shape=0.5, scale=1.0),
        family_class("lognormal")(sigma=1.0, scale=1.0),
        family_class("pareto")(tail_index=0.4, scale=1.0),
        family_class("generalised-pareto")(tail_index=-0.5, scale=1.0),
    ]
)


def one(market: Market, rule: object, name: str, threshold: float = 0.05) -> float:
    """Compute one measure exactly."""
    return evaluate(market, rule, [name], method="exact", threshold=threshold)[name].value


@st.composite
def markets(draw: st.DrawFn) -> Market:
    """Draw a market of up to a million bidders."""
    values = draw(FAMILIES)
    bidders = draw(st.sampled_from([2, 3, 7, 50, 1_000, 10**6]))
    units = min(draw(st.sampled_from([1, 2, 5, 30])), bidders - 1)
    turnout = draw(st.sampled_from([1.0, 0.7, 0.05]))
    reserve = draw(st.sampled_from([0.0, 0.4, 0.95]))
    return Market(values, bidders, IdenticalUnits(units, reserve), turnout)


# --- draw by draw -------------------------------------------------------------------------------------------


@EXPENSIVE
@given(bids=BIDS, units=st.integers(1, 6), reserve=st.floats(0.0, 100.0))
def test_worst_gain_of_pay_as_bid_rises_in_the_units(bids: Floats, units: int, reserve: float):
    """In every draw one unit more leaves the largest gain as it was or raises it."""
    fewer = OWN.gains(bids, IdenticalUnits(units, reserve)).max(axis=1)
    more = OWN.gains(bids, IdenticalUnits(units + 1, reserve)).max(axis=1)
    assert (more >= fewer).all()


@EXPENSIVE
@given(bids=BIDS, units=st.integers(1, 6), low=st.floats(0.0, 50.0), step=st.floats(0.0, 50.0))
def test_a_reserve_never_raises_the_worst_gain_where_the_same_units_sell(
    bids: Floats, units: int, low: float, step: float
):
    """In every draw in which a higher reserve sells as much, the largest gain is no larger."""
    before, after = IdenticalUnits(units, low), IdenticalUnits(units, low + step)
    sold = [OWN.outcome(bids, supply).allocation.sum(axis=1) for supply in (before, after)]
    gains = [OWN.gains(bids, supply).max(axis=1) for supply in (before, after)]
    same = sold[0] == sold[1]
    assert (gains[1][same] <= gains[0][same]).all()


@EXPENSIVE
@given(bids=BIDS, units=st.integers(1, 6), reserve=st.floats(0.0, 100.0))
def test_gains_are_shares(bids: Floats, units: int, reserve: float):
    """Every gain of every rule lies in [0, 1], and at the first rejected bid there is none."""
    supply = IdenticalUnits(units, reserve)
    for rule in (OWN, LOWEST):
        gains = rule.gains(bids, supply)
        assert ((gains >= 0) & (gains <= 1)).all()
    assert not REJECTED.gains(bids, supply).any()


@EXPENSIVE
@given(bids=BIDS, units=st.integers(1, 6), reserve=st.floats(0.0, 100.0))
def test_all_rules_sell_to_the_same_bidders_and_pay_no_less_than_the_keeping_payment(
    bids: Floats, units: int, reserve: float
):
    """The rules allocate alike; pay-as-bid takes most, the first rejected bid least, which is what keeps the unit."""
    supply = IdenticalUnits(units, reserve)
    outcomes = [rule.outcome(bids, supply) for rule in (OWN, LOWEST, REJECTED)]
    for outcome in outcomes[1:]:
        assert np.array_equal(outcome.allocation, outcomes[0].allocation)
    assert (outcomes[0].payment >= outcomes[1].payment).all()
    assert (outcomes[1].payment >= outcomes[2].payment).all()
    assert np.array_equal(outcomes[2].payment, OWN.least_payments(bids, supply))


# --- exact values -------------------------------------------------------------------------------------------


@EXPENSIVE
@given(market=markets())
def test_exact_shares_lie_between_0_and_1(market: Market):
    """Every share of every rule lies in [0, 1], but for its own error."""
    for rule in (OWN, LOWEST, REJECTED):
        for name, found in evaluate(market, rule, SHARES, method="exact").items():
            assert -found.error <= found.value <= 1.0 + found.error, (rule, name)


@EXPENSIVE
@given(market=markets())
def test_exact_money_is_ordered(market: Market):
    """Welfare and pay-as-bid revenue are one number; then the lowest accepted bid, then the first rejected."""
    welfare = [one(market, rule, "welfare") for rule in (OWN, LOWEST, REJECTED)]
    assert welfare == [welfare[0]] * 3
    own, lowest, rejected = (one(market, rule, "revenue") for rule in (OWN, LOWEST, REJECTED))
    slack = 3e-9 * own
    assert own == pytest.approx(welfare[0], rel=2e-9)
    assert own >= lowest - slack
    assert lowest >= rejected - slack
    for rule in (OWN, LOWEST, REJECTED):
        assert one(market, rule, "shaded_revenue") == pytest.approx(rejected, rel=2e-9)


@EXPENSIVE
@given(market=markets())
def test_exact_gains_are_ordered(market: Market):
    """The mean gain is at most the worst, an interim gain at most the mean, and chances fall in the threshold."""
    for rule in (OWN, LOWEST):
        assert one(market, rule, "mean_gain") <= one(market, rule, "worst_gain") + 2e-9
        chances = [one(market, rule, "gain_chance", level) for level in (0.0, 0.01, 0.1, 0.5, 0.99)]
        assert all(later <= earlier + 2e-9 for earlier, later in pairwise(chances))
    assert one(market, LOWEST, "worst_gain") <= one(market, OWN, "worst_gain") + 2e-9


@EXPENSIVE
@given(market=markets(), scale=st.sampled_from([1e-6, 3.0, 1e9]))
def test_scaling_values_and_reserve_changes_nothing_but_money(market: Market, scale: float):
    """In another currency the shares stay and money is scaled."""
    name = {"uniform": ("low", "high"), "power": ("high",)}.get(market.values.name, ("scale",))
    changed = {key: market.values.settings[key] * scale for key in name}
    values = type(market.values)(**{**market.values.settings, **changed})
    supply = IdenticalUnits(market.supply.units, market.supply.reserve * scale)
    other = Market(values, market.bidders, supply, market.turnout)
    for name in ("worst_gain", "mean_gain", "gain_chance", "efficiency"):
        assert one(other, OWN, name) == pytest.approx(one(market, OWN, name), abs=3e-9)
    assert one(other, OWN, "revenue") == pytest.approx(scale * one(market, OWN, "revenue"), rel=3e-9)


@EXPENSIVE
@given(values=FAMILIES, bidders=st.sampled_from([4, 40, 10**5]), turnout=st.sampled_from([1.0, 0.6]))
def test_exact_worst_gain_rises_in_the_units(values: Distribution, bidders: int, turnout: float):
    """What holds in every draw holds of the mean: without a reserve the worst gain rises in the units."""
    gains = [one(Market(values, bidders, IdenticalUnits(k), turnout), OWN, "worst_gain") for k in (1, 2, 3)]
    assert gains[0] <= gains[1] + 2e-9
    assert gains[1] <= gains[2] + 2e-9


# --- what is not a law --------------------------------------------------------------------------------------


class ManyAndFew(Distribution):
    """Many values near 1, a few near 100: between 1 and 2 with chance 0.99, else between 100 and 101."""

    name = "many-and-few"
    title = "for tests"
    few = 0.01

    @property
    def support(self) -> tuple[float, float]:
        """From 1 to 101."""
        return 1.0, 101.0

    @property
    def knots(self) -> tuple[float, ...]:
        """Where the values jump."""
        return (self.few,)

    def upper_quantile(self, s: Floats) -> Floats:
        """Two straight lines."""
        s = np.asarray(s, dtype=np.float64)
        return np.where(s < self.few, 101.0 - s / self.few, 2.0 - (s - self.few) / (1.0 - self.few))

    def survival(self, x: Floats) -> Floats:
        """Two straight lines with a level between."""
        x = np.asarray(x, dtype=np.float64)
        low = self.few + (1.0 - self.few) * np.clip(2.0 - x, 0.0, 1.0)
        return np.where(x < 100.0, low, self.few * np.clip(101.0 - x, 0.0, 1.0))

    def density(self, x: Floats) -> Floats:
        """Two steps."""
        x = np.asarray(x, dtype=np.float64)
        near_one = (x >= 1.0) & (x <= 2.0)
        near_hundred = (x >= 100.0) & (x <= 101.0)
        return np.where(near_one, 1.0 - self.few, np.where(near_hundred, self.few, 0.0))

    def relative_drop(self, s: Floats, log_ratio: Floats) -> Floats:
        """By subtraction: the default integrates a slope, which has no meaning across the jump."""
        higher = self.upper_quantile(np.maximum(s * np.exp(-np.asarray(log_ratio)), 1e-322))
        return (higher - self.upper_quantile(s)) / higher


def test_the_worst_gain_need_not_fall_in_the_number_of_bidders():
    """With many values near 1 and few near 100 the gain first rises in n, then falls, and the engine shows it."""
    values = ManyAndFew()
    gains = {n: one(Market(values, n, IdenticalUnits(1)), OWN, "worst_gain") for n in (2, 100, 3_000, 10**6)}
    assert gains[2] < 0.3 < gains[100]
    assert gains[3_000] < 0.01
    assert gains[10**6] < gains[3_000]


def test_a_reserve_may_raise_the_worst_gain_given_a_sale():
    """A reserve that only high draws meet selects them, and in these the gain is larger."""
    values = ManyAndFew()
    free = one(Market(values, 5, IdenticalUnits(1)), OWN, "worst_gain")
    with_reserve = one(Market(values, 5, IdenticalUnits(1, 1.999)), OWN, "worst_gain")
    assert with_reserve > free + 0.1


def test_the_first_unit_need_not_lose_to_the_second_in_the_mean_gain():
    """A reserve may raise the mean gain of all winners: no law says otherwise."""
    values = ManyAndFew()
    free = one(Market(values, 5, IdenticalUnits(2)), OWN, "mean_gain")
    assert one(Market(values, 5, IdenticalUnits(2, 1.999)), OWN, "mean_gain") > free
