"""Simulation: every measure of several mechanisms on the same draws, to a requested error.

Draws are made in blocks, so that memory stays bounded, and summed in batches whose scatter gives the
intervals. The number of draws doubles until every requested error is met. The same market and seed give the
same draws whatever the mechanisms, so a difference between two of them is sharper than either alone.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field

from mechbench.contract import MEASURES, MONEY, InputError, Mechanism
from mechbench.engine.batches import FEWEST, doublings
from mechbench.engine.crowd import CrowdDraws
from mechbench.engine.estimate import Estimate
from mechbench.engine.intervals import Ratio, difference_half_width
from mechbench.engine.responses import InterimDraws
from mechbench.engine.tails import INFINITE
from mechbench.market.market import Market

__all__ = ["Simulation", "simulate"]

NO_SALE = "nothing was sold in any draw"
NOT_REACHED = "error not reached"


@dataclass(frozen=True)
class Simulation:
    """What a simulation found: estimates, and differences on the same draws.

    Attributes
    ----------
    mechanisms : tuple of Mechanism
    measures : tuple of str
    error : float
        The half-width asked for.
    seed : int
    draws : int
        How many draws the measures of a draw rest on.
    interim_draws : int
        How many the interim gains rest on.
    """

    mechanisms: tuple[Mechanism, ...]
    measures: tuple[str, ...]
    error: float
    seed: int
    draws: int
    interim_draws: int
    _ratios: Mapping[tuple[int, str], Ratio] = field(repr=False)
    _notes: Mapping[tuple[int, str], str] = field(repr=False)

    def estimate(self, i: int, measure: str) -> Estimate:
        """Estimate one measure of the i-th mechanism.

        Raises
        ------
        InputError
            If the measure was not asked for.
        """
        ratio, note = self._ratio(i, measure), self._notes.get((i, measure), "")
        if note == INFINITE:
            return self._without_number(math.nan if measure == "efficiency" else math.inf, note)
        if not ratio.known:
            return self._without_number(math.nan, NO_SALE)
        value = max(0.0, ratio.value) if measure == "interim_gain" else ratio.value
        return self._estimate(value, ratio.half_width, self._accepted(measure, value), note)

    def difference(self, i: int, j: int, measure: str) -> Estimate:
        """Estimate how much larger a measure of the i-th mechanism is than that of the j-th.

        Raises
        ------
        InputError
            If the measure was not asked for.
        """
        first, second = self._ratio(i, measure), self._ratio(j, measure)
        notes = sorted({self._notes.get((i, measure), ""), self._notes.get((j, measure), "")} - {""})
        if INFINITE in notes:
            return self._without_number(math.nan, INFINITE)
        if not (first.known and second.known):
            return self._without_number(math.nan, NO_SALE)
        accepted = self._accepted(measure, max(abs(first.value), abs(second.value)))
        half_width = difference_half_width(first, second)
        return self._estimate(first.value - second.value, half_width, accepted, "; ".join(notes))

    def unmet(self, measures: Sequence[str]) -> bool:
        """Whether a half-width of these measures is still above the error asked for."""
        return any(
            NOT_REACHED in self.estimate(i, measure).status
            for i in range(len(self.mechanisms))
            for measure in measures
        )

    def _ratio(self, i: int, measure: str) -> Ratio:
        if measure not in self.measures:
            msg = f"measure {measure!r} was not simulated; accepted: {', '.join(self.measures)}"
            raise InputError(msg)
        return self._ratios[i, measure]

    def _accepted(self, measure: str, value: float) -> float:
        return self.error * abs(value) if measure in MONEY else self.error

    def _estimate(self, value: float, half_width: float, accepted: float, note: str) -> Estimate:
        missed = "" if half_width <= accepted else NOT_REACHED
        status = "; ".join(word for word in (note, missed) if word) or "ok"
        return Estimate(value, half_width, "simulated", status, self.seed)

    def _without_number(self, value: float, status: str) -> Estimate:
        return Estimate(value, math.nan, "simulated", status, self.seed)


def simulate(
    market: Market,
    mechanisms: Sequence[Mechanism],
    measures: Sequence[str],
    *,
    error: float,
    seed: int,
    threshold: float = 0.05,
    max_draws: int | None = None,
    progress: Callable[[int, int], None] | None = None,
) -> Simulation:
    """Simulate a market until every measure of every mechanism is known to the error asked for.

    Parameters
    ----------
    market : Market
    mechanisms : sequence of Mechanism
        All see the same draws; their order and company changes nothing but how many draws are made.
    measures : sequence of str
        Names in `mechbench.contract.MEASURES`.
    error : float
        Largest 95 % half-width accepted: absolute for shares, relative to the value for money.
    seed : int
        At least 0; the draws depend on it and on the market alone.
    threshold : float
        The gain above which ``gain_chance`` counts.
    max_draws : int, optional
        At most so many draws, at least 64; 2^24 unless given, fewer where each holds many bids. Draws come in
        doublings, so as few as half of that may be made. An error not reached then is said in the status.
    progress : callable, optional
        Called with the draws made so far and the most there can be.

    Returns
    -------
    Simulation

    Raises
    ------
    InputError
        If an argument is outside its domain, a mechanism does not serve the supply, or a draw is too large.
    """
    _check(market, mechanisms, measures, error, seed, threshold, max_draws)
    mechanisms, measures = tuple(mechanisms), tuple(dict.fromkeys(measures))
    of_draws = [measure for measure in measures if measure != "interim_gain"]
    ratios: dict[tuple[int, str], Ratio] = {}
    notes: dict[tuple[int, str], str] = {}
    counts = {"draws": 0, "interim_draws": 0}

    def so_far() -> Simulation:
        return Simulation(mechanisms, measures, error, seed, **counts, _ratios=ratios, _notes=notes)

    if of_draws:
        crowd = CrowdDraws(market, mechanisms, of_draws, seed, threshold)
        for sums, counts["draws"] in doublings(crowd, max_draws, progress):
            ratios |= crowd.ratios(sums, counts["draws"])
            notes |= crowd.notes
            if not so_far().unmet(of_draws):
                break
    if "interim_gain" in measures:
        single = InterimDraws(market, mechanisms, seed, error)
        for sums, counts["interim_draws"] in doublings(single, max_draws, progress):
            ratios |= single.ratios(sums)
            if not so_far().unmet(["interim_gain"]):
                break
    return so_far()


def _check(  # noqa: PLR0917  the arguments of `simulate`
    market: Market,
    mechanisms: Sequence[Mechanism],
    measures: Sequence[str],
    error: float,
    seed: int,
    threshold: float,
    max_draws: int | None,
) -> None:
    for measure in measures:
        if measure not in MEASURES:
            msg = f"there is no measure {measure!r}; accepted: {', '.join(MEASURES)}"
            raise InputError(msg)
    for mechanism in mechanisms:
        if market.supply.kind not in mechanism.serves:
            serves = ", ".join(sorted(mechanism.serves))
            msg = f"mechanism {mechanism.name} does not serve {market.supply.kind}; it serves: {serves}"
            raise InputError(msg)
    wrong = {
        "mechanisms": (not mechanisms, len(mechanisms), "at least one"),
        "measures": (not measures, len(measures), "at least one"),
        "error": (not (math.isfinite(error) and error > 0), error, "a finite number above 0"),
        "seed": (seed < 0, seed, "a whole number of at least 0"),
        "threshold": (not 0 <= threshold < 1, threshold, "a number of at least 0 and below 1"),
        "max_draws": (max_draws is not None and max_draws < FEWEST, max_draws, f"at least {FEWEST}"),
    }
    for name, (bad, found, accepted) in wrong.items():
        if bad:
            msg = f"simulation: {name} is {found!r}; accepted is {accepted}"
            raise InputError(msg)
