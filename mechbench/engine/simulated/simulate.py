"""Simulation: every measure of several mechanisms on the same draws, to a requested error.

Draws are made in blocks, so that memory stays bounded, and summed in batches whose scatter gives the
intervals. The number of draws doubles until every requested error is met. The same market and seed give the
same draws whatever the mechanisms, so a difference between two of them is sharper than either alone.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace

from mechbench.contract import MEASURES, MONEY, InputError, Mechanism
from mechbench.engine.estimate import Estimate
from mechbench.engine.simulated.batches import FEWEST, doublings
from mechbench.engine.simulated.crowd import CrowdDraws
from mechbench.engine.simulated.intervals import Ratio, difference_half_width
from mechbench.engine.simulated.responses import InterimDraws
from mechbench.engine.simulated.tails import INFINITE
from mechbench.market.market import Market

__all__ = ["Simulation", "simulate"]

NO_SALE = "nothing was sold in any draw"
NO_MONEY = "no money in any draw"
NOT_REACHED = "error not reached"

_FORESIGHT = 2**0.5 / 1.1
"""How much too large a half-width may be for twice the draws to do, with some room for chance."""


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
    draws : mapping of int by str
        How many draws each measure rests on.
    ratios, notes : mapping by (int, str)
        The sums behind each measure of each mechanism, and what is the matter with it where something is.
    """

    mechanisms: tuple[Mechanism, ...]
    measures: tuple[str, ...]
    error: float
    seed: int
    draws: Mapping[str, int] = field(default_factory=dict)
    ratios: Mapping[tuple[int, str], Ratio] = field(default_factory=dict, repr=False)
    notes: Mapping[tuple[int, str], str] = field(default_factory=dict, repr=False)

    def estimate(self, i: int, measure: str) -> Estimate:
        """Estimate one measure of the i-th mechanism.

        Raises
        ------
        InputError
            If the measure was not asked for.
        """
        ratio, note = self._ratio(i, measure), self.notes.get((i, measure), "")
        if note == INFINITE:
            return self._without_number(math.nan if measure == "efficiency" else math.inf, note)
        if not ratio.known:
            return self._without_number(math.nan, NO_SALE)
        if measure in MONEY and ratio.value == 0:
            # the scatter of draws that are all 0 says nothing of what a rare sale is worth
            return Estimate(0.0, math.inf, "simulated", NO_MONEY, self.seed)
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
        notes = sorted({self.notes.get((i, measure), ""), self.notes.get((j, measure), "")} - {""})
        if INFINITE in notes:
            return self._without_number(math.nan, INFINITE)
        if not (first.known and second.known):
            return self._without_number(math.nan, NO_SALE)
        accepted = self._accepted(measure, max(abs(first.value), abs(second.value)))
        half_width = difference_half_width(first, second)
        return self._estimate(first.value - second.value, half_width, accepted, "; ".join(notes))

    def met(self, measures: Sequence[str], slack: float) -> bool:
        """Whether every half-width of these measures is within `slack` times the error asked for."""
        for i in range(len(self.mechanisms)):
            for measure in measures:
                estimate = self.estimate(i, measure)
                if estimate.status in {NO_SALE, NO_MONEY} or estimate.error > slack * self._accepted(
                    measure, estimate.value
                ):
                    return False
        return True

    def _ratio(self, i: int, measure: str) -> Ratio:
        if measure not in self.measures:
            msg = f"measure {measure!r} was not simulated; accepted: {', '.join(self.measures)}"
            raise InputError(msg)
        return self.ratios[i, measure]

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
    progress: Callable[[int], None] | None = None,
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
        At most so many draws, at least 64; 2^22 unless given, fewer where each holds many bids. Draws come in
        doublings, so as few as half of that may be made. An error not reached then is said in the status.
    progress : callable, optional
        Called with the number of draws made so far; interim gains start again from 0.

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
    found = Simulation(mechanisms, measures, error, seed)
    if of_draws:
        crowd = CrowdDraws(market, mechanisms, of_draws, seed, threshold)
        found = _until_known(found, crowd, of_draws, max_draws, progress)
    if "interim_gain" in measures:
        interim = InterimDraws(market, mechanisms, seed, error, max_draws)
        found = _until_known(found, interim, ["interim_gain"], max_draws, progress)
    return found


def _until_known(
    found: Simulation,
    source: CrowdDraws | InterimDraws,
    wanted: Sequence[str],
    max_draws: int | None,
    progress: Callable[[int], None] | None,
) -> Simulation:
    """Draw until the errors of the wanted measures are met.

    Stopping as soon as they are would favour draws that happen to scatter little. The decision is therefore
    taken one doubling ahead, on draws that are then only half of those the estimates rest on.
    """
    foreseen = False
    for sums, draws in doublings(source, max_draws, progress):
        found = replace(
            found,
            draws={**found.draws, **dict.fromkeys(wanted, draws)},
            ratios={**found.ratios, **source.ratios(sums, draws)},
            notes={**found.notes, **source.notes},
        )
        if foreseen and found.met(wanted, 1.0):
            break
        foreseen = found.met(wanted, _FORESIGHT)
    return found


def _check(
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
