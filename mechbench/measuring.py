"""One cell: a mechanism, a market given by hand, and the measures asked for."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Literal

from mechbench import discovery
from mechbench.contract import MEASURES, MONEY, IdenticalUnits, InputError, number_words
from mechbench.engine.evaluate import evaluate
from mechbench.market.market import Market
from mechbench.show.figures import figure, largest_error, plus_minus
from mechbench.show.records import Row, record
from mechbench.show.tables import Style, bullets, table

__all__ = ["Cell", "cell_records", "cell_table"]


@dataclass(frozen=True)
class Cell:
    """What is measured where; the names are those of the command's options."""

    mechanism: str
    family: str
    bidders: int
    units: int
    mechanism_settings: Mapping[str, float | str] = field(default_factory=dict)
    family_settings: Mapping[str, float | str] = field(default_factory=dict)
    reserve: float = 0.0
    turnout: float = 1.0
    measures: Sequence[str] = tuple(MEASURES)
    method: Literal["auto", "exact", "simulated"] = "auto"
    error: float | None = None
    seed: int = 0
    threshold: float = 0.05


def cell_records(cell: Cell, progress: Callable[[int], None] | None = None) -> list[Row]:
    """Measure a cell: one record a measure.

    Parameters
    ----------
    cell : Cell
    progress : callable, optional
        Called with the draws done so far, where it is simulated.

    Raises
    ------
    InputError
        If a name or a number is not accepted, or a plug-in fails in this market.
    """
    if cell.error is not None and cell.error >= 1:
        msg = f"error: found {cell.error}; accepted is a number above 0 and below 1"
        raise InputError(msg)
    family = discovery.family_class(cell.family)
    if family.from_log:
        msg = f"family {cell.family!r} is fitted to a bid log; accepted here is another, or a market file with a log"
        raise InputError(msg)
    mechanism = discovery.mechanism_class(cell.mechanism)(**cell.mechanism_settings)
    values = family(**cell.family_settings)
    market = Market(values, cell.bidders, IdenticalUnits(cell.units, cell.reserve), cell.turnout)
    try:
        found = evaluate(
            market,
            mechanism,
            cell.measures,
            method=cell.method,
            error=cell.error,
            seed=cell.seed,
            threshold=cell.threshold,
            progress=progress,
        )
    except InputError:
        raise
    except Exception as error:  # a plug-in may raise anything at all
        msg = f"mechanism {mechanism!r} fails with {values!r}: {type(error).__name__}: {error}"
        raise InputError(msg) from error
    return [record(market, mechanism, measure, estimate) for measure, estimate in found.items()]


def cell_table(rows: Sequence[Row], style: Style) -> str:
    """Show the records of one cell to people."""
    first = rows[0]
    title = (
        f"{first['mechanism']}: {first['family']} values ({first['parameters']}), {first['bidders']:,} "
        f"bidders, {first['supply']}, reserve {number_words(_real(first['reserve']))}, "
        f"turnout {number_words(_real(first['turnout']))}"
    )
    header = ["measure", "value", "error", "method", "status"]
    body = [
        [
            str(row["measure"]),
            figure(_real(row["value"]), largest_error(_real(row["error"])), str(row["status"])),
            plus_minus(_real(row["error"]), _real(row["value"])),
            str(row["method"]),
            str(row["status"]),
        ]
        for row in rows
    ]
    notes = ["An error is a bound where the method is exact, a 95 % half-width where it is simulated."]
    if {row["measure"] for row in rows} & MONEY:
        notes.append(
            "Money is in the unit of the values; revenue is if nobody shades, shaded_revenue if each alone does."
        )
    return "\n\n".join([bullets([title], style), table(header, body, style), bullets(notes, style)]) + "\n"


def _real(cell: object) -> float:
    return float(cell) if isinstance(cell, int | float) else float("nan")
