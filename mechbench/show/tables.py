"""Tables for people: cells that are text already, set plainly or as Markdown."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Literal

__all__ = ["Style", "bullets", "heading", "table"]

Style = Literal["table", "markdown"]


def table(header: Sequence[str], rows: Sequence[Sequence[str]], style: Style, left: int = 1) -> str:
    """Set a table.

    Parameters
    ----------
    header : sequence of str
    rows : sequence of sequence of str
        Cells may hold line breaks, which Markdown shows as spaces.
    style : "table" or "markdown"
    left : int
        How many columns are words, set to the left; the others are set to the right.
    """
    from tabulate import tabulate  # noqa: PLC0415 - 40 ms that --help need not cost

    align = ["left" if place < left else "right" for place in range(len(header))]
    if style == "markdown":
        header = [_one_line(cell) for cell in header]
        rows = [[_one_line(cell) for cell in row] for row in rows]
    return tabulate(
        rows,
        headers=header,
        tablefmt="pipe" if style == "markdown" else "simple",
        disable_numparse=True,
        colalign=align if rows else None,
    )


def heading(text: str, style: Style) -> str:
    """Set a line that begins a part."""
    return f"## {escaped(text)}" if style == "markdown" else f"{text}\n{'-' * len(text)}"


def bullets(lines: Sequence[str], style: Style) -> str:
    """Set lines one under another, wrapped to `WIDTH` where they are plain."""
    import textwrap  # noqa: PLC0415 - not for --help

    if style == "markdown":
        return "\n".join(f"- {escaped(line)}" for line in lines)
    return "\n".join(textwrap.fill(line, WIDTH, subsequent_indent="  ", break_on_hyphens=False) for line in lines)


def escaped(text: str) -> str:
    """Keep text from being taken for Markdown or for HTML."""
    for sign in "\\`*_[]<>|#":
        text = text.replace(sign, "\\" + sign)
    return text


def _one_line(cell: str) -> str:
    return escaped(" ".join(cell.split()))


WIDTH = 100
"""Widest line of text."""
