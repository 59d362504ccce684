"""What the numbers do not cover: said beside a recommendation, refused where a market file declares it."""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["NOT_MODELLED", "Limit", "limit_of"]


@dataclass(frozen=True)
class Limit:
    """Something a market may have and the model has not.

    Attributes
    ----------
    topic : str
        What it is, in the trade's words.
    why : str
        Why numbers computed without it would mislead.
    words : str
        The keys, or words of keys, by which a market file would declare it, in the singular.
    """

    topic: str
    why: str
    words: str


NOT_MODELLED = (
    Limit(
        "common values",
        "what a unit is worth would be uncertain and shared, and winning itself would be bad news; "
        "the numbers hold where every bidder knows its own value",
        "common_value affiliated affiliation interdependent",
    ),
    Limit(
        "resale",
        "a bid would follow what others pay afterwards, not the bidder's own use, "
        "so the values would depend on the rule",
        "resale resell reselling aftermarket secondary_market",
    ),
    Limit(
        "packages of complements",
        "bidders would want units together or not at all, and bids on single units say nothing about that",
        "package bundle combinatorial complement synergy synergies",
    ),
    Limit(
        "default and refunds",
        "a winner who may walk away holds an option and bids more than it expects to pay, "
        "so revenue would be overstated",
        "default default_rate default_chance non_payment nonpayment refund refundable deposit cancellation",
    ),
    Limit(
        "dynamic formats",
        "bidders would see prices and answer them; the numbers are for one round of sealed bids",
        "dynamic round clock ascending descending increment rebid rebidding",
    ),
    Limit(
        "tacit collusion over time",
        "bidders who meet again can hold back together; the gains are of one bidder acting alone, once",
        "collusion cartel ring repeated",
    ),
    Limit(
        "fees",
        "a fee changes what a win costs and who turns up; the payments here are the auction's prices alone",
        "fee commission surcharge premium",
    ),
)
"""Everything that is outside the model, whatever the version."""

_NOT_YET = {
    "group": "groups of bidders with values of their own",
    "groups": "groups of bidders with values of their own",
    "common_shock": "a shock common to all bidders",
    "correlation": "correlated values",
    "demand": "bidders who want several units",
    "slots": "ranked slots",
    "weights": "ranked slots",
    "quality": "quality weights",
    "zones": "supply under zone caps",
    "caps": "supply under zone caps",
}
"""Kinds of crowd and supply that the model will cover and this version does not."""


def limit_of(key: str) -> str | None:
    """Say why a key of a market file is outside the model or this version; ``None`` if it is neither."""
    plain = key.strip().lower().replace("-", "_").replace(" ", "_")
    if plain in _NOT_YET:
        return f"{_NOT_YET[plain]}: not in this version"
    words = {plain} | set(plain.split("_")) - {"default", "defaults"}
    words |= {word.removesuffix("s") for word in words}
    for limit in NOT_MODELLED:
        if words & set(limit.words.split()):
            return f"{limit.topic}: not modelled, and the numbers would mislead: {limit.why}"
    return None
