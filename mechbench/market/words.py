"""The market in words: what a file was understood to say, echoed before any result.

Every figure carries where it comes from. A mark in square brackets, `given`, `default` or `fitted`, speaks
for all figures before it on its line, back to the mark before. A figure worked out from others carries the
mark of the one that is least certain: fitted before default before given.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import TYPE_CHECKING

import numpy as np

from mechbench import discovery
from mechbench.contract import MEASURES, IdenticalUnits, number_words
from mechbench.market.file import FamilyChoice, LogChoice, MechanismChoice

if TYPE_CHECKING:
    from mechbench.contract import Distribution
    from mechbench.market.file import MarketFile

__all__ = ["market_words"]

_Piece = tuple[str, str]
"""Some words, and the mark that speaks for their figures; "" for words without a figure."""


def market_words(file: MarketFile, values: Distribution, bidders: int) -> list[str]:
    """Tell the market of one size in words, each figure marked given, default or fitted.

    Parameters
    ----------
    file : MarketFile
    values : Distribution
        The family that the file names, or what was fitted to the log that it names.
    bidders : int
        The size told; one of the file's.

    Returns
    -------
    list of str
        Lines without line ends.

    Examples
    --------
    >>> from mechbench.market.file import read_market
    >>> file = read_market(None)
    >>> print(market_words(file, file.values.distribution(), 120)[1])
    Crowd: 120 bidders, each of whom turns up with chance 0.7; about 84 of 120 turn up for 12 units [given].
    """
    lines = [_crowd(file, bidders), *_path(file), _values(file, values), _reserve(file, values)]
    lines += [_requirements(file), _ranking(file), _rules(file)]
    return [file.title + ".", *(_marked(line) for line in lines)]


def _crowd(file: MarketFile, bidders: int) -> list[_Piece]:
    turnout = _mark(file, "bidders.turnout")
    about = f"each of whom turns up with chance {number_words(file.turnout)}"
    about += f"; about {_rounded(bidders * file.turnout)} of {bidders:,} turn up"
    units = file.supply.units(bidders)
    return [
        (f"Crowd: {bidders:,} bidders", "given"),
        (f", {'all of whom turn up' if file.turnout == 1 else about}", turnout),
        (f" for {units:,} unit{'' if units == 1 else 's'}", "given"),
    ]


def _path(file: MarketFile) -> list[list[_Piece]]:
    """Tell the growth path, if there is one."""
    if len(file.bidders) == 1:
        return []
    sizes = _listed(f"{size:,}" for size in file.bidders)
    units = _listed(f"{file.supply.units(size):,}" for size in file.bidders)
    return [[(f"Growth path: {sizes} bidders, with {units} units", "given")]]


def _values(file: MarketFile, values: Distribution) -> list[_Piece]:
    source = _values_mark(file)
    half, twentieth = (_money(file, _quantile(values, share)) for share in (0.5, 0.05))
    told: list[_Piece] = [(f"; half the values are above {half}, one in twenty above {twentieth}", source)]
    if isinstance(file.values, LogChoice):
        named = f"Values: fitted to the bids in {file.values.path.name}, column {file.values.bid}"
        return [(named, ""), (f", tail index {_rounded(values.tail_index)}", "fitted"), *told]
    settings = [
        (f", {name} {_setting(value)}", _mark(file, f"values.{name}")) for name, value in file.values.settings.items()
    ]
    return [(f"Values: {file.values.name}", "given"), *settings, *told]


def _reserve(file: MarketFile, values: Distribution) -> list[_Piece]:
    reserve = file.supply.reserve
    if reserve == 0:
        return [("Reserve: none", _mark(file, "supply.reserve"))]
    share = float(values.survival(np.array([reserve]))[0])
    return [
        (f"Reserve: {_currency(file, number_words(reserve))} a unit", "given"),
        (f"; {_rounded(100 * share)} % of the values are above it", _values_mark(file)),
    ]


def _requirements(file: MarketFile) -> list[_Piece]:
    if not file.requirements:
        return [("Required: nothing", _mark(file, "requirements"))]
    bounds = []
    for bound in file.requirements:
        side, limit = ("at least", bound.at_least) if bound.at_most is None else ("at most", bound.at_most)
        above = "" if bound.above is None else f" (of a gain above {number_words(bound.above)})"
        bounds.append(f"{bound.measure}{above} {side} {number_words(limit or 0.0)}")
    return [("Required: " + ", ".join(bounds), "given")]


def _ranking(file: MarketFile) -> list[_Piece]:
    mark = _mark(file, "objective")
    return [(f"Ranked by: {file.objective}, the {MEASURES[file.objective]}", mark)]


def _rules(file: MarketFile) -> list[_Piece]:
    every = f"every rule there is for {IdenticalUnits.kind}"
    compared = every if file.compare is None else ", ".join(map(_rule, file.compare))
    today = "none named" if file.current is None else _rule(file.current)
    return [
        (f"Rules compared: {compared}", _mark(file, "compare.mechanisms")),
        (f"; in use today: {today}", _mark(file, "current")),
    ]


def _rule(choice: MechanismChoice) -> str:
    defaults = {parameter.name: parameter.default for parameter in discovery.mechanism_class(choice.name).parameters}
    settings = ", ".join(
        f"{name} {_setting(value)}" for name, value in choice.settings.items() if value != defaults[name]
    )
    return f"{choice.name} ({settings})" if settings else choice.name


def _mark(file: MarketFile, path: str) -> str:
    return "given" if path in file.given else "default"


def _values_mark(file: MarketFile) -> str:
    """Return the mark of what is worked out from the law of the values."""
    if not isinstance(file.values, FamilyChoice):
        return "fitted"
    given = all(f"values.{name}" in file.given for name in file.values.settings)
    return "given" if given else "default"


def _marked(pieces: Sequence[_Piece]) -> str:
    """Join the pieces of a line, each run of one mark followed by that mark."""
    line, pending = "", ""
    for text, mark in pieces:
        if pending and mark and mark != pending:
            line += f" [{pending}]"
            pending = ""
        line += text
        pending = mark or pending
    return line + (f" [{pending}]." if pending else ".")


def _quantile(values: Distribution, share: float) -> float:
    return float(values.upper_quantile(np.array([share]))[0])


def _money(file: MarketFile, amount: float) -> str:
    return _currency(file, _rounded(amount))


def _currency(file: MarketFile, amount: str) -> str:
    return f"{amount} {file.currency}" if file.currency else amount


def _setting(value: float | str) -> str:
    return value if isinstance(value, str) else number_words(value)


def _rounded(number: float) -> str:
    """Write a number that was worked out: three significant digits are plenty for words."""
    if number == 0 or not np.isfinite(number):
        return f"{number:g}"
    rounded = float(f"{number:.3g}")
    small, large = 1e-4, 1e15
    if small <= abs(rounded) < large:
        return f"{rounded:,.0f}" if rounded.is_integer() else f"{rounded:,}"
    return f"{rounded:.3g}"


def _listed(items: Iterable[str]) -> str:
    *others, last = items
    return f"{', '.join(others)} and {last}" if others else last
