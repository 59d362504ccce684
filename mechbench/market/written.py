"""The market file as it is written: its tables and keys, what each accepts, how a mistake is told.

A key's domain and the words that name it in a message stand together, once, in the structs below. Tables are
read field by field, so that a mistake is told by the path under which the user wrote it.
"""

from __future__ import annotations

import difflib
import json
import re
import sys
import tomllib
import typing
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any, Literal, NoReturn, TypeVar

import msgspec
from msgspec import Meta, Struct

from mechbench.contract import InputError
from mechbench.market.limits import limit_of

__all__ = [
    "Bidders",
    "Bound",
    "ChanceBound",
    "Compare",
    "Document",
    "Log",
    "Place",
    "Supply",
    "Table",
    "parse",
    "read_table",
    "refuse_unknown",
]

Table = dict[str, object]

_MOST_BYTES = 2**20
_MOST = 10**15
"""Most bidders or units accepted: not far beyond it a double no longer counts in ones."""
_WIDEST = 2**63
_LONGEST = 60
"""How much of what was found a message shows, in characters."""

_Amount = Annotated[float, Meta(ge=0, le=sys.float_info.max, description="a finite number of at least 0")]
_Count = Annotated[int, Meta(ge=2, le=_MOST)]
_Share = Annotated[float, Meta(gt=0, lt=1, description="a number above 0 and below 1")]
_Line = Annotated[str, Meta(min_length=1, max_length=120, description="a line of text, at most 120 characters")]


class Document(Struct, forbid_unknown_fields=True, frozen=True):
    """The whole file."""

    bidders: Annotated[Table, Meta(description="a table [bidders] with count")]
    values: Annotated[Table, Meta(description="a table [values] with a family or a log")]
    supply: Annotated[Table, Meta(description="a table [supply] with the units")]
    title: _Line = ""
    currency: _Line = ""
    objective: Annotated[
        Literal["revenue", "shaded_revenue", "welfare", "efficiency"],
        Meta(description='"revenue", "shaded_revenue", "welfare" or "efficiency"'),
    ] = "revenue"
    requirements: Annotated[Table, Meta(description="a table [requirements] of measures")] = {}
    current: Annotated[Table | None, Meta(description="a table [current] with a mechanism")] = None
    compare: Annotated[Table | None, Meta(description="a table [compare] with mechanisms")] = None


class Bidders(Struct, forbid_unknown_fields=True, frozen=True):
    """The table [bidders]."""

    count: Annotated[
        _Count | Annotated[list[_Count], Meta(min_length=1, max_length=1000)],
        Meta(description="a whole number from 2 to 10^15, or a strictly rising list of them"),
    ]
    turnout: Annotated[float, Meta(gt=0, le=1, description="a chance above 0 and at most 1")] = 1.0


class Log(Struct, forbid_unknown_fields=True, frozen=True):
    """The table [values] where it names a bid log."""

    log: Annotated[str, Meta(min_length=1, description="the path of a CSV file, relative to the market file")]
    bid: Annotated[str, Meta(min_length=1, description="the name of the log's column of bids")]
    bids_are: Annotated[
        Literal["values", "bids under pay-as-bid"],
        Meta(description='"values" (what the units are worth to the bidders) or "bids under pay-as-bid"'),
    ]
    auction: Annotated[
        Annotated[str, Meta(min_length=1)] | None,
        Meta(description="the name of the log's column of auctions"),
    ] = None


class Supply(Struct, forbid_unknown_fields=True, frozen=True):
    """The table [supply]."""

    units: Annotated[Annotated[int, Meta(ge=1, le=_MOST)] | None, Meta(description="a whole number of at least 1")] = (
        None
    )
    units_per_bidder: _Share | None = None
    units_exponent: _Share | None = None
    reserve: _Amount = 0.0


class Bound(Struct, forbid_unknown_fields=True, frozen=True):
    """A requirement on one measure."""

    at_most: _Amount | None = None
    at_least: _Amount | None = None


class ChanceBound(Bound, forbid_unknown_fields=True, frozen=True):
    """A requirement on the chance of a gain, which may say of what gain."""

    above: _Share | None = None


class Compare(Struct, forbid_unknown_fields=True, frozen=True):
    """The table [compare]."""

    mechanisms: Annotated[
        list[str | Table],
        Meta(
            min_length=1,
            max_length=100,
            description='a list of mechanisms, each "name" or { name = "...", and its settings }',
        ),
    ]


_HOMES: Mapping[str, type[Struct]] = {
    "bidders": Bidders,
    "values": Log,
    "supply": Supply,
    "compare": Compare,
}
_TOP_KEYS = ("title", "currency", "objective")

_Shape = TypeVar("_Shape", bound=Struct)


@dataclass(frozen=True)
class Place:
    """Where in which file something stands, so that a message can say so."""

    source: str
    path: str = ""

    def at(self, key: str) -> Place:
        """Return the place of a key of the table that stands here."""
        name = key if re.fullmatch(r"[A-Za-z0-9_-]{1,60}", key) else _shown(key)
        return Place(self.source, f"{self.path}.{name}" if self.path else name)

    def refuse(self, what: str, accepted: str = "") -> NoReturn:
        """Raise the error that says, in one line, what is wrong here and what is accepted."""
        where = f"{self.source}: {self.path}" if self.path else self.source
        line = f"{where}: {what}; accepted is {accepted}" if accepted else f"{where}: {what}"
        raise InputError("".join(sign if sign.isprintable() else " " for sign in line))

    def refuse_value(self, found: object, accepted: str) -> NoReturn:
        """Raise the error that shows what was found here."""
        self.refuse(f"found {_shown(found)}", accepted)


