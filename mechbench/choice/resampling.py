"""What the sampling error of a bid log does to every measure: the same draws under every resampled law.

Each resample of the log gives another law of values. Every mechanism is put before the same upper-tail
probabilities under each of these laws, so that what differs between two numbers is the law and hardly the
draws: a few thousand draws then tell the spread of a measure well, though not the measure itself, for which
the engine has its own, exact routes. A mean that the law makes infinite is infinite, whatever the draws say.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence

import numpy as np

from mechbench.contract import MONEY, Floats, Mechanism
from mechbench.engine.simulated.amounts import IF_SOLD, Amounts, draw_amounts
from mechbench.engine.simulated.draws import bids_at, depth_of, lowest_uniforms, tiers
from mechbench.engine.simulated.tails import INFINITE, heavy_amounts
from mechbench.market.market import Market

__all__ = ["resampled_findings", "unseen_chance"]

_DRAWS = (64, 2048)
"""Fewest and most draws."""
_BIDS = 2**17
"""About as many bids are drawn in all, within the bounds on draws."""
_REPORTS = 48
"""Reports among which the best is sought for interim gains."""
_REPORT_BIDS = (2**18, 2**22)
"""About as many bids are put to a mechanism at once for its interim gain, and never more than that many."""
_RIVAL_DRAWS = (32, 1024)
"""Fewest and most draws of the rivals' bids; where the fewest are too many bids, the spread is not known."""
_TINY = float(np.finfo(np.float64).tiny)


def resampled_findings(
    market: Market,
    resampled: Sequence[Market],
    mechanisms: Sequence[Mechanism],
    measures: Sequence[str],
    threshold: float,
    rng: np.random.Generator,
    progress: Callable[[int], None] | None = None,
) -> Mapping[tuple[int, str], Floats]:
    """Find how each measure of each mechanism moves when the log is resampled.

    Parameters
    ----------
    market : Market
        With the law fitted to the log itself.
    resampled : sequence of Market
        The same market with the laws fitted to the resampled logs.
    mechanisms : sequence of Mechanism
    measures : sequence of str
    threshold : float
        Of ``gain_chance``.
    rng : Generator
        Of the draws.
    progress : callable, optional
        Called with 1 after each resample.

    Returns
    -------
    mapping of array (resamples,) by (place of the mechanism, measure)
        Changes against the law of the log itself; ``inf`` where the resample's mean is infinite, nan where the
        number is not known.
    """
    common = _Common(market, mechanisms, measures, threshold, rng)
    base = common.measured(market)
    changes = {key: np.empty(len(resampled)) for key in base}
    for place, one in enumerate(resampled):
        found = common.measured(one)
        for key, value in found.items():
            changes[key][place] = value - base[key] if np.isfinite([value, base[key]]).all() else value
        if progress is not None:
            progress(1)
    return changes


def unseen_chance(market: Market, mechanisms: Sequence[Mechanism]) -> float:
    """Upper 95 % limit of a chance that none of the draws shows: 3 in their number (the rule of three)."""
    depth = max(depth_of(mechanism, market) for mechanism in mechanisms)
    return 3.0 / _draws(tiers(market.supply.units, market.bidders, depth)[-1])


def _draws(width: int) -> int:
    return int(np.clip(_BIDS // width, *_DRAWS))


class _Common:
    """Draws of upper-tail probabilities, shared by all laws and all mechanisms."""

    def __init__(
        self,
        market: Market,
        mechanisms: Sequence[Mechanism],
        measures: Sequence[str],
        threshold: float,
        rng: np.random.Generator,
    ) -> None:
        self._mechanisms, self._threshold = mechanisms, threshold
        self._measures = [measure for measure in measures if measure != "interim_gain"]
        depth = max(depth_of(mechanism, market) for mechanism in mechanisms)
        edges = tiers(market.supply.units, market.bidders, depth)
        draws = _draws(edges[-1])
        self._tails = lowest_uniforms(rng.spawn(len(edges)), draws, market.bidders, edges)
        self._interim = _Interim(market, mechanisms, rng) if "interim_gain" in measures else None

    def measured(self, market: Market) -> dict[tuple[int, str], float]:
        """Every measure of every mechanism under one law, from the common draws."""
        bids = bids_at(market, self._tails.copy())
        found: dict[tuple[int, str], float] = {}
        for place, mechanism in enumerate(self._mechanisms):
            heavy = heavy_amounts(market, mechanism, self._measures, bids[: _DRAWS[0]])
            amounts = draw_amounts(mechanism, bids, market.supply, self._measures, self._threshold)
            for measure in self._measures:
                if heavy.get(measure) == INFINITE:
                    found[place, measure] = np.inf if measure in MONEY else np.nan
                    continue
                found[place, measure] = _measure(amounts, measure)
            if self._interim is not None:
                found[place, "interim_gain"] = self._interim.gain(market, place)
        return found


def _measure(amounts: Amounts, measure: str) -> float:
    """One measure from the amounts of all draws."""
    total = float(np.sum(amounts.of[measure]))
    if measure == "efficiency":
        best = float(np.sum(amounts.best_welfare))
        return 1.0 - total / best if best > 0 else np.nan
    if measure in MONEY and total == 0:  # the draws never show what little there is
        return np.nan
    counted = float(np.sum(amounts.sold)) if measure in IF_SOLD else float(len(amounts.sold))
    return total / counted if counted > 0 else np.nan


class _Interim:
    """Interim gains on common draws: the best of a grid of reports against rivals' truthful bids."""

    def __init__(self, market: Market, mechanisms: Sequence[Mechanism], rng: np.random.Generator) -> None:
        self._mechanisms = mechanisms
        width = min(max(depth_of(one, market) for one in mechanisms), market.bidders - 1)
        edges = tiers(market.supply.units, market.bidders - 1, width)
        each = _REPORTS * (edges[-1] + 1)
        draws = int(np.clip(_REPORT_BIDS[0] // each, *_RIVAL_DRAWS))
        self._known = draws * each <= _REPORT_BIDS[1]
        if not self._known:
            return
        self._tails = lowest_uniforms(rng.spawn(len(edges)), draws, market.bidders - 1, edges)
        critical = np.sort(self._tails[:, market.supply.units - 1])
        self._own = np.linspace(0.0, min(market.turnout, critical[-1]), _REPORTS + 1)
        self._own = np.maximum(0.5 * (self._own[1:] + self._own[:-1]), _TINY)

    def gain(self, market: Market, place: int) -> float:
        """Interim gain of one mechanism under one law; nan where it is not known."""
        if not self._known:
            return float("nan")
        values = market.values.upper_quantile(self._own / market.turnout)
        rivals = bids_at(market, self._tails.copy())
        draws, width = rivals.shape
        bids = np.empty((_REPORTS, draws, width + 1))
        bids[:, :, 0] = values[:, None]
        bids[:, :, 1:] = rivals
        outcome = self._mechanisms[place].outcome(bids.reshape(-1, width + 1), market.supply)
        chance = outcome.allocation[:, 0].reshape(_REPORTS, draws).mean(axis=1)
        paid = outcome.payment[:, 0].reshape(_REPORTS, draws).mean(axis=1)
        utility = values[:, None] * chance - paid
        gains = utility.max(axis=1) - (values * chance - paid)
        won = float(np.sum(chance))
        return float(np.sum(gains / values) / won) if won > 0 else float("nan")
