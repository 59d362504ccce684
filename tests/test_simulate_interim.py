"""Interim gains by simulation: right for known cells, zero for truthful rules, little lost by choosing."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import integrate, special

from mechbench.contract import Floats, IdenticalUnits, Mechanism, Outcome
from mechbench.discovery import family_class, mechanism_class
from mechbench.engine.simulated import responses
from mechbench.engine.simulated.responses import InterimDraws
from mechbench.engine.simulated.simulate import simulate
from mechbench.market.market import Market

PAY_AS_BID = mechanism_class("pay-as-bid")()
FIRST_REJECTED = mechanism_class("uniform-price")()
LAST_ACCEPTED = mechanism_class("uniform-price")(price_at="last-accepted")
UNIFORM = family_class("uniform")(low=0.0, high=1.0)


def _loss(market: Market, mechanism: Mechanism, error: float, seed: int) -> tuple[float, float]:
    """Interim gain of uniform pay-as-bid at the reports chosen, and at the best ones, by integration."""
    single = InterimDraws(market, [mechanism], seed, error)
    edges = single._layout.edges
    steps = (np.arange(500) + 0.5) / 500
    cell = np.repeat(np.arange(len(edges) - 1), 500)
    tail = edges[cell] + np.tile(steps, len(edges) - 1) * np.diff(edges)[cell]
    weight = np.diff(edges)[cell]
    value = 1.0 - tail
    reserve = market.supply.reserve

    def win(report: Floats) -> Floats:
        chance = special.betaincc(market.supply.units, market.bidders - market.supply.units, 1.0 - report)
        return np.where(report >= reserve, chance, 0.0)

    chosen = np.clip(single.best_report(0, value, cell), 0.0, 1.0)
    gain = (value - chosen) * win(chosen) / value
    tried = np.linspace(0.0, 1.0, 4001)
    sure = win(tried)
    best = np.array([((v - tried) * sure).max() for v in value]) / value
    norm = (win(value) * weight).sum()
    return float((gain * weight).sum() / norm), float((best * weight).sum() / norm)


@pytest.mark.parametrize(("bidders", "units", "reserve"), [(2, 1, 0.0), (5, 1, 0.4), (40, 4, 0.0), (60, 50, 0.3)])
@pytest.mark.parametrize("error", [0.01, 0.002])
def test_choosing_loses_less_than_the_error(bidders, units, reserve, error):
    """The gain at the reports that the pilot chose is below the best one, by less than a quarter of the error."""
    market = Market(UNIFORM, bidders, IdenticalUnits(units, reserve))
    for seed in (1, 2):
        chosen, best = _loss(market, PAY_AS_BID, error, seed)
        assert chosen < best + 1e-6
        assert best - chosen < error / 4


def test_pilot_and_estimate_draw_apart(monkeypatch):
    """The pilot, the rivals, the values and the layout come from generators of different purposes."""
    purposes = []
    generators = responses.generators

    def watched(market, seed, purpose, count) -> list[np.random.Generator]:
        purposes.append(purpose)
        return generators(market, seed, purpose, count)

    monkeypatch.setattr(responses, "generators", watched)
    InterimDraws(Market(UNIFORM, 5, IdenticalUnits(1)), [PAY_AS_BID], 1, 0.05)
    assert len(set(purposes)) == len(purposes) == 4


def test_last_accepted_price_against_integration():
    """Two units, three bidders: the gain at the last accepted price agrees with direct integration."""

    # Two rivals, the higher at x >= y. A report b wins against y and pays min(b, x).
    def utility(report: float, value: float) -> float:
        above = integrate.quad(lambda x: 2 * x * (value - report), report, 1)[0] if report < 1 else 0.0
        above -= integrate.quad(lambda x: 2 * (x - report) * (value - report), report, 1)[0]
        below = integrate.quad(lambda x: 2 * x * (value - x), 0, report)[0]
        return above + below

    def best_gain(value: float) -> float:
        reports = np.linspace(0, value, 400)
        return max(utility(report, value) for report in reports) - utility(value, value)

    nodes, weights = np.polynomial.legendre.leggauss(12)
    values = 0.5 * (nodes + 1)
    gain = sum(w * best_gain(v) / v for w, v in zip(0.5 * weights, values, strict=True))
    wins = integrate.quad(lambda v: 1 - (1 - v) ** 2, 0, 1)[0]
    market = Market(UNIFORM, 3, IdenticalUnits(2))
    found = simulate(market, [LAST_ACCEPTED], ["interim_gain"], error=0.004, seed=4)
    estimate = found.estimate(0, "interim_gain")
    assert abs(estimate.value - gain / wins) < 1.5 * estimate.error


@pytest.mark.parametrize("turnout", [1.0, 0.5])
@pytest.mark.parametrize("family", ["uniform", "exponential", "pareto"])
def test_truthful_rule_has_no_interim_gain(turnout, family):
    """At the first rejected bid truth is best on every pilot draw, so the gain is 0, with an error."""
    settings = {"tail_index": 0.5} if family == "pareto" else {}
    values = family_class(family)(**({"low": 0.0, "high": 1.0} if family == "uniform" else settings))
    market = Market(values, 15, IdenticalUnits(3, 0.3), turnout)
    found = simulate(market, [FIRST_REJECTED], ["interim_gain"], error=0.01, seed=2)
    estimate = found.estimate(0, "interim_gain")
    assert estimate.value == 0.0
    assert 0 < estimate.error <= 0.01
    assert estimate.status == "ok"


def test_scale_of_values_changes_nothing_but_rounding():
    """Values ten times as large, with a reserve to match, leave the interim gain where it was."""
    gains = []
    for scale in (1.0, 10.0):
        market = Market(family_class("exponential")(scale=scale), 12, IdenticalUnits(2, 0.5 * scale))
        found = simulate(market, [PAY_AS_BID], ["interim_gain"], error=0.01, seed=3)
        gains.append(found.estimate(0, "interim_gain"))
    apart = abs(gains[0].value - gains[1].value)
    assert apart < 1.5 * np.hypot(gains[0].error, gains[1].error)


def test_difference_of_interim_gains():
    """The two rules' interim gains are compared on the same rivals and values."""
    market = Market(UNIFORM, 8, IdenticalUnits(2))
    found = simulate(market, [PAY_AS_BID, LAST_ACCEPTED], ["interim_gain"], error=0.005, seed=3)
    first, second = found.estimate(0, "interim_gain"), found.estimate(1, "interim_gain")
    apart = found.difference(0, 1, "interim_gain")
    assert apart.value == pytest.approx(first.value - second.value)
    assert apart.error < np.hypot(first.error, second.error)
    assert apart.value > apart.error


