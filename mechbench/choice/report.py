"""The choice as people read it: the market, the rules side by side, the decision, its limits."""

from __future__ import annotations

import math
from collections.abc import Callable

from mechbench.choice.evidence import SHOWN, AtSize, Evidence
from mechbench.choice.growth import MOST_BIDDERS, Size, size_that_meets
from mechbench.choice.judge import Candidate, Decision, Finding, Verdict, decide, difference
from mechbench.choice.sentences import bound_words, finding_words, recommendation
from mechbench.contract import MONEY, number_words
from mechbench.logs.fit import depends_on_tail
from mechbench.market.limits import NOT_MODELLED
from mechbench.market.words import market_words
from mechbench.show.figures import change, figure, largest_error, limits_digits, plus_minus
from mechbench.show.tables import Style, bullets, heading, table

__all__ = ["report"]

_ASSUMED = "On the market file's assumptions: private values, one bidder acting alone, one auction, an honest operator."
_REVENUES = (
    "Neither revenue is a forecast or a bound: the one takes every bid as truthful, the other lets each winner, "
    "alone, pay the least that keeps the unit; a season's bids lie elsewhere."
)
_LAW = (
    "An auction's rules may fall under competition, procurement, tax, securities or sector law: counsel and the "
    "regulator's own rule book decide."
)
_MOST = f"10^{len(str(MOST_BIDDERS)) - 1}"
_EXACT_BELOW = 1_000_000
"""Sizes below this are told to the bidder, larger ones to three digits."""


def report(evidence: Evidence, style: Style) -> str:
    """Write the whole report.

    Parameters
    ----------
    evidence : Evidence
    style : "table" or "markdown"
    """
    file, parts = evidence.file, []
    title, *words = market_words(file, evidence.values, file.bidders[0])
    parts += [heading(title.removesuffix("."), style), bullets(words, style)]
    if evidence.left_out:
        parts.append(bullets([f"Left out: {line}" for line in evidence.left_out], style))
    if evidence.fit is not None:
        parts += [heading("The log", style), bullets(_log(evidence), style)]
    for at in evidence.sizes:
        parts += _block(evidence, at, style)
    parts += [heading("What this rests on", style), bullets(_limits(evidence), style)]
    return "\n\n".join(parts) + "\n"


def _block(evidence: Evidence, at: AtSize, style: Style) -> list[str]:
    """One size: the rules side by side, the changes, the requirements, the recommendation, the sizes needed."""
    file = evidence.file
    decision = decide(at.candidates, file.requirements, file.objective)
    where = f"{at.market.bidders:,} bidders, {_units(at.market.supply.units, '{:,}'.format)}"
    parts = [heading(f"Rules side by side: {where}", style), _levels(evidence, at, style)]
    parts.append(bullets(_footnotes(at), style))
    if evidence.current is not None and len(at.candidates) > 1:
        parts += [f"Change from {at.candidates[evidence.current].rule}, in use today:"]
        parts.append(_changes(evidence, at, evidence.current, style))
    if file.requirements:
        parts += [heading("Requirements", style), _requirements(at, decision, style)]
    sentence = recommendation(file, at.candidates, decision, evidence.current)
    parts += [heading("Recommendation", style), bullets([sentence], style)]
    sizes = _sizes(evidence, at, decision)
    if sizes:
        parts += [heading("At how many bidders a missed requirement would be met", style)]
        parts.append(bullets([*sizes, "All this if newcomers resemble today's bidders."], style))
    return parts


def _levels(evidence: Evidence, at: AtSize, style: Style) -> str:
    measures = _columns(at)
    rows = [
        [_rule_cell(candidate.rule), *(_cell(candidate.findings[measure]) for measure in measures)]
        for candidate in at.candidates
    ]
    return table(_header(evidence, measures), rows, style)


def _changes(evidence: Evidence, at: AtSize, current: int, style: Style) -> str:
    measures = _columns(at)
    today = at.candidates[current]
    rows = [
        [
            _rule_cell(candidate.rule),
            *(_change_cell(candidate, today, measure) for measure in measures),
        ]
        for place, candidate in enumerate(at.candidates)
        if place != current
    ]
    return table(_header(evidence, measures), rows, style)


def _columns(at: AtSize) -> list[str]:
    found = at.candidates[0].findings
    return [*SHOWN, *(measure for measure in found if measure not in SHOWN)]


_HEADERS = {
    "worst_gain": "worst\ngain",
    "mean_gain": "mean\ngain",
    "interim_gain": "interim\ngain",
    "revenue": "revenue\nif\nnobody\nshades",
    "shaded_revenue": "revenue\nif each\nalone\nshades",
}


def _header(evidence: Evidence, measures: list[str]) -> list[str]:
    names = dict(_HEADERS)
    names["gain_chance"] = f"chance\nof gain\n> {number_words(evidence.file.gain_threshold)}"
    header = ["rule"]
    for measure in measures:
        name = names.get(measure, measure.replace("_", "\n"))
        unit = f"\n({evidence.file.currency})" if measure in MONEY and evidence.file.currency else ""
        header.append(name + unit)
    return header


def _rule_cell(rule: str) -> str:
    name, _, settings = rule.partition(" (")
    return f"{name}\n{settings.removesuffix(')')}" if settings else name


def _cell(finding: Finding) -> str:
    told = finding_words(finding)
    error = _told_error(finding)
    return f"{told}\n± {error}" if error else told


