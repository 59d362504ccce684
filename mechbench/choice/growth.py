"""At how many bidders a requirement would be met, by the file's own supply rule and the exact engine."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

from mechbench.choice.judge import Finding, verdict
from mechbench.engine.evaluate import evaluate_sizes

if TYPE_CHECKING:
    from mechbench.contract import Distribution, Mechanism
    from mechbench.market.file import MarketFile, Requirement

__all__ = ["MOST_BIDDERS", "Size", "size_that_meets"]

MOST_BIDDERS = 10**12
"""Largest crowd searched."""

_ERROR = 1e-7
_PARTS = 16
"""Into how many parts a range is cut at once: one call of the engine serves many sizes."""


@dataclass(frozen=True)
class Size:
    """What the search found.

    Attributes
    ----------
    kind : "from", "once", "nowhere", "unknown" or "unsearched"
        Met from `bidders` on, at every size looked at; met at `bidders`, but missed again at `again`; at no
        size looked at; not to be searched, because the rule's measure has no exact integral; or not searched,
        because the market is as large as the search goes already.
    bidders, again : int
        See `kind`; 0 where they do not apply.
    """

    kind: Literal["from", "once", "nowhere", "unknown", "unsearched"]
    bidders: int = 0
    again: int = 0


def size_that_meets(
    file: MarketFile, values: Distribution, mechanism: Mechanism, requirement: Requirement, start: int
) -> Size:
    """Search for the least size above `start` that meets a requirement which `start` misses.

    Sizes are doubled up to `MOST_BIDDERS`, all of them, so that a requirement met only for a while shows; the
    first step from missed to met is then narrowed down to one bidder.
    """

    def met(sizes: list[int]) -> list[bool] | None:
        markets = [file.market(values, size) for size in sizes]
        found = evaluate_sizes(markets, mechanism, requirement.measure, error=_ERROR, threshold=file.gain_threshold)
        if found is None:
            return None
        return [verdict(requirement, Finding(estimate)).word == "met" for estimate in found]

    if start >= MOST_BIDDERS:
        return Size("unsearched")
    doublings = [start << power for power in range((MOST_BIDDERS // start).bit_length())]
    if doublings[-1] < MOST_BIDDERS:
        doublings.append(MOST_BIDDERS)
    kept = met(doublings)
    if kept is None:
        return Size("unknown")
    if not any(kept):
        return Size("nowhere")
    first = kept.index(True)
    if first == 0:
        return Size("from", start)
    low, high = doublings[first - 1], doublings[first]
    while high - low > 1:
        inner = sorted({low + (high - low) * part // _PARTS for part in range(1, _PARTS)} - {low})
        answers = met(inner) or []
        where = answers.index(True) if True in answers else len(inner)
        low, high = (inner[where - 1] if where else low), (inner[where] if where < len(inner) else high)
    if all(kept[first:]):
        return Size("from", high)
    return Size("once", high, doublings[kept.index(False, first)])
