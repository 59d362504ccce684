"""Draws of a whole crowd's highest bids, and what they add to every measure but interim gains."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from mechbench.contract import MONEY, Floats, Mechanism
from mechbench.engine.simulated.amounts import IF_SOLD, draw_amounts
from mechbench.engine.simulated.draws import bids_at, depth_of, generators, lowest_uniforms, tiers
from mechbench.engine.simulated.intervals import Ratio
from mechbench.engine.simulated.tails import heavy_amounts
from mechbench.market.market import Market

__all__ = ["LOWER_BOUND", "CrowdDraws"]

LOWER_BOUND = "lower bound"

_CHANCES = frozenset({"gain_chance", "no_sale"})
_TRIALS = 64
_TRIAL_BIDS = 2**17
"""Draws, and about as many bids, on which the weight of the tails is tried."""


class CrowdDraws:
    """Draws of the highest bids of the whole crowd, the same for all mechanisms.

    Attributes
    ----------
    notes : dict of str by (int, str)
        What is the matter with a measure of a mechanism, where something is.
    """

    def __init__(
        self,
        market: Market,
        mechanisms: Sequence[Mechanism],
        measures: Sequence[str],
        seed: int,
        threshold: float,
    ) -> None:
        self._market, self._mechanisms, self._measures = market, mechanisms, measures
        self._threshold = threshold
        self._depths = [depth_of(mechanism, market) for mechanism in mechanisms]
        self._edges = tiers(market.supply.units, market.bidders, max(self._depths))
        self._sources = generators(market, seed, 0, len(self._edges))
        self.notes = self._heavy(seed)

    @property
    def columns(self) -> int:
        """The measures and the sales of each mechanism, and the best welfare."""
        return len(self._mechanisms) * (len(self._measures) + 1) + 1

    @property
    def width(self) -> int:
        """Bids per draw."""
        return self._edges[-1]

    def fill(self, rows: Floats) -> None:
        """Write what the next draws add into `rows`, array (draws, columns)."""
        bids = self._bids(self._sources, len(rows))
        bids.flags.writeable = False
        size = len(self._measures) + 1
        for i, mechanism in enumerate(self._mechanisms):
            amounts = draw_amounts(mechanism, self._seen(bids, i), self._market.supply, self._measures, self._threshold)
            for place, measure in enumerate(self._measures):
                rows[:, i * size + place] = amounts.of[measure]
            rows[:, i * size + size - 1] = amounts.sold
            for measure in amounts.searched:
                self.notes.setdefault((i, measure), LOWER_BOUND)
        rows[:, -1] = amounts.best_welfare

    def ratios(self, sums: Floats, draws: int) -> dict[tuple[int, str], Ratio]:
        """Every measure of every mechanism, from the sums over batches of all draws."""
        size = len(self._measures) + 1
        every = np.full(len(sums), draws / len(sums))
        best = sums[:, -1]
        found = {}
        for i in range(len(self._mechanisms)):
            sold = sums[:, i * size + size - 1]
            for place, measure in enumerate(self._measures):
                top, chance = sums[:, i * size + place], measure in _CHANCES
                if measure in IF_SOLD:
                    ratio = Ratio(top, sold, float(sold.sum()), chance=chance)
                elif measure == "efficiency":
                    ratio = Ratio(top, best, draws, start=1.0, sign=-1.0)
                elif measure in MONEY:
                    ratio = Ratio(top, every, draws, bound=float(best.sum()) / draws)
                else:
                    ratio = Ratio(top, every, draws, chance=chance)
                found[i, measure] = ratio
        return found

    def _seen(self, bids: Floats, i: int) -> Floats:
        """Leave what the i-th mechanism sees: bids as deep as it looks, and as many as there are units."""
        return bids[:, : max(self._depths[i], min(self._market.supply.units, bids.shape[1]))]

    def _heavy(self, seed: int) -> dict[tuple[int, str], str]:
        sources = generators(self._market, seed, 1, len(self._edges))
        bids = self._bids(sources, max(1, min(_TRIALS, _TRIAL_BIDS // self.width)))
        return {
            (i, measure): note
            for i, mechanism in enumerate(self._mechanisms)
            for measure, note in heavy_amounts(self._market, mechanism, self._measures, self._seen(bids, i)).items()
        }

    def _bids(self, sources: Sequence[np.random.Generator], draws: int) -> Floats:
        return bids_at(self._market, lowest_uniforms(sources, draws, self._market.bidders, self._edges))
