"""The decision itself: requirements are constraints, an objective ranks what is left, ties are ties.

Pure functions over findings. A finding is a number with two errors, its own and that of the log it rests on;
nothing is said that these do not carry: what lies within them cannot be told.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Literal

import numpy as np

from mechbench.contract import MONEY, Floats
from mechbench.engine.estimate import Estimate
from mechbench.logs.fit import log_interval
from mechbench.market.file import Requirement

__all__ = [
    "Candidate",
    "Decision",
    "Finding",
    "Verdict",
    "decide",
    "difference",
    "interval",
    "verdict",
]

_SAME = 1e-9
"""Numbers that agree to this, absolute or as a share of the larger, are equal: exact ones carry no more."""


@dataclass(frozen=True)
class Finding:
    """A measure of one rule in one market, as the decision sees it.

    Attributes
    ----------
    estimate : Estimate
    resampled : array or None
        The same number on each resample of the log; ``None`` where the values come from no log. The same place
        in two findings of one market is the same resample.
    signed : bool
        Whether the number is a difference: measures themselves are never negative.
    blur : float
        How far the resampled numbers themselves may be off, where that matters.
    """

    estimate: Estimate
    resampled: Floats | None = field(default=None, repr=False)
    signed: bool = False
    blur: float = 0.0

    @property
    def value(self) -> float:
        """The number."""
        return self.estimate.value

    @property
    def log_range(self) -> tuple[float, float] | None:
        """95 % interval that the log leaves, its own error apart; ``None`` without a log."""
        if self.resampled is None:
            return None
        if self.signed:
            low, high = _signed_range(self.value, self.resampled)
            return low - self.blur, high + self.blur
        if math.isinf(self.value) and np.all(self.resampled == self.value):
            return self.value, self.value
        known = np.where(np.isnan(self.resampled), math.inf, self.resampled)
        low, high, _ = log_interval(self.value, known)
        return max(low - self.blur, 0.0), high + self.blur

    @property
    def log_error(self) -> float | None:
        """Half-width of that interval, ``inf`` where the log leaves none."""
        if self.log_range is None:
            return None
        low, high = self.log_range
        return (high - low) / 2 if high > low else 0.0

    @property
    def error(self) -> float:
        """Both errors together."""
        own = math.inf if math.isnan(self.estimate.error) else self.estimate.error
        return _combined(own, self.log_error or 0.0, self.estimate.method)


@dataclass(frozen=True)
class Verdict:
    """Whether a rule keeps a requirement."""

    requirement: Requirement
    finding: Finding
    word: Literal["met", "missed", "cannot tell"]


@dataclass(frozen=True)
class Candidate:
    """One rule with its findings by measure."""

    rule: str
    findings: Mapping[str, Finding]


@dataclass(frozen=True)
class Decision:
    """What follows from the findings. Rules are told by their place among the candidates.

    Attributes
    ----------
    verdicts : tuple of tuple of Verdict
        For every candidate, one for each requirement.
    leaders : tuple of int
        Those that meet every requirement and rank first; several where the evidence cannot separate them,
        none where no rule is known to meet every requirement.
    followers : tuple of int
        The others that meet every requirement.
    unsure : tuple of int
        Those that miss no requirement for certain, but not all can be told.
    above : tuple of int
        Those outside `leaders` and `followers` that the objective ranks above the leaders, best first.
    nearest : int or None
        Where no rule meets or may meet the requirements: the one that misses fewest, and by least.
    """

    verdicts: tuple[tuple[Verdict, ...], ...]
    leaders: tuple[int, ...]
    followers: tuple[int, ...]
    unsure: tuple[int, ...]
    above: tuple[int, ...]
    nearest: int | None


def decide(candidates: Sequence[Candidate], requirements: Sequence[Requirement], objective: str) -> Decision:
    """Weigh rules against requirements, and rank those that meet them.

    Parameters
    ----------
    candidates : sequence of Candidate
        Each with a finding for every requirement's measure and for the objective.
    requirements : sequence of Requirement
    objective : str
        A measure; more is better.
    """
    verdicts = tuple(
        tuple(verdict(bound, candidate.findings[bound.measure]) for bound in requirements) for candidate in candidates
    )
    words = [{one.word for one in of_rule} for of_rule in verdicts]
    meets = [place for place, found in enumerate(words) if found <= {"met"}]
    unsure = [place for place, found in enumerate(words) if "cannot tell" in found and "missed" not in found]
    goal = [candidate.findings[objective] for candidate in candidates]
    leaders = _first(meets, goal)
    above: list[int] = []
    if leaders:
        rest = [place for place in range(len(candidates)) if place not in meets]
        above = [place for place in rest if all(_ahead(goal[place], goal[best]) for best in leaders)]
        above.sort(key=lambda place: -goal[place].value)
    nearest = None
    if not meets and not unsure:
        nearest = min(range(len(candidates)), key=lambda place: _distance(verdicts[place]))
    followers = tuple(place for place in meets if place not in leaders)
    return Decision(verdicts, tuple(leaders), followers, tuple(unsure), tuple(above), nearest)


def verdict(requirement: Requirement, finding: Finding) -> Verdict:
    """Say whether a requirement is met, missed, or within the error."""
    low, high = interval(finding)
    limit = requirement.at_most if requirement.at_least is None else requirement.at_least
    if limit is None:
        msg = f"a requirement on {requirement.measure} without a limit"
        raise ValueError(msg)
    slack = _SAME * (abs(limit) if requirement.measure in MONEY else 1.0)
    if requirement.at_least is not None:
        low, high, limit = -high, -low, -limit
    if high <= limit + slack:
        return Verdict(requirement, finding, "met")
    if low > limit + slack:
        return Verdict(requirement, finding, "missed")
    return Verdict(requirement, finding, "cannot tell")


def interval(finding: Finding) -> tuple[float, float]:
    """Range in which the number lies, as far as its errors and its status say."""
    value, status = finding.value, finding.estimate.status
    if math.isinf(value) and "infinite" in status and not finding.log_error:
        return value, value
    if not (math.isfinite(value) and math.isfinite(finding.estimate.error)) or "infinite variance" in status:
        return -math.inf, math.inf
    low, high = finding.log_range or (value, value)
    own, method = finding.estimate.error, finding.estimate.method
    low, high = value - _combined(own, value - low, method), value + _combined(own, high - value, method)
    return low, math.inf if "lower bound" in status else high


def difference(first: Finding, second: Finding) -> Finding:
    """How much larger one number is than another of the same market, on the same resamples of the log."""
    one, other = first.estimate, second.estimate
    exact = one.method == other.method == "exact"
    error = one.error + other.error if exact else math.hypot(one.error, other.error)
    notes = dict.fromkeys(status for status in (one.status, other.status) if status != "ok")
    infinite = not (math.isfinite(one.value) and math.isfinite(other.value))
    with np.errstate(invalid="ignore"):
        resampled = None if first.resampled is None or second.resampled is None else first.resampled - second.resampled
    estimate = Estimate(
        math.nan if infinite else one.value - other.value,
        math.nan if infinite else error,
        "exact" if exact else "simulated",
        "; ".join(notes) or "ok",
    )
    return Finding(estimate, resampled, signed=True, blur=first.blur + second.blur)


def equal(first: Finding, second: Finding) -> bool:
    """Whether two amounts of money, or two shares, are the same, not merely within their errors.

    As a share of the larger: money may be counted in any unit, and shares that are ranked are close to 1.
    """
    gap = difference(first, second)
    return math.isfinite(gap.value) and abs(gap.value) + gap.error <= _SAME * _size(first, second)


def _first(meets: Sequence[int], goal: Sequence[Finding]) -> list[int]:
    """Those that no other is ahead of beyond the errors, the largest number first."""
    finite = [place for place in meets if math.isfinite(goal[place].value)]
    if not finite:
        return list(meets)
    best = max(finite, key=lambda place: goal[place].value)
    tied = [place for place in meets if place != best and not _ahead(goal[best], goal[place])]
    return [best, *tied]


def _ahead(first: Finding, second: Finding) -> bool:
    """Whether the first number is larger beyond their combined error."""
    low, _ = interval(difference(first, second))
    return low > _SAME * _size(first, second)


def _size(first: Finding, second: Finding) -> float:
    return max(abs(first.value), abs(second.value))


def _distance(verdicts: Sequence[Verdict]) -> tuple[int, float]:
    """How many requirements are missed, and by how much the worst."""
    missed = [one for one in verdicts if one.word == "missed"]
    return len(missed), max((_shortfall(one) for one in missed), default=0.0)


def _shortfall(one: Verdict) -> float:
    bound = one.requirement
    limit = bound.at_least if bound.at_most is None else bound.at_most
    gap = abs(one.finding.value - (limit or 0.0))
    return gap / abs(limit) if bound.measure in MONEY and limit else gap


def _combined(own: float, of_log: float, method: str) -> float:
    """Add a bound to a half-width; two half-widths add as independent errors do."""
    return math.hypot(own, of_log) if method == "simulated" else own + of_log


def _signed_range(value: float, resampled: Floats) -> tuple[float, float]:
    """1.96 root mean square deviations of the resampled differences from the difference, to either side."""
    if not (math.isfinite(value) and np.isfinite(resampled).all()):
        return -math.inf, math.inf
    reach = _NORMAL * math.sqrt(float(np.mean((resampled - value) ** 2)))
    return value - reach, value + reach


_NORMAL = 1.959963984540054
"""The normal law's quantile for 95 % between both sides."""