def test_a_bid_of_next_to_nothing_beats_absent_rivals():
    """One rival who turns up half the time, values from 2 on: the best bid of a low value is just above 0."""
    # A bid b in [2, 3] wins with chance 1/2 + (b - 2)/2, one just above 0 with 1/2. As v <= 3, the best of
    # (v - b)(b - 1)/2 is at b = (v + 1)/2 < 2 or at 2, at most (v - 2)/2 < v/2: so v/2, a gain of 1/2 a value.
    market = Market(family_class("uniform")(low=2.0, high=3.0), 2, IdenticalUnits(1), turnout=0.5)
    found = simulate(market, [PAY_AS_BID], ["interim_gain"], error=0.01, seed=6)
    estimate = found.estimate(0, "interim_gain")
    assert abs(estimate.value - 0.5 / 0.75) < 1.5 * estimate.error


class PayHalf(Mechanism):
    """The highest bid wins and pays half of it: bidding more than the value pays."""

    name = "pay-half"
    title = "for tests"
    serves = frozenset({IdenticalUnits.kind})

    def outcome(self, bids: Floats, supply: IdenticalUnits, coins: Floats | None = None) -> Outcome:  # noqa: ARG002
        """See the contract."""
        allocation, _ = supply.highest(bids)
        return Outcome(allocation, 0.5 * allocation * bids)

    def depth(self, supply: IdenticalUnits) -> int:
        """See the contract."""
        return supply.units + 1


def test_a_rule_that_rewards_overbidding():
    """For a rule the engine has never seen, two uniform bidders: reports above value are found."""
    # v b - b^2 / 2 is largest at b = v, so truth is best: U = v^2/2 and no gain; with 5 rivals it is not:
    # v b^5 - b^6 / 2 is largest at b = min(1, 5 v / 3).
    values = np.linspace(0, 1, 200_001)[1:]
    best = np.minimum(1.0, 5 * values / 3)
    gain = (values * best**5 - best**6 / 2 - values**6 / 2) / values
    expected = gain.mean() * 6
    market = Market(UNIFORM, 6, IdenticalUnits(1))
    estimate = simulate(market, [PayHalf()], ["interim_gain"], error=0.02, seed=1).estimate(0, "interim_gain")
    assert abs(estimate.value - expected) < 1.5 * estimate.error
    two = simulate(Market(UNIFORM, 2, IdenticalUnits(1)), [PayHalf()], ["interim_gain"], error=0.01, seed=1)
    assert two.estimate(0, "interim_gain").value < 0.01