def parse(path: Path, place: Place) -> Table:
    """Read a TOML file, encoded in UTF-8 with or without a byte order mark, of at most 1 MiB.

    Raises
    ------
    InputError
        If there is no such file, it cannot be read, is too large, is not UTF-8 or not TOML, or says nothing.
    """
    try:
        with path.open("rb") as stream:
            raw = stream.read(_MOST_BYTES + 1)
    except FileNotFoundError:
        place.refuse("there is no such file", "the path of a market file")
    except IsADirectoryError:
        place.refuse("this is a folder", "the path of a market file")
    except (OSError, ValueError) as error:
        place.refuse(f"cannot be read ({getattr(error, 'strerror', error)})", "the path of a market file")
    if len(raw) > _MOST_BYTES:
        place.refuse("the file is larger than 1 MiB", "a market file, which takes a page or two")
    try:
        text = raw.decode("utf-8-sig")
        tables = tomllib.loads(text)
    except UnicodeDecodeError as error:
        line = raw.count(b"\n", 0, error.start) + 1
        place.refuse(f"line {line}: byte 0x{raw[error.start]:02x} is not UTF-8", "text saved as UTF-8")
    except RecursionError:
        place.refuse("brackets are nested too deeply", "a market file")
    except ValueError as error:  # TOMLDecodeError is one, and so is a number with too many digits
        place.refuse(_syntax(str(error), text))
    if not tables:
        place.refuse("the file is empty", "at least the tables [bidders], [values] and [supply]")
    return tables


def read_table(place: Place, table: object, shape: type[_Shape]) -> _Shape:
    """Check one table of the file against its struct.

    Raises
    ------
    InputError
        If it is no table, a key is unknown or missing, or a value is not accepted.
    """
    if not isinstance(table, dict):
        place.refuse_value(table, f"a table with {', '.join(shape.__struct_fields__)}")
    refuse_unknown(place, table, shape.__struct_fields__)
    read: dict[str, Any] = {}
    for field in msgspec.structs.fields(shape):
        if field.name in table:
            found = table[field.name]
            try:
                read[field.name] = msgspec.convert(found, field.type)
            except (msgspec.ValidationError, OverflowError):
                place.at(field.name).refuse_value(found, _accepted(field.type))
        elif field.required:
            place.at(field.name).refuse("missing", _accepted(field.type))
    return shape(**read)


def refuse_unknown(place: Place, table: Mapping[str, object], known: Iterable[str]) -> None:
    """Refuse a key that is not known here, with the reason, the key meant, or the table where it belongs.

    Raises
    ------
    InputError
        For the first such key.
    """
    known = tuple(known)
    for key in table:
        if key not in known:
            here = place.at(key)
            reason = limit_of(key)
            if reason is not None:
                here.refuse(reason, "a market without it")
            here.refuse("unknown key" + _hint(key, known), ", ".join(known) or "nothing")


def _hint(key: str, known: tuple[str, ...]) -> str:
    near = difflib.get_close_matches(key.lower().replace("-", "_"), known, n=1)
    if near:
        return f", did you mean {near[0]}?"
    if key in _TOP_KEYS:
        return ", it belongs at the top of the file, before the first [table]"
    if key in Document.__struct_fields__:
        return f", [{key}] is a table of its own"
    homes = [home for home, shape in _HOMES.items() if key in shape.__struct_fields__]
    return f", it belongs under [{homes[0]}]" if homes else ""


def _shown(value: object) -> str:
    """Write what was found as TOML would, short enough for a message."""
    if isinstance(value, dict):
        return "a table"
    if isinstance(value, list):
        inside = ["[...]" if isinstance(item, list) else _shown(item) for item in value[:10]]
        return "[" + ", ".join(inside) + (", ...]" if len(inside) < len(value) else "]")
    if isinstance(value, str):
        clipped = value if len(value) <= _LONGEST else value[:_LONGEST] + "..."
        return json.dumps(clipped, ensure_ascii=False)
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, int) and abs(value) >= _WIDEST:
        return "a whole number of more than 64 bits"
    return str(value)


def _accepted(annotation: Any) -> str:
    """Return the description beside a type, the outermost one."""
    for meta in getattr(annotation, "__metadata__", ()):
        if meta.description:
            return str(meta.description)
    return next(filter(None, map(_accepted, typing.get_args(annotation))), "")


def _syntax(complaint: str, text: str) -> str:
    """Turn the parser's complaint around: first the line and what stands there, then what is wrong."""
    lines = text.splitlines() or [""]
    position = re.search(r" \(at line (\d+), column (\d+)\)$", complaint)
    if position is None:  # at the end of the document
        row, where = len(lines), f"line {len(lines)}, at its end"
    else:
        row = min(int(position[1]), len(lines))
        where = f"line {row}, column {position[2]}"
    what = re.sub(r" \(at [^()]*\)$", "", complaint)
    what = re.sub(r"\(('[^()]*'),?\)", r"\1", what)  # a key, which the parser shows as a tuple
    return f"{where}: found {_shown(lines[row - 1].strip())}; accepted is TOML, but here: {what}"
