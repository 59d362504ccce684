"""Interim gains: what a bidder can expect who knows the crowd but not the rivals' bids.

Let A(b) be the chance that a report b wins and P(b) its expected payment, over the rivals' truthful bids. The
interim gain is the integral over v of ``(max_b [v A(b) - P(b)] - [v A(v) - P(v)]) / v`` over the integral of
``A(v)``, both over the law of v: a ratio of expectations over one bidder's value.

A and P are learnt by `outcome` alone, at a grid of reports put among the rivals' bids of *pilot* draws; the
best report at v is the best line ``v A(b) - P(b)`` of the grid. The gain at that report is then estimated on
*fresh* draws, without bias for the reports chosen. Choosing falls short of the best by a term of second order
in the pilot's error, so the estimate errs low, by less than its half-width (tests/test_simulate_interim.py
measures by how much). Where truth is the best report of the pilot, the gain is exactly 0 by construction, and
is reported with the error of a share never seen; an estimate that noise leaves below 0 is reported as 0.

Values are drawn where winning has a chance: from cells of the upper-tail probability that are filled in
proportion to the chance that fewer than `units` rivals are above, and a floor.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mechbench.contract import Floats, Mechanism
from mechbench.engine.simulated.draws import bids_at, depth_of, generators, lowest_uniforms, tiers
from mechbench.engine.simulated.intervals import Ratio
from mechbench.market.market import Market

__all__ = ["InterimDraws"]

_CELLS = 32
_CRITICAL = 4096
"""Draws of the lowest bid that must be beaten, from which cells and reports are laid out."""
_LEVELS = 1.0 / (1.0 + np.exp(-np.linspace(-8.0, 8.0, 49)))
"""Chances of winning at which reports are laid out, even in log-odds."""
_FLOOR = 0.2
"""Share of the values drawn evenly, whatever their chance to win."""
_PILOT_SHARE = 2.5
"""The loss from choosing falls with the power 2/3 of the pilot's draws, so these rise with 3/2 of 1 / error."""
_LEAST_PILOT, _MOST_PILOT = 2**13, 2**20
_PILOT_BIDS = 2**27
"""Bound on the bids that the pilot evaluates for one mechanism, unless so many are in this few draws:"""
_FEWEST_PILOT = 32
_PILOT_BLOCK = 2**16
_SAME = 1e-9
_JUST_ABOVE = 1e-9
"""A report just above 0, as a share of the lowest value that may win."""


@dataclass(frozen=True)
class _Layout:
    """Where values and reports lie, by the market alone.

    Attributes
    ----------
    edges : array (cells + 1,)
        Ends of the cells in the upper-tail probability of the whole crowd; a value is drawn from each cell
        with equal chance.
    centres : array (cells,)
        The value in the middle of each cell.
    reports : array
        The reports tried, rising; the centres are among them.
    jumps : array of bool
        The reports at which the chance to win jumps: the reserve, and just above 0, which beats the absent.
    """

    edges: Floats
    centres: Floats
    reports: Floats
    jumps: NDArray[np.bool_]


@dataclass(frozen=True)
class _Answer:
    """One mechanism's best reports: the lines ``v chance - paid``, and the cells where truth is best."""

    chance: Floats
    paid: Floats
    truthful: NDArray[np.bool_]


