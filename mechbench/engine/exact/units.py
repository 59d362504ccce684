"""Expectations over the winners of identical units, by quadrature in tail coordinates.

Two kinds of draw are integrated apart, because the threshold jumps in kind between them:

* *contested*: the first rejected bid is at least the reserve. Given its tail probability s = S_(k+1) the k winners'
  are s times k independent uniforms [1]_, so that the best sits at ``s (1 - exp(-E / k))``, the lowest at
  ``s exp(-E / k)`` and a typical one at ``s exp(-E)`` with E a standard exponential. One fixed rule for E therefore
  serves every k, and one rule for the log-odds of s every n.
* *slack*: at most k bidders reach the reserve, so that nobody who could win is rejected. Their number is binomial,
  and given it their tail probabilities are uniform below the reserve's; the sums over the number are binomial
  distribution functions.

.. [1] H. A. David and H. N. Nagaraja, *Order Statistics*, 3rd ed., Wiley 2003, theorem 2.5 (Markov property; from
   memory, checked against simulation in tests/).
"""

from __future__ import annotations

import numpy as np

from mechbench.contract import Floats, Functional
from mechbench.engine.exact.above import best, fold, settle, typical
from mechbench.engine.exact.places import Contested, contested_nodes
from mechbench.engine.exact.resolution import NoRouteError, Resolution
from mechbench.engine.exact.sizes import Sizes
from mechbench.engine.exact.slack import slack_expectation
from mechbench.engine.exact.winners import Place, Ranked

__all__ = ["expectation"]

_BLOCK = 1 << 15
"""Quadrature nodes evaluated at once: what a core's cache holds, so that many sizes cost no more each than one."""


def expectation(sizes: Sizes, functional: Functional, resolution: Resolution) -> tuple[Floats, Floats]:
    """Unconditional expectation of a functional and a bound on its error, arrays (cells,).

    Raises
    ------
    NoRouteError
        If there is no exact integral for what the functional looks at.
    """
    value, error = _contested(sizes, functional, resolution)
    if sizes.chance < 1.0:
        more, more_error = slack_expectation(sizes, functional, resolution)
        value, error = value + more, error + more_error
        # the cut at the reserve is known to the last digit of its tail probability, no better
        law = sizes.law(sizes.units + 1.0)
        steepness = np.sqrt(law.rank * law.above / sizes.bidders)
        error = error + 2e-16 * steepness * value
    return value, error


def _contested(sizes: Sizes, functional: Functional, resolution: Resolution) -> tuple[Floats, Floats]:
    uses, units = functional.uses, sizes.units
    rank = units + 1.0 if "threshold" in uses or "lowest" not in uses else units
    growth = sizes.growth if functional.over == "sum" else 0.0
    value, error = np.zeros_like(units), np.zeros_like(units)
    for nodes in contested_nodes(sizes, rank, growth, resolution):
        outer = nodes.place.at.shape[1]
        inner = _inner_size(functional, nodes, resolution)
        some_cells = max(1, _BLOCK // (outer * inner))
        some_nodes = max(1, _BLOCK // inner)
        for cell in range(0, units.size, some_cells):
            cells = slice(cell, cell + some_cells)
            sums = sum(
                _inner(sizes.some(cells), functional, nodes.block(cells, slice(at, at + some_nodes)), resolution)
                for at in range(0, outer, some_nodes)
            )
            more, more_error = settle(np.asarray(sums))
            value[cells] += more
            error[cells] += more_error
    return value, error


def _inner_size(functional: Functional, nodes: Contested, resolution: Resolution) -> int:
    panels = 1 + len(nodes.knots_below)
    dimensions = max(0, len(functional.uses) - 1)
    if "winner" in functional.uses and len(functional.uses) == 1:
        dimensions = 1
    return int((resolution.inner if panels == 1 else resolution.inner + panels * resolution.smooth) ** dimensions)


def _inner(sizes: Sizes, functional: Functional, nodes: Contested, resolution: Resolution) -> Floats:
    """Sum over one block of outer nodes; returns the columns of `fold`."""
    over, uses, units = functional.over, functional.uses, sizes.units[:, None, None]
    place = Place(sizes.values, nodes.place.at[..., None], nodes.place.rest[..., None])
    if over == "sum" and uses in ({"threshold"}, {"lowest"}):
        amount = functional.amount(Ranked(place, 1.0))[..., 0]
        return fold(sizes.units[:, None] * amount, nodes.weights)
    if over == "lowest" and uses == {"threshold", "lowest"}:
        ratio, weights = typical(nodes, units, resolution)
        return fold(functional.amount(Ranked(place, 1.0, lowest=ratio)), nodes.weights, weights)
    if over == "best" and uses == {"threshold", "winner"}:
        ratio, weights = best(nodes, units, resolution)
        return fold(functional.amount(Ranked(place, 1.0, winner=ratio)), nodes.weights, weights)
    if over == "best" and uses == {"winner", "lowest"}:
        ratio, weights = best(nodes, np.maximum(units - 1.0, 1.0), resolution)
        amount = functional.amount(Ranked(place, 1.0, winner=ratio)) * (units > 1.0)
        return fold(amount, nodes.weights, weights)
    if over in {"mean", "sum"} and uses <= {"threshold", "winner"} and "winner" in uses:
        growth = sizes.growth if over == "sum" else 0.0
        ratio, weights = typical(nodes, np.ones((1, 1, 1)), resolution, growth)
        amount = functional.amount(Ranked(place, 1.0, winner=ratio))
        return fold(amount * units if over == "sum" else amount, nodes.weights, weights)
    if over == "mean" and uses == {"threshold", "winner", "lowest"}:
        return _mean_with_lowest(sizes, functional, nodes, resolution)
    raise NoRouteError(functional)


def _mean_with_lowest(sizes: Sizes, functional: Functional, nodes: Contested, resolution: Resolution) -> Floats:
    """Mean over the winners of an amount that also looks at the lowest of them: three dimensions."""
    units = sizes.units[:, None, None]
    place = Place(sizes.values, nodes.place.at[..., None], nodes.place.rest[..., None])
    to_lowest, weights = typical(nodes, units, resolution)
    itself = functional.amount(Ranked(place, 1.0, lowest=to_lowest)) / units
    sums = fold(itself, nodes.weights, weights)
    if (sizes.units > 1.0).any():
        lowest = place.up(to_lowest)
        below = Contested(lowest, nodes.weights, nodes.knots_below)
        to_other, other_weights = typical(below, np.ones((1, 1, 1, 1)), resolution)
        deep = Place(sizes.values, place.at[..., None], place.rest[..., None])
        ranked = Ranked(deep, 1.0, lowest=to_lowest[..., None], winner=to_other)
        others = functional.amount(ranked) * ((units - 1.0) / units)[..., None]
        sums = sums + fold(others, nodes.weights, weights, other_weights)
    return sums
