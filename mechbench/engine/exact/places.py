"""Where the rejected, or the lowest accepted, bid sits: the outer rule, panel by panel."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from mechbench.contract import Floats
from mechbench.engine.exact.resolution import Resolution
from mechbench.engine.exact.rules import cut_off, finite, nested, smooth, tame
from mechbench.engine.exact.sizes import Sizes
from mechbench.engine.exact.winners import Place

__all__ = ["Contested", "contested_nodes"]

_PARTS = 3
"""Pieces of a panel at neither of whose ends the integrand dies off."""


@dataclass(frozen=True)
class Contested:
    """Outer nodes: where the rejected (or lowest accepted) bid sits, with three nested weights that hold its density.

    Attributes
    ----------
    place : Place
        Arrays (cells, nodes).
    weights : array (cells, nodes, 3)
    knots_below : tuple of float
        Tail probabilities, among those who turn up, of the family's knots above this bid.
    """

    place: Place
    weights: Floats
    knots_below: tuple[float, ...]

    def block(self, cells: slice, nodes: slice) -> Contested:
        """Take some of the cells and nodes."""
        place = self.place
        part = Place(place.values, place.at[cells, nodes], place.rest[cells, nodes])
        return Contested(part, self.weights[cells, nodes], self.knots_below)


def contested_nodes(
    sizes: Sizes,
    rank: Floats,
    growth: float,
    resolution: Resolution,
    start: Floats | None = None,
    breaks: Sequence[Floats] = (),
) -> Iterator[Contested]:
    """Outer nodes for the rank-th highest bid where it is at least the reserve, panel by panel.

    With `start`, log-odds (cells,), only bids at or below that place are integrated over; `breaks` are further
    log-odds (cells,) at which the integrand is not smooth. With either, `knots_below` is not told.
    """
    law = sizes.law(rank)
    lo, hi = law.reach_below(growth, sizes.chance, sizes.chance_not)
    cut = law.log_odds(sizes.chance, sizes.chance_not)
    knots = sizes.knots
    told = start is None and not breaks
    if start is not None:
        lo = np.clip(start, lo, hi)
    elif told and not knots and (cut >= hi).all():
        y, weight = tame(lo, hi, law.slow_tail, resolution.outer)
        s, rest, density = law.at(y)
        yield Contested(sizes.place(s, rest, None), nested(weight * density), ())
        return
    stop = np.minimum(hi, cut)
    edges = [lo]
    for knot in knots:
        at = sizes.turnout * knot
        edges.append(np.clip(law.log_odds(at, 1.0 - at), lo, np.maximum(stop, lo)))
    edges += [np.clip(place, lo, np.maximum(stop, lo)) for place in breaks]
    edges = [*np.sort(np.stack(edges), axis=0), np.maximum(stop, lo)]
    for panel, (left, right) in enumerate(pairwise(edges)):
        if (right <= left).all():
            continue
        dies_left = start is None and bool((left <= lo).all())
        dies_right = bool((right >= hi).all())
        parts = _PARTS if panel == len(edges) - 2 or len(edges) <= _PARTS + 1 else 1
        # y = sinh t shortens the long exponential tails; the distance to the right end keeps its digits
        end = np.arcsinh(right)
        for from_hi, weights in _panel_rules(
            np.arcsinh(left), end, law.width, resolution, dies=(dies_left, dies_right), parts=parts
        ):
            t = end[:, None] - from_hi
            s, rest, density = law.at(np.sinh(t))
            density = density * np.cosh(t) * (right > left)[:, None]
            to_floor = None
            if sizes.chance_not > 0 and panel == len(edges) - 2:
                to_end = 2.0 * np.cosh(end[:, None] - 0.5 * from_hi) * np.sinh(0.5 * from_hi)
                to_cut = np.minimum((cut - right)[:, None] + to_end, 700.0)
                to_floor = sizes.chance * rest * -np.expm1(-to_cut)
            place = sizes.place(s, rest, to_floor)
            yield Contested(place, weights * density[..., None], tuple(knots[:panel]) if told else ())


def _panel_rules(
    begin: Floats, end: Floats, width: Floats, resolution: Resolution, *, dies: tuple[bool, bool], parts: int
) -> Iterator[tuple[Floats, Floats]]:
    """Distances of nodes below the end of one panel, with nested weights, for how the integrand goes at its ends.

    Where it dies off at neither, the panel is cut in parts, the last of which may end in any way.
    """
    if dies[0]:
        from_end, weight = cut_off(begin, end, width, resolution.cut)
        yield from_end, nested(weight)
    elif dies[1]:
        from_begin, weight = cut_off(begin, end, width, resolution.cut)
        yield (end - begin)[:, None] - from_begin, nested(weight)
    else:
        step = (end - begin) / parts
        for part in range(1, max(parts, 2)):
            left = begin + (part - 1) * step
            _, from_end, weights = smooth(left, left + step, resolution.smooth)
            yield from_end + (end - left - step)[:, None], weights
        if parts > 1:
            # perhaps the cut, where bids may fall to 0 like a power
            _, from_end, weight = finite(end - step, end, resolution.cut)
            yield from_end, nested(weight)
