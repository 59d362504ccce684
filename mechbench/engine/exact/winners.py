"""Bids at quadrature nodes, as ratios that never subtract two numbers that are almost equal."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from mechbench.contract import Distribution, Floats

__all__ = ["Place", "Ranked"]


@dataclass(frozen=True)
class Place:
    """Where a bid sits in the crowd's law: its upper-tail probability and the complement, both with all digits.

    Attributes
    ----------
    values : Distribution
    at, rest : arrays
        ``s`` and ``1 - s`` of the bid among those who turn up.
    """

    values: Distribution
    at: Floats
    rest: Floats

    @cached_property
    def _near_bottom(self) -> bool:
        """Whether the lower tail's own quantile is needed: the family has one, and a node is down there."""
        return _has_lower_quantile(self.values) and float(self.rest.min()) < 0.5  # noqa: PLR2004

    @cached_property
    def bid(self) -> Floats:
        """The bid itself."""
        if not self._near_bottom:
            return self.values.upper_quantile(self.at)
        low = self.rest < 0.5  # noqa: PLR2004
        upper = self.values.upper_quantile(np.where(low, 0.5, self.at))
        return np.where(low, self.values.lower_quantile(np.where(low, self.rest, 0.5)), upper)

    def up(self, log_ratio: Floats) -> Place:
        """Return the place whose tail probability is ``exp(-log_ratio)`` of this one's."""
        return Place(self.values, self.at * np.exp(-log_ratio), self.rest - self.at * np.expm1(-log_ratio))

    def drop_from(self, log_ratio: Floats) -> Floats:
        """``1 - bid / (bid of up(log_ratio))``."""
        if not self._near_bottom or self.values.support[0] > 0:
            # with a lowest value above 0 two low bids are nearly equal: their ratio has no digits
            return self.values.relative_drop(self.at, log_ratio)
        # From above, the digits lost are those of 1 - s; from below, those of the ratio of the two.
        drop = self.values.relative_drop(self.at, log_ratio)
        low = (self.rest < 0.5) & (self.rest * self.rest < log_ratio * self.at)  # noqa: PLR2004
        if not low.any():
            return drop
        at, rest, ratio, bid = (
            np.broadcast_to(part, low.shape)[low] for part in (self.at, self.rest, log_ratio, self.bid)
        )
        top = Place(self.values, at, rest).up(ratio).bid
        drop = np.array(np.broadcast_to(drop, low.shape))
        drop[low] = np.where(top > 0, 1.0 - bid / np.where(top > 0, top, 1.0), 0.0)
        return drop


def _has_lower_quantile(values: Distribution) -> bool:
    return type(values).lower_quantile is not Distribution.lower_quantile


class Ranked:
    """Threshold, lowest winner and winner at quadrature nodes; what `Functional.amount` is called with.

    Parameters
    ----------
    base : Place
        The first rejected bid, or the lowest bid that the reserve lets in.
    share : float
        The threshold over the bid at `base`: 1 for a rejected bid, less for a reserve below every value,
        0 where nothing is rejected and there is no reserve.
    lowest, winner : arrays, optional
        Log ratios of tail probability from `base` to the lowest winner, and from the lowest winner (from `base`
        where no lowest is given) to the winner. ``None`` where the functional does not look.
    """

    def __init__(self, base: Place, share: float, lowest: Floats | None = None, winner: Floats | None = None) -> None:
        self._base = base
        self._share = share
        self._lowest = lowest
        self._winner = winner

    @cached_property
    def _low_place(self) -> Place:
        return self._base if self._lowest is None else self._base.up(self._lowest)

    @cached_property
    def threshold(self) -> Floats:
        """The larger of the first rejected bid and the reserve."""
        if self._share == 0:
            return np.zeros_like(self._base.at)
        return self._share * self._base.bid

    @cached_property
    def lowest(self) -> Floats:
        """The lowest winner's bid."""
        return self._low_place.bid

    @cached_property
    def winner(self) -> Floats:
        """The winner's bid."""
        return self._low_place.bid if self._winner is None else self._low_place.up(self._winner).bid

    @cached_property
    def room(self) -> Floats:
        """``1 - threshold / winner``."""
        parts = [part for part in (self._lowest, self._winner) if part is not None]
        return self._above_threshold(parts[0] if len(parts) == 1 else parts[0] + parts[1])

    @cached_property
    def lowest_room(self) -> Floats:
        """``1 - threshold / lowest``."""
        return self._above_threshold(np.zeros(1) if self._lowest is None else self._lowest)

    @cached_property
    def spread(self) -> Floats:
        """``1 - lowest / winner``."""
        return self._low_place.drop_from(np.zeros(1) if self._winner is None else self._winner)

    def _above_threshold(self, log_ratio: Floats) -> Floats:
        if self._share == 0:
            return np.ones(np.broadcast_shapes(self._base.at.shape, log_ratio.shape))
        drop = self._base.drop_from(log_ratio)
        return drop if self._share == 1 else drop + (1.0 - drop) * (1.0 - self._share)
