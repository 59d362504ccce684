"""A law cut into pieces at knots gives the numbers of the same law in one piece."""

from __future__ import annotations

import math

import pytest

from mechbench.contract import MEASURES, MONEY, Distribution, IdenticalUnits
from mechbench.discovery import family_class, mechanism_class
from mechbench.engine.evaluate import evaluate
from mechbench.market.market import Market

SCALE = 25.0
RULES = [
    mechanism_class("pay-as-bid")(),
    mechanism_class("uniform-price")(price_at="last-accepted"),
]


def _exponential_in_pieces(levels: tuple[float, ...], share: float) -> Distribution:
    """Build an `empirical` law that is exponential: one reciprocal hazard rate everywhere, tail index 0."""
    return family_class("empirical")(
        tail_index=0.0,
        tail_scale=SCALE,
        threshold=-SCALE * math.log(share),
        tail_share=share,
        levels=(1.0, *levels),
        reciprocal_hazards=(SCALE,) * (1 + len(levels)),
    )


@pytest.mark.parametrize("rule", RULES, ids=repr)
@pytest.mark.parametrize(("reserve", "turnout"), [(0.0, 1.0), (8.0, 0.7), (0.0, 0.6)])
@pytest.mark.parametrize(("levels", "share"), [((), 0.3), ((0.8, 0.5, 0.2), 0.08)])
def test_knots_change_nothing(rule, reserve, turnout, levels, share):
    """An exponential law with knots in it has the measures of the exponential law, within both bounds."""
    supply = IdenticalUnits(4, reserve)
    whole = Market(family_class("exponential")(scale=SCALE), 40, supply, turnout)
    pieces = Market(_exponential_in_pieces(levels, share), 40, supply, turnout)
    assert pieces.values.knots
    expected = evaluate(whole, rule, list(MEASURES), method="exact")
    found = evaluate(pieces, rule, list(MEASURES), method="exact")
    for measure in MEASURES:
        one, other = expected[measure], found[measure]
        assert other.status == "ok", measure
        unit = abs(one.value) if measure in MONEY else 1.0
        # the fitted law's own inverse rounds: 1e-13 beside the bounds
        assert abs(one.value - other.value) <= one.error + other.error + 1e-13 * unit, measure
