"""Why a bid log is refused: the first fault in the file, in one line.

Reading is fast and notices only that something is wrong; then the file is read again, line by line, to say
what, where, and what is accepted. Text from the log is quoted with every special character escaped, and cut
short.
"""

from __future__ import annotations

import csv
import difflib
import math
from collections.abc import Sequence
from pathlib import Path
from typing import NoReturn

from mechbench.contract import InputError

__all__ = ["HIGHEST_BID", "LOWEST_BID", "check_header", "fields_fault", "quoted", "refuse", "refuse_first_fault"]

LOWEST_BID, HIGHEST_BID = 1e-100, 1e100
"""A bid is 0 or between these: anything else is no amount of money."""

_ACCEPTED = (
    "a plain number, 0 or more, with a point for decimals; clean the column first "
    "(no currency sign, thousands separator, decimal comma or words)"
)


def refuse(path: Path, where: str, found: str, accepted: str) -> NoReturn:
    """Raise the one line: file, place, what was found, what is accepted."""
    place = f"{path}, {where}" if where else f"{path}"
    msg = f"bid log {place}: found {found}; accepted is {accepted}"
    raise InputError(msg)


def quoted(text: str) -> str:
    """Text of a log as a message may show it: escaped, and cut after 40 characters."""
    return ascii(text if len(text) <= _SHOWN else text[:_SHOWN] + "...")


def check_header(path: Path, header: Sequence[str], columns: Sequence[str]) -> None:
    """Refuse a header without the columns asked for, or with a name twice."""
    names = [name for name in header if name]
    if not names:
        refuse(path, "row 1", "no column names", "a first row of column names, separated by commas")
    for name in names:
        if names.count(name) > 1:
            refuse(path, "row 1", f"column {quoted(name)} twice", "column names that differ")
    for column in columns:
        if column not in names:
            near = difflib.get_close_matches(column, names, n=1, cutoff=0.4)
            hint = f" (the nearest is {quoted(near[0])})" if near else ""
            listed = ", ".join(quoted(name) for name in names[:_LISTED])
            more = f" and {len(names) - _LISTED} more" if len(names) > _LISTED else ""
            accepted = f"one of the file's columns, which commas separate: {listed}{more}"
            refuse(path, "row 1", f"no column {quoted(column)}{hint}", accepted)


def refuse_first_fault(path: Path, column: str, auction: str | None, reason: str) -> NoReturn:
    """Find the first fault below the header and refuse the log for it.

    Parameters
    ----------
    path : Path
    column, auction : str
        The columns of the bids and, if there is one, of the auctions, known to be in the header.
    reason : str
        What the fast reader said, for a fault that this slow one does not see.
    """
    row = 1
    try:
        with path.open(encoding="utf-8-sig", newline="") as lines:
            rows = csv.reader(lines, strict=True)
            header = next(rows)
            asked = [header.index(column)] + ([] if auction is None else [header.index(auction)])
            for row, fields in enumerate(rows, start=2):
                if any(map(str.strip, fields)):
                    _check_row(path, row, fields, header, asked)
    except UnicodeDecodeError:
        refuse_encoding(path)
    except csv.Error as error:
        refuse(path, f"row {row + 1}", fields_fault(error), "comma-separated text")
    refuse(path, f"column {quoted(column)}", reason.splitlines()[0] if reason else "a fault", _ACCEPTED)


def fields_fault(error: csv.Error) -> str:
    """Tell what the reader of fields stumbles over."""
    return f"{'too long a field' if 'limit' in str(error) else 'broken quoting'} ({error})"


def refuse_encoding(path: Path) -> NoReturn:
    """Say in which row a file stops being UTF-8."""
    row = 0
    with path.open("rb") as lines:
        for row, line in enumerate(lines, start=1):
            try:
                line.decode("utf-8")
            except UnicodeDecodeError as error:
                found = f"byte 0x{line[error.start]:02x}, which is not UTF-8"
                refuse(path, f"row {row}", found, "a file saved as UTF-8")
    refuse(path, f"row {row}", "text that is not UTF-8", "a file saved as UTF-8")


def _check_row(path: Path, row: int, fields: list[str], header: list[str], asked: list[int]) -> None:
    """Refuse a row with too many fields, without a bid, or without the name of its auction."""
    if len(fields) > len(header):
        found = f"{len(fields)} fields under {len(header)} column names"
        refuse(path, f"row {row}", found, "one field for each column, without decimal commas")
    text, *names = [fields[place] if place < len(fields) else "" for place in asked]
    where = f"row {row}, column {quoted(header[asked[0]])}"
    if not text.strip():
        refuse(path, where, "no bid", _ACCEPTED)
    if "" in names:
        refuse(path, f"row {row}, column {quoted(header[asked[1]])}", "no auction", "a name for every auction")
    try:
        bid = float(text) if text.isascii() and "_" not in text else math.nan
    except ValueError:
        bid = math.nan
    if math.isfinite(bid) and bid > 0 and not LOWEST_BID <= bid <= HIGHEST_BID:
        refuse(path, where, quoted(text), f"0 or an amount from {LOWEST_BID:g} to {HIGHEST_BID:g}")
    if not (bid == 0 or LOWEST_BID <= bid <= HIGHEST_BID):
        refuse(path, where, quoted(text), _ACCEPTED)


_SHOWN, _LISTED = 40, 8