def _change_cell(candidate: Candidate, today: Candidate, measure: str) -> str:
    before, after = today.findings[measure], candidate.findings[measure]
    if math.isinf(before.value) or math.isinf(after.value):
        side = "both" if before.value == after.value else "from" if math.isinf(before.value) else "to"
        return f"{side}\ninfinite"
    gap = difference(after, before)
    told = change(gap.value, largest_error(gap.estimate.error, gap.log_error))
    error = _told_error(gap)
    return f"{told}\n± {error}" if error else told


def _told_error(finding: Finding) -> str:
    """Return the error that is shown beside a number: none where the number is exact and rests on no log."""
    if finding.log_error is None and finding.estimate.method == "exact":
        return ""
    return plus_minus(finding.error) if limits_digits(finding.value, finding.error) else ""


def _footnotes(at: AtSize) -> list[str]:
    exact = all(finding.estimate.method == "exact" for one in at.candidates for finding in one.findings.values())
    log = any(finding.log_error is not None for finding in at.candidates[0].findings.values())
    if log:
        notes = ["± is the 95 % half-width that the log's own sampling leaves."]
    elif exact:
        notes = ["Integrated, not sampled: the digits shown are right."]
    else:
        notes = ["± is the 95 % half-width of a simulation; numbers without it are integrated."]
    notes[0] += " Gains are shares of value; nobody else shades while one bidder does."
    for one in at.candidates:
        for measure, finding in one.findings.items():
            status = finding.estimate.status
            if status == "ok":
                continue
            known = finding.estimate.error
            reach = f", known to {plus_minus(known)}" if known < float("inf") else ""
            notes.append(f"{measure} of {one.rule}: {status}{reach}.")
    if at.tail_note:
        notes.append(at.tail_note[0].upper() + at.tail_note[1:] + ".")
    return notes


def _requirements(at: AtSize, decision: Decision, style: Style) -> str:
    header = ["rule", *(bound_words(one).replace(" at ", "\nat ") for one in decision.verdicts[0])]
    rows = [
        [_rule_cell(candidate.rule), *(_verdict_cell(one) for one in verdicts)]
        for candidate, verdicts in zip(at.candidates, decision.verdicts, strict=True)
    ]
    return table(header, rows, style, left=len(header))


def _verdict_cell(one: Verdict) -> str:
    return f"{one.word}: {finding_words(one.finding)}"


def _sizes(evidence: Evidence, at: AtSize, decision: Decision) -> list[str]:
    lines = []
    for rule, verdicts in zip(evidence.rules, decision.verdicts, strict=True):
        for one in verdicts:
            if one.word == "met":
                continue
            size = size_that_meets(evidence.file, evidence.values, rule.mechanism, one.requirement, at.market.bidders)
            now = size.kind == "from" and size.bidders == at.market.bidders
            told = "met already, if the number is taken as it stands" if now else _size_words(evidence, size)
            lines.append(f"{rule.name}, {bound_words(one)}: {told}.")
    return lines


def _size_words(evidence: Evidence, size: Size) -> str:
    units = evidence.file.supply.units
    told: dict[str, Callable[[], str]] = {
        "unknown": lambda: "not searched, as this rule has no exact integral for it",
        "nowhere": lambda: f"not at any size up to {_MOST} bidders",
        "unsearched": lambda: f"not searched, as sizes are searched up to {_MOST} bidders",
        "from": lambda: (
            f"from {_count(size.bidders)} bidders on ({_units(units(size.bidders), _count)})"
            f"{_beyond_log(evidence, size.bidders)}"
        ),
        "once": lambda: (
            f"not monotone: met at {_count(size.bidders)} bidders ({_units(units(size.bidders), _count)}), "
            f"missed again at {_count(size.again)}"
        ),
    }
    return told[size.kind]()


def _beyond_log(evidence: Evidence, bidders: int) -> str:
    """Say where so large a crowd lies beyond what the log shows."""
    if evidence.fit is None:
        return ""
    market = evidence.file.market(evidence.values, bidders)
    beyond = depends_on_tail(evidence.fit.bids, market) is not None
    return ", resting on the fitted tail beyond the log" if beyond else ", by the fitted law"


def _count(number: int) -> str:
    return f"{number:,}" if number < _EXACT_BELOW else f"about {float(f'{number:.2e}'):,.0f}"


def _units(number: int, told: Callable[[int], str]) -> str:
    return f"{told(number)} unit{'' if number == 1 else 's'}"


def _log(evidence: Evidence) -> list[str]:
    log, fit = evidence.log, evidence.fit
    if log is None or fit is None:
        return []
    currency = f" {evidence.file.currency}" if evidence.file.currency else ""
    told = (
        f"{fit.bids:,} bids above 0 in column {log.column}; a generalised Pareto tail above "
        f"{figure(fit.threshold, 0.0)}{currency} fitted to the {fit.exceedances:,} highest: tail index "
        f"{fit.tail_index:.2f} ± {1.96 * fit.tail_index_error:.2f} (95 %)."
    )
    lines = [told]
    if log.auction_count:
        lines.append(f"{log.auction_count:,} auctions are told apart and resampled whole.")
    return [*lines, *fit.notes]


def _limits(evidence: Evidence) -> list[str]:
    topics = ", ".join(limit.topic for limit in NOT_MODELLED)
    lines = [_ASSUMED, _REVENUES, f"Not modelled: {topics}.", _LAW]
    if evidence.log is not None:
        lines.append("Bid logs can identify people and firms: only aggregates of this one are shown.")
    return lines
