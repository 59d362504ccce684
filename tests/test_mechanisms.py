"""The mechanisms against brute force: deviations through `outcome` alone, ties, reserves, null bids."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as arrays

from mechbench.contract import Floats, IdenticalUnits, Mechanism
from mechbench.discovery import mechanism_class

RULES = [
    mechanism_class("pay-as-bid")(),
    mechanism_class("uniform-price")(price_at="first-rejected"),
    mechanism_class("uniform-price")(price_at="last-accepted"),
]
every_rule = pytest.mark.parametrize("rule", RULES, ids=repr)
WHOLE = st.integers(0, 6).map(float)  # few values, so that ties and null bids are common
MARKETS = st.tuples(
    arrays.arrays(np.float64, st.tuples(st.integers(1, 4), st.integers(1, 6)), elements=WHOLE),
    st.integers(1, 7),
    st.sampled_from([0.0, 0.5, 2.0, 3.0, 10.0]),
)
NUDGE = 1e-9
CLOSE = 1e-7
"""A report just above another bid stands for the supremum over reports; with bids to 6 it is off by 1e-9."""


def utility(rule: Mechanism, bids: Floats, supply: IdenticalUnits, values: Floats, i: int) -> tuple[float, float]:
    """Return the utility of bidder i in one draw, and its value of what it gets."""
    outcome = rule.outcome(bids[None, :], supply)
    worth = float(values[i] * outcome.allocation[0, i])
    return worth - float(outcome.payment[0, i]), worth


def reports(bids: Floats, reserve: float) -> list[float]:
    """List reports around every bid, the reserve and 0, and a grid: the best response is near one of them."""
    marks = [0.0, reserve, *bids]
    near = [mark + nudge for mark in marks for nudge in (-NUDGE, 0.0, NUDGE)]
    return [report for report in [*near, *np.linspace(0.0, 8.0, 33)] if report >= 0]


def searched(rule: Mechanism, bids: Floats, supply: IdenticalUnits) -> tuple[Floats, Floats]:
    """Gain and least keeping payment of each bidder of one draw, found through `outcome` alone."""
    gains, least = np.zeros_like(bids), np.zeros_like(bids)
    for i in range(bids.size):
        truth, kept = utility(rule, bids, supply, bids, i)
        best, base = truth, kept
        payments = []
        for report in reports(bids, supply.reserve):
            deviating = bids.copy()
            deviating[i] = report
            found, worth = utility(rule, deviating, supply, bids, i)
            if found > best + CLOSE * 1e-1:
                best, base = found, max(kept, worth)
            if worth >= kept > 0:
                payments.append(worth - found)
        base += max(0.0, -truth)
        gains[i] = (best - truth) / base if base > 0 else 0.0
        least[i] = min(payments, default=0.0)
    return gains, least


@every_rule
@settings(max_examples=120, deadline=None)
@given(market=MARKETS)
def test_gains_and_least_payments_are_what_deviations_find(rule: Mechanism, market: tuple[Floats, int, float]):
    """The closed forms equal the best of a dense set of false bids, ties and small crowds included."""
    bids, units, reserve = market
    supply = IdenticalUnits(units, reserve)
    gains, least = rule.gains(bids, supply), rule.least_payments(bids, supply)
    for draw in range(bids.shape[0]):
        found_gains, found_least = searched(rule, bids[draw], supply)
        assert gains[draw] == pytest.approx(found_gains, abs=CLOSE)
        assert least[draw] == pytest.approx(found_least, abs=CLOSE)


@every_rule
@settings(max_examples=100, deadline=None)
@given(market=MARKETS)
def test_outcomes_are_feasible_and_individually_rational(rule: Mechanism, market: tuple[Floats, int, float]):
    """No more than the units are sold, only to bids above 0 and at least the reserve, at prices between the two."""
    bids, units, reserve = market
    outcome = rule.outcome(bids, IdenticalUnits(units, reserve))
    won = outcome.allocation > 0
    eligible = (bids > 0) & (bids >= reserve)
    assert np.isin(outcome.allocation, (0.0, 1.0)).all()
    assert (outcome.allocation.sum(axis=1) == np.minimum(units, eligible.sum(axis=1))).all()
    assert not (won & ~eligible).any()
    lowest_winner = np.where(won, bids, np.inf).min(axis=1)
    highest_loser = np.where(eligible & ~won, bids, -np.inf).max(axis=1)
    assert (lowest_winner >= highest_loser).all()
    assert (outcome.payment[~won] == 0).all()
    assert (outcome.payment[won] <= bids[won]).all()
    assert (outcome.payment[won] >= reserve).all()


@every_rule
@settings(max_examples=60, deadline=None)
@given(market=MARKETS)
def test_draws_do_not_influence_one_another(rule: Mechanism, market: tuple[Floats, int, float]):
    """A batch gives what its draws give one by one, and the input is left as it was."""
    bids, units, reserve = market
    supply = IdenticalUnits(units, reserve)
    before = bids.copy()
    together = rule.outcome(bids, supply)
    gains, least = rule.gains(bids, supply), rule.least_payments(bids, supply)
    assert np.array_equal(bids, before)
    for draw in range(bids.shape[0]):
        row = bids[draw : draw + 1]
        alone = rule.outcome(row, supply)
        assert np.array_equal(alone.allocation[0], together.allocation[draw])
        assert np.array_equal(alone.payment[0], together.payment[draw])
        assert np.array_equal(rule.gains(row, supply)[0], gains[draw])
        assert np.array_equal(rule.least_payments(row, supply)[0], least[draw])


@every_rule
@settings(max_examples=60, deadline=None)
@given(market=MARKETS)
def test_null_bids_are_ignored(rule: Mechanism, market: tuple[Floats, int, float]):
    """Bidders who stay away change nothing for the others."""
    bids, units, reserve = market
    supply = IdenticalUnits(units, reserve)
    wider = np.concatenate([np.zeros((bids.shape[0], 2)), bids, np.zeros((bids.shape[0], 1))], axis=1)
    narrow, wide = rule.outcome(bids, supply), rule.outcome(wider, supply)
    assert np.array_equal(wide.allocation[:, 2:-1], narrow.allocation)
    assert np.array_equal(wide.payment[:, 2:-1], narrow.payment)
    assert np.array_equal(rule.gains(wider, supply)[:, 2:-1], rule.gains(bids, supply))


@every_rule
@settings(max_examples=60, deadline=None)
@given(market=MARKETS, scale=st.sampled_from([2.0**-20, 0.5, 2.0**30]))
def test_scaling_all_bids_scales_the_payments_alone(rule: Mechanism, market: tuple[Floats, int, float], scale: float):
    """With values and reserve in another currency the same bidders win, gain the same, and pay as much."""
    bids, units, reserve = market
    supply, scaled = IdenticalUnits(units, reserve), IdenticalUnits(units, reserve * scale)
    assert np.array_equal(rule.outcome(bids * scale, scaled).allocation, rule.outcome(bids, supply).allocation)
    assert np.array_equal(rule.outcome(bids * scale, scaled).payment, scale * rule.outcome(bids, supply).payment)
    assert np.array_equal(rule.gains(bids * scale, scaled), rule.gains(bids, supply))


@every_rule
def test_equal_bids_win_in_the_order_of_the_bidders(rule: Mechanism):
    """Of four equal bids for two units the first two win, and nobody gains: every rule then charges the bid."""
    bids, supply = np.full((1, 4), 3.0), IdenticalUnits(2)
    outcome = rule.outcome(bids, supply)
    assert outcome.allocation.tolist() == [[1.0, 1.0, 0.0, 0.0]]
    assert outcome.payment.tolist() == [[3.0, 3.0, 0.0, 0.0]]
    assert rule.gains(bids, supply).tolist() == [[0.0] * 4]


@pytest.mark.parametrize(
    ("rule", "payment", "gains"),
    [
        (RULES[0], [9.0, 6.0, 0.0], [1 - 2 / 9, 1 - 2 / 6, 0.0]),
        (RULES[1], [2.0, 2.0, 0.0], [0.0, 0.0, 0.0]),
        (RULES[2], [6.0, 6.0, 0.0], [4 / 9, 4 / 6, 0.0]),
    ],
    ids=repr,
)
@pytest.mark.parametrize(("third", "reserve", "units"), [(2.0, 0.0, 2), (1.0, 2.0, 2), (1.0, 2.0, 7)])
def test_worked_example(
    rule: Mechanism, payment: list[float], gains: list[float], third: float, reserve: float, units: int
):
    """Bids 9 and 6 win two bays: a third bid of 2, or a reserve of 2 with bays to spare, sets the same threshold."""
    bids, supply = np.array([[9.0, 6.0, third]]), IdenticalUnits(units, reserve)
    assert rule.outcome(bids, supply).payment[0].tolist() == payment
    assert rule.gains(bids, supply)[0] == pytest.approx(gains, abs=1e-15)
    assert rule.least_payments(bids, supply)[0].tolist() == [2.0, 2.0, 0.0]


@every_rule
def test_a_reserve_above_all_bids_sells_nothing(rule: Mechanism):
    """With no bid at the reserve nobody wins, pays or could gain."""
    bids, supply = np.array([[3.0, 2.0, 0.0]]), IdenticalUnits(2, 3.5)
    outcome = rule.outcome(bids, supply)
    assert not outcome.allocation.any()
    assert not outcome.payment.any()
    assert not rule.gains(bids, supply).any()
    assert not rule.least_payments(bids, supply).any()


@pytest.mark.parametrize("units", [1, 3, 6, 9])
def test_rows_in_falling_order_need_no_sorting(units):
    """Bids that come in falling order are served as the same bids in any order are, ties by position."""
    rng = np.random.default_rng(11)
    falling = -np.sort(-np.round(rng.exponential(2.0, (200, 6))), axis=1)
    supply = IdenticalUnits(units, 1.0)
    alone, threshold = supply.highest(falling)
    rising_last = np.vstack([falling, np.arange(6.0)])
    beside, threshold_beside = supply.highest(rising_last)
    np.testing.assert_array_equal(alone, beside[:-1])
    np.testing.assert_array_equal(threshold, threshold_beside[:-1])
