"""The mechanisms and families there are, with their parameters and domains."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from mechbench import discovery
from mechbench.contract import Distribution, InputError, Mechanism, number_words
from mechbench.show.records import Row
from mechbench.show.tables import Style, heading, table

__all__ = ["CATALOGUE_FIELDS", "catalogue_rows", "catalogue_tables"]

CATALOGUE_FIELDS = ("kind", "name", "title", "parameter", "meaning", "accepted", "default", "status")


def catalogue_rows() -> list[Row]:
    """One row for each parameter of each plug-in, one for a plug-in without any.

    A plug-in that cannot be loaded has a row whose status says why.
    """
    return [*_rows("mechanism"), *_rows("family")]


def catalogue_tables(rows: Sequence[Row], style: Style) -> str:
    """Set the catalogue for people: one table a kind."""
    parts = []
    for kind, title in (("mechanism", "Pricing rules"), ("family", "Families of values")):
        body, seen = [], ""
        for row in rows:
            if row["kind"] != kind:
                continue
            again = row["name"] == seen
            seen = str(row["name"])
            what = str(row["title"]) if row["status"] == "ok" else str(row["status"])
            default = "" if row["default"] is None else str(row["default"])
            named = ["", ""] if again and style == "table" else [seen, what]
            body.append([*named, str(row["parameter"]), str(row["accepted"]), default])
        header = ["name", "what it is", "parameter", "accepted", "default"]
        parts += [heading(title, style), table(header, body, style, left=len(header))]
    return "\n\n".join(parts) + "\n"


def _rows(kind: str) -> Iterator[Row]:
    names = discovery.mechanisms() if kind == "mechanism" else discovery.families()
    for name in names:
        try:
            plug_in: type[Mechanism | Distribution] = (
                discovery.mechanism_class(name) if kind == "mechanism" else discovery.family_class(name)
            )
        except InputError as error:
            yield _row(kind, name, status=str(error))
            continue
        title = plug_in.title
        if getattr(plug_in, "from_log", False):
            title += " (named by a market file)"
        if not plug_in.parameters:
            yield _row(kind, name, title=title)
        for one in plug_in.parameters:
            default = number_words(one.default) if isinstance(one.default, float | int) else one.default
            yield _row(
                kind, name, title=title, parameter=one.name, meaning=one.meaning, accepted=one.domain, default=default
            )


def _row(kind: str, name: str, **told: str | None) -> Row:
    row: dict[str, str | None] = dict.fromkeys(CATALOGUE_FIELDS, "")
    return row | {"kind": kind, "name": name, "default": None, "status": "ok"} | told
