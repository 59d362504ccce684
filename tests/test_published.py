"""The exact engine against published values and closed forms: within 1e-9, and within its own bound."""

from __future__ import annotations

import mpmath as mp
import pytest
from published.closed_forms import CELLS, Cell

from mechbench.contract import MONEY, IdenticalUnits
from mechbench.discovery import family_class, mechanism_class
from mechbench.engine.estimate import Estimate
from mechbench.engine.evaluate import evaluate
from mechbench.market.market import Market


def computed(cell: Cell) -> Estimate:
    """Compute the cell by the exact engine."""
    values = family_class(cell.family)(**cell.settings)
    market = Market(values, cell.bidders, IdenticalUnits(cell.units, cell.reserve), cell.turnout)
    name, settings = cell.mechanism
    mechanism = mechanism_class(name)(**settings)
    return evaluate(market, mechanism, [cell.measure], method="exact", threshold=cell.threshold)[cell.measure]


@pytest.mark.parametrize("cell", CELLS, ids=str)
def test_exact_value_keeps_its_bound_and_the_promised_error(cell: Cell):
    """The engine's error is below its reported bound, and that below 1e-9, for every value known in closed form."""
    found, truth = computed(cell), cell.truth
    size = abs(float(truth)) if cell.measure in MONEY else 1.0
    assert found.status == "ok"
    assert abs(mp.mpf(found.value) - truth) <= found.error
    assert found.error <= cell.tolerance * size
