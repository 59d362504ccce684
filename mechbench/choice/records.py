"""The evidence of a choice as records, for programs."""

from __future__ import annotations

from typing import TYPE_CHECKING

from mechbench.show.records import Row, record

if TYPE_CHECKING:
    from mechbench.choice.evidence import Evidence

__all__ = ["choice_records"]

_TAIL = "depends on the tail"


def choice_records(evidence: Evidence) -> list[Row]:
    """One record for every size, rule and measure."""
    return [
        record(
            at.market,
            rule.mechanism,
            measure,
            finding.estimate,
            finding.log_error,
            _status(finding.estimate.status, tail=at.tail_note is not None),
        )
        for at in evidence.sizes
        for rule, candidate in zip(evidence.rules, at.candidates, strict=True)
        for measure, finding in candidate.findings.items()
    ]


def _status(status: str, *, tail: bool) -> str:
    if not tail:
        return status
    return _TAIL if status == "ok" else f"{status}; {_TAIL}"