class InterimDraws:
    """Draws of one bidder's value and its rivals' bids, shared by all mechanisms.

    Each mechanism fills three columns: the weighted gain over value, the weight where truth wins, 1 there.
    """

    def __init__(
        self,
        market: Market,
        mechanisms: Sequence[Mechanism],
        seed: int,
        error: float,
        max_draws: int | None = None,
    ) -> None:
        self._market, self._mechanisms = market, mechanisms
        self._widths = [min(depth_of(mechanism, market), market.bidders - 1) for mechanism in mechanisms]
        self._edges = tiers(market.supply.units, market.bidders - 1, max(self._widths))
        self._rivals = generators(market, seed, 2, len(self._edges))
        (self._values,) = generators(market, seed, 3, 1)
        self._layout = _lay_out(market, generators(market, seed, 4, 1)[0])
        most = _MOST_PILOT if max_draws is None else min(max_draws, _MOST_PILOT)
        pilot = max(_LEAST_PILOT, min(most, int((_PILOT_SHARE / max(error, _SAME)) ** 1.5)))
        self._answers = [self._learn(index, seed, pilot) for index in range(len(mechanisms))]

    @property
    def notes(self) -> dict[tuple[int, str], str]:
        """Nothing is the matter with shares."""
        return {}

    @property
    def columns(self) -> int:
        """How many sums a draw adds to."""
        return 3 * len(self._mechanisms)

    @property
    def width(self) -> int:
        """Numbers held per draw, for the size of a block."""
        return max(self._edges[-1] + 1, len(self._layout.reports))

    def fill(self, rows: Floats) -> None:
        """Write the next draws' columns into `rows`, array (draws, columns)."""
        tails = lowest_uniforms(self._rivals, len(rows), self._market.bidders - 1, self._edges)
        rivals = bids_at(self._market, tails)
        place = self._values.random(len(rows)) * _CELLS
        cell = np.minimum(place.astype(np.intp), _CELLS - 1)
        lengths = np.diff(self._layout.edges)
        tail = self._layout.edges[cell] + (place - cell) * lengths[cell]
        value = self._market.values.upper_quantile(np.maximum(tail, _TINY) / self._market.turnout)
        weight = lengths[cell] / lengths.max()
        for index, answer in enumerate(self._answers):
            others = rivals[:, : self._widths[index]]
            won, paid = self._report(index, value, others)
            columns = rows[:, 3 * index : 3 * index + 3]
            columns[:, 0] = 0.0
            if not answer.truthful.all():
                best = self.best_report(index, value, cell)
                better_won, better_paid = self._report(index, best, others)
                gain = value * (better_won - won) - (better_paid - paid)
                np.divide(weight * gain, value, out=columns[:, 0], where=value > 0)
            columns[:, 2] = won > 0
            columns[:, 1] = weight * columns[:, 2]

    def ratios(self, sums: Floats, draws: int) -> dict[tuple[int, str], Ratio]:  # noqa: ARG002  as of the crowd
        """Interim gain of every mechanism, from the sums over batches of all draws."""
        by_mechanism = np.split(sums, len(self._mechanisms), axis=1)
        return {
            (i, "interim_gain"): Ratio(own[:, 0], own[:, 1], float(own[:, 2].sum()))
            for i, own in enumerate(by_mechanism)
        }

    def best_report(self, index: int, value: Floats, cell: NDArray[np.intp]) -> Floats:
        """Report that the pilot found best for a mechanism at each value, array (draws,).

        `cell` says in which cell of the layout each value lies. Between the reports tried, the top of the
        parabola through the best and its neighbours is taken, except where the chance to win jumps.
        """
        answer, reports = self._answers[index], self._layout.reports
        utility = value[:, None] * answer.chance - answer.paid
        place = np.clip(utility.argmax(axis=1), 1, len(reports) - 2)
        row = np.arange(len(value))
        here = utility[row, place]
        fall_left, fall_right = here - utility[row, place - 1], here - utility[row, place + 1]
        left, right = reports[place] - reports[place - 1], reports[place + 1] - reports[place]
        bend = fall_left * right + fall_right * left
        peak = (fall_left >= 0) & (fall_right >= 0) & (bend > 0) & ~self._layout.jumps[place]
        shift = np.zeros_like(value)
        np.divide(fall_left * right**2 - fall_right * left**2, 2.0 * bend, out=shift, where=peak)
        best = np.where(peak, reports[place] + shift, reports[utility.argmax(axis=1)])
        return np.where(answer.truthful[cell], value, best)

    def _report(self, index: int, report: Floats | float, others: Floats) -> tuple[Floats, Floats]:
        """Allocation and payment of a report put before the rivals' bids (so that it wins ties)."""
        bids = np.empty((len(others), others.shape[1] + 1))
        bids[:, 0] = report
        bids[:, 1:] = others
        outcome = self._mechanisms[index].outcome(bids, self._market.supply)
        return outcome.allocation[:, 0], outcome.payment[:, 0]

    def _learn(self, index: int, seed: int, pilot: int) -> _Answer:
        """Try every report of the layout on pilot draws, made for this mechanism alone."""
        market, reports, width = self._market, self._layout.reports, self._widths[index]
        edges = tiers(market.supply.units, market.bidders - 1, width)
        sources = generators(market, seed, 5, len(edges))
        draws = max(_FEWEST_PILOT, min(pilot, _PILOT_BIDS // (len(reports) * (width + 1))))
        chance, paid = np.zeros_like(reports), np.zeros_like(reports)
        block = max(1, _PILOT_BLOCK // edges[-1])
        for start in range(0, draws, block):
            tails = lowest_uniforms(sources, min(block, draws - start), market.bidders - 1, edges)
            others = bids_at(market, tails)[:, :width]
            for place, report in enumerate(reports):
                won, payment = self._report(index, report, others)
                chance[place] += won.sum()
                paid[place] += payment.sum()
        chance, paid = chance / draws, paid / draws
        centres = self._layout.centres
        truth = np.searchsorted(reports, centres)
        return _Answer(chance, paid, _truth_is_best(centres, chance, paid, truth))


_TINY = float(np.finfo(np.float64).tiny)


def _truth_is_best(centres: Floats, chance: Floats, paid: Floats, truth: NDArray[np.intp]) -> NDArray[np.bool_]:
    """Whether no report of the grid beats truth in the middle of each cell, array (cells,)."""
    utility = centres[:, None] * chance - paid
    at_truth = utility[np.arange(len(centres)), truth]
    best: NDArray[np.bool_] = utility.max(axis=1) <= at_truth + _SAME * centres * chance[truth]
    return best


def _lay_out(market: Market, rng: np.random.Generator) -> _Layout:
    units, turnout, reserve = market.supply.units, market.turnout, market.supply.reserve
    critical = np.sort(rng.beta(units, market.bidders - units, _CRITICAL))
    top = min(turnout, 2.0 * float(critical[-1]))
    reach = min(top, turnout * float(market.values.survival(np.array([reserve]))[0]))
    grid = np.unique(np.concatenate([np.linspace(0.0, top, 257), [reach], critical[critical < top]]))
    middle = 0.5 * (grid[1:] + grid[:-1])
    chance = (1.0 - np.searchsorted(critical, middle) / _CRITICAL) * (middle < reach)
    filled = np.concatenate([[0.0], np.cumsum(chance * np.diff(grid))])
    mass = (1.0 - _FLOOR) * filled / filled[-1] + _FLOOR * grid / top
    edges = np.interp(np.linspace(0.0, 1.0, _CELLS + 1), mass, grid)
    centres = market.values.upper_quantile(0.5 * (edges[1:] + edges[:-1]) / turnout)
    beaten = np.quantile(critical, _LEVELS)
    beaten = beaten[beaten < turnout]
    levels = market.values.upper_quantile(beaten / turnout)
    jumps = np.array([reserve, _JUST_ABOVE * centres[centres > 0].min()])
    reports = np.unique(np.concatenate([centres, levels, jumps]))
    return _Layout(edges, centres, reports, np.isin(reports, jumps))
