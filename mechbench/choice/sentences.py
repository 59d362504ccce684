"""The decision in sentences: what to do, why, and what would change it."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence

from mechbench.choice.judge import Candidate, Decision, Finding, Verdict, difference, equal, interval
from mechbench.contract import MONEY, number_words
from mechbench.market.file import MarketFile
from mechbench.show.figures import figure, largest_error

__all__ = ["bound_words", "finding_words", "money_words", "recommendation"]


def recommendation(file: MarketFile, candidates: Sequence[Candidate], decision: Decision, current: int | None) -> str:
    """Say what the decision is, why, and what would change it.

    Revenue if nobody shades is never named without revenue if each alone shades.
    """
    if not decision.leaders:
        return _none(candidates, decision, file)
    if len(decision.leaders) > 1:
        return _tie(file, candidates, decision, current)
    return _one(file, candidates, decision, current)


def bound_words(one: Verdict) -> str:
    """Tell a requirement: ``worst_gain at most 0.05``."""
    bound = one.requirement
    side, limit = ("at least", bound.at_least) if bound.at_most is None else ("at most", bound.at_most)
    return f"{bound.measure} {side} {number_words(limit or 0.0)}"


def finding_words(finding: Finding) -> str:
    """Write a number with the digits that its errors leave."""
    estimate = finding.estimate
    return figure(estimate.value, largest_error(estimate.error, finding.log_error), estimate.status)


def money_words(file: MarketFile, candidate: Candidate) -> str:
    """Tell both revenues of a rule."""
    revenue, shaded = (_money(file, candidate.findings[name]) for name in ("revenue", "shaded_revenue"))
    return f"{revenue} if nobody shades, {shaded} if each alone shades"


def _one(file: MarketFile, candidates: Sequence[Candidate], decision: Decision, current: int | None) -> str:
    (best,) = decision.leaders
    chosen = candidates[best]
    if current is None:
        start = f"Recommended: {chosen.rule}"
    elif best == current:
        start = f"Recommended: keep {chosen.rule}"
    else:
        start = f"Recommended: {chosen.rule} in place of {candidates[current].rule}"
    return f"{start}, because {_why(file, candidates, decision)}; {_change(file, candidates, decision)}."


def _why(file: MarketFile, candidates: Sequence[Candidate], decision: Decision) -> str:
    chosen = candidates[decision.leaders[0]]
    earns = f"it earns {money_words(file, chosen)}"
    if not file.requirements:
        reason = f"it ranks first by {file.objective}"
    elif not decision.followers:
        meets = "is known to meet" if decision.unsure else "meets"
        return f"it alone {meets} every requirement ({earns})"
    else:
        reason = f"of the {len(decision.followers) + 1} rules that meet every requirement it ranks first by "
        reason += f"{file.objective}, {_lead(file, candidates, decision)}"
    if file.objective not in {"revenue", "shaded_revenue"}:
        reason += f", {_amount(file, chosen)}"
    if decision.followers:
        earns += _if_shaded(file, chosen, _second(file, candidates, decision))
    return f"{reason} ({earns})"


def _lead(file: MarketFile, candidates: Sequence[Candidate], decision: Decision) -> str:
    """Tell how far the first is ahead of the second by the objective."""
    best, second = candidates[decision.leaders[0]], _second(file, candidates, decision)
    gap = difference(best.findings[file.objective], second.findings[file.objective])
    told = _money(file, gap) if file.objective in MONEY else finding_words(gap)
    return f"{told} ahead of {second.rule}"


def _if_shaded(file: MarketFile, ahead: Candidate, behind: Candidate) -> str:
    """Say so where a lead in revenue rests on nobody shading."""
    if file.objective != "revenue":
        return ""
    one, other = ahead.findings["shaded_revenue"], behind.findings["shaded_revenue"]
    low, high = interval(difference(one, other))
    if equal(one, other):
        return f"; if each alone shades, {behind.rule} earns the same"
    if high < 0:
        return f"; if each alone shades, {behind.rule} earns more, {_money(file, other)}"
    if low <= 0:
        return f"; if each alone shades, its lead over {behind.rule} is within the error"
    return ""


def _change(file: MarketFile, candidates: Sequence[Candidate], decision: Decision) -> str:
    """Say what would change the recommendation."""
    if decision.above:
        other = decision.above[0]
        broken = [one for one in decision.verdicts[other] if one.word != "met"]
        missed = [f"{one.requirement.measure} of {finding_words(one.finding)}" for one in broken]
        rule = candidates[other]
        shaded = _if_shaded(file, rule, candidates[decision.leaders[0]])
        sure = all(one.word == "missed" for one in broken)
        verb = "accepting" if sure else "being sure of or accepting"
        return f"{verb} a {_listed(missed)} would put {rule.rule} first ({_ranked(file, rule)}{shaded})"
    if decision.followers:
        second = _second(file, candidates, decision)
        return f"a tighter requirement that it misses would put {second.rule} first ({_ranked(file, second)})"
    if len(candidates) == 1:
        return "no other rule was compared"
    return f"no rule that misses a requirement is known to rank above it by {file.objective}"


def _tie(file: MarketFile, candidates: Sequence[Candidate], decision: Decision, current: int | None) -> str:
    tied = [candidates[place] for place in decision.leaders]
    first = tied[0].findings[file.objective]
    rules = _listed([candidate.rule for candidate in tied])
    goal = file.objective
    if all(equal(first, candidate.findings[goal]) for candidate in tied[1:]):
        how = f"{rules} come out equal by {goal}, {_amount(file, tied[0])}"
    elif endless := [one.rule for one in tied if math.isinf(one.findings[goal].value)]:
        how = f"{rules} cannot be ranked by {goal}, whose mean is infinite under {_listed(endless)}"
    else:
        each = _listed([f"{_amount(file, one)} for {one.rule}" for one in tied])
        how = f"the evidence cannot separate {rules} by {goal}: {each}, and the difference is within its error"
    money = "; ".join(f"{one.rule} earns {money_words(file, one)}" for one in tied)
    if file.objective in {"revenue", "shaded_revenue"}:
        how += f" ({money})"
    if current in decision.leaders:
        advice = f"nothing here speaks for a change from {candidates[current].rule}"
    else:
        least = min(tied, key=lambda one: one.findings["worst_gain"].value)
        gain = finding_words(least.findings["worst_gain"])
        advice = f"{least.rule} has the smaller worst_gain of them, {gain}"
    return f"No single recommendation: {how}; {advice}, and another objective or a tighter requirement would decide."


def _none(candidates: Sequence[Candidate], decision: Decision, file: MarketFile) -> str:
    if decision.unsure:
        parts = []
        for place in decision.unsure:
            open_ones = [one for one in decision.verdicts[place] if one.word == "cannot tell"]
            told = _listed([f"{bound_words(one)} ({finding_words(one.finding)})" for one in open_ones])
            parts.append(f"{candidates[place].rule} may, but {told} is within the error")
        return (
            f"No recommendation: no rule is known to meet every requirement; {'; '.join(parts)}; "
            f"{'a longer log' if _has_log(candidates) else 'a smaller error'} or another limit would decide."
        )
    if decision.nearest is None:
        return "No recommendation: nothing was compared."
    rule = candidates[decision.nearest]
    missed = [one for one in decision.verdicts[decision.nearest] if one.word == "missed"]
    told = _listed([f"{finding_words(one.finding)} where {bound_words(one)} is required" for one in missed])
    loosened = _listed([one.requirement.measure for one in missed])
    return (
        f"No recommendation: no rule meets every requirement; {rule.rule} comes nearest, with {told} "
        f"({_ranked(file, rule)}); another limit on {loosened} would change that."
    )


def _ranked(file: MarketFile, candidate: Candidate) -> str:
    """Both revenues, and the objective where it is neither."""
    money = money_words(file, candidate)
    if file.objective in {"revenue", "shaded_revenue"}:
        return money
    return f"{file.objective} {_amount(file, candidate)}; {money}"


def _amount(file: MarketFile, candidate: Candidate) -> str:
    finding = candidate.findings[file.objective]
    return _money(file, finding) if file.objective in MONEY else finding_words(finding)


def _money(file: MarketFile, finding: Finding) -> str:
    told = "an infinite mean" if math.isinf(finding.value) else finding_words(finding)
    return f"{told} {file.currency}".rstrip() if told[-1].isdigit() else told


def _second(file: MarketFile, candidates: Sequence[Candidate], decision: Decision) -> Candidate:
    followers = [candidates[place] for place in decision.followers]
    return max(followers, key=lambda one: one.findings[file.objective].value)


def _has_log(candidates: Sequence[Candidate]) -> bool:
    return any(finding.log_error is not None for finding in candidates[0].findings.values())


def _listed(items: Iterable[str]) -> str:
    *others, last = items
    return f"{', '.join(others)} and {last}" if others else last
