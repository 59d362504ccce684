"""Records: one flat object a measure, for programs; written whole as JSON or CSV."""

from __future__ import annotations

import csv
import io
import json
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from mechbench.contract import number_words

if TYPE_CHECKING:
    from mechbench.contract import Mechanism
    from mechbench.engine.estimate import Estimate
    from mechbench.market.market import Market

__all__ = ["FIELDS", "Row", "harmless", "record", "to_csv", "to_json"]

Cell = str | int | float | None
Row = Mapping[str, Cell]

FIELDS = (
    "mechanism",
    "family",
    "parameters",
    "bidders",
    "supply",
    "reserve",
    "turnout",
    "measure",
    "value",
    "error",
    "log_error",
    "method",
    "status",
    "seed",
)
"""The fields of a record, in their order."""

_FORMULA = ("=", "+", "-", "@")
"""What makes a spreadsheet take a cell for a formula."""


@dataclass(frozen=True)
class _Settings:
    """Settings of a plug-in as a record holds them: numbers and words, not the long lists of a fit."""

    of: Mapping[str, object]

    def __str__(self) -> str:
        told = {
            name: value if isinstance(value, str) else number_words(value)
            for name, value in self.of.items()
            if isinstance(value, str | float | int)
        }
        return ", ".join(f"{name}={value}" for name, value in told.items())


def record(
    market: Market,
    mechanism: Mechanism,
    measure: str,
    estimate: Estimate,
    log_error: float | None = None,
    status: str | None = None,
) -> dict[str, Cell]:
    """Lay out one estimate as a record.

    Parameters
    ----------
    market, mechanism, measure
        What was evaluated.
    estimate : Estimate
    log_error : float, optional
        Sampling error of the log that the values come from.
    status : str, optional
        In place of the estimate's own.
    """
    settings = str(_Settings(mechanism.settings))
    return {
        "mechanism": f"{mechanism.name}({settings})" if settings else mechanism.name,
        "family": market.values.name,
        "parameters": str(_Settings(market.values.settings)),
        "bidders": market.bidders,
        "supply": f"units={market.supply.units}",
        "reserve": market.supply.reserve,
        "turnout": market.turnout,
        "measure": measure,
        "value": estimate.value,
        "error": estimate.error,
        "log_error": log_error,
        "method": estimate.method,
        "status": estimate.status if status is None else status,
        "seed": estimate.seed,
    }


def to_json(rows: Sequence[Row]) -> str:
    """Write rows as a JSON list of objects; a number that is not finite is null, the status says why."""
    finite = [{name: _finite(cell) for name, cell in row.items()} for row in rows]
    return json.dumps(finite, indent=1, ensure_ascii=False, allow_nan=False) + "\n"


def to_csv(rows: Sequence[Row], fields: Sequence[str] = FIELDS) -> str:
    """Write rows as CSV with a header; no text from outside can act as a formula in a spreadsheet."""
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow(fields)
    for row in rows:
        cells = (_finite(row[name]) for name in fields)
        writer.writerow(["" if cell is None else harmless(cell) for cell in cells])
    return text.getvalue()


def harmless(cell: Cell) -> Cell:
    """Make a text one line, with an apostrophe before it where a spreadsheet would take it for a formula."""
    if not isinstance(cell, str):
        return cell
    line = " ".join(cell.split())
    return "'" + line if line.startswith(_FORMULA) else line


def _finite(cell: Cell) -> Cell:
    return None if isinstance(cell, float) and not math.isfinite(cell) else cell
