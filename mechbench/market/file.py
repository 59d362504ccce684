"""The market file: who bids, for what, under which requirements, and which mechanisms are weighed.

`read_market` is the door: what it returns has been checked against every plug-in and at every size that the
file names, and needs no checking again.
"""

from __future__ import annotations

import difflib
import itertools
from collections.abc import Mapping
from dataclasses import dataclass
from decimal import ROUND_HALF_UP, Decimal
from pathlib import Path
from typing import TYPE_CHECKING, NoReturn

from mechbench import discovery
from mechbench.contract import MEASURES, MONEY, IdenticalUnits, InputError
from mechbench.market import written
from mechbench.market.market import Market
from mechbench.market.written import Place, Table, read_table, refuse_unknown

if TYPE_CHECKING:
    from mechbench.contract import Distribution, Mechanism, Parameter

__all__ = [
    "FamilyChoice",
    "LogChoice",
    "MarketFile",
    "MechanismChoice",
    "Requirement",
    "SupplyChoice",
    "read_market",
]

_DEMO = Path(__file__).with_name("demo.toml")
_GAIN_THRESHOLD = 0.05


@dataclass(frozen=True)
class FamilyChoice:
    """Values of a named family, its settings complete: what the file leaves out is filled in."""

    name: str
    settings: Mapping[str, float | str]

    def distribution(self) -> Distribution:
        """Return the family with its settings."""
        return discovery.family_class(self.name)(**self.settings)


@dataclass(frozen=True)
class LogChoice:
    """Values that a bid log holds: the path of the log, its columns, and what its bids are."""

    path: Path
    bid: str
    auction: str | None
    bids_are: str


@dataclass(frozen=True)
class SupplyChoice:
    """How many units there are at any number of bidders, and the reserve price.

    Attributes
    ----------
    rule : "units", "units_per_bidder" or "units_exponent"
        What `amount` is: the units themselves, the units for each bidder, or the power of the bidders.
    amount : float
    reserve : float
        Reserve price of a unit.
    """

    rule: str
    amount: float
    reserve: float = 0.0

    def units(self, bidders: int) -> int:
        """Units for so many bidders: rounded to the nearest whole number, halves up, and at least 1.

        A share counts as it is written (0.145 of 100 bidders is 14.5, so 15), not as the nearest double.
        """
        if self.rule == "units":
            return int(self.amount)
        if self.rule == "units_per_bidder":
            exact = Decimal(repr(self.amount)) * bidders
        else:
            exact = Decimal(bidders**self.amount)
        return max(1, int(exact.to_integral_value(ROUND_HALF_UP)))


@dataclass(frozen=True)
class Requirement:
    """A bound that an acceptable mechanism keeps; exactly one of `at_most` and `at_least` is set.

    `above` is the gain that `gain_chance` counts from, ``None`` for every other measure.
    """

    measure: str
    at_most: float | None = None
    at_least: float | None = None
    above: float | None = None


@dataclass(frozen=True)
class MechanismChoice:
    """A named mechanism, its settings complete: what the file leaves out is filled in."""

    name: str
    settings: Mapping[str, float | str]

    def mechanism(self) -> Mechanism:
        """Return the mechanism with its settings."""
        return discovery.mechanism_class(self.name)(**self.settings)


@dataclass(frozen=True)
class MarketFile:
    """What a market file says, checked, with its defaults filled in.

    Attributes
    ----------
    title, currency : str
        The title (by default the file's name) and the unit of money (by default none).
    bidders : tuple of int
        The sizes of the crowd, rising: one, or a growth path.
    turnout : float
        The chance with which each bidder turns up.
    values : FamilyChoice or LogChoice
    supply : SupplyChoice
    requirements : tuple of Requirement
    objective : str
        The measure that ranks the mechanisms which meet the requirements; more is better.
    current : MechanismChoice or None
        The rule in use today.
    compare : tuple of MechanismChoice, or None
        The mechanisms weighed; ``None`` for every one that serves the supply.
    given : frozenset of str
        Paths of what the file itself says ("bidders.turnout"); the rest is default.
    source : str
        The file, as messages name it.
    """

    title: str
    currency: str
    bidders: tuple[int, ...]
    turnout: float
    values: FamilyChoice | LogChoice
    supply: SupplyChoice
    requirements: tuple[Requirement, ...]
    objective: str
    current: MechanismChoice | None
    compare: tuple[MechanismChoice, ...] | None
    given: frozenset[str]
    source: str

    @property
    def gain_threshold(self) -> float:
        """The gain from which `gain_chance` counts: the file's, or 0.05."""
        return next((bound.above for bound in self.requirements if bound.above is not None), _GAIN_THRESHOLD)

    def market(self, values: Distribution, bidders: int) -> Market:
        """Build the market of one size, with these values.

        Raises
        ------
        InputError
            If the units would do for every bidder, or no value reaches the reserve; names the file.
        """
        try:
            supply = IdenticalUnits(self.supply.units(bidders), self.supply.reserve)
            return Market(values, bidders, supply, self.turnout)
        except InputError as error:
            Place(self.source).refuse(str(error))


def read_market(path: Path | None) -> MarketFile:
    """Read and check a market file.

    Parameters
    ----------
    path : Path or None
        A TOML file of at most 1 MiB; ``None`` for the built-in demo market.

    Raises
    ------
    InputError
        In one line: the file, the line or the field, what was found and what is accepted.
    """
    place = Place("the built-in demo market" if path is None else str(path))
    path = _DEMO if path is None else path
    tables = written.parse(path, place)
    document = read_table(place, tables, written.Document)
    crowd = read_table(place.at("bidders"), document.bidders, written.Bidders)
    file = MarketFile(
        title=_line(document.title, place.at("title")) or path.stem,
        currency=_line(document.currency, place.at("currency")),
        bidders=_sizes(crowd.count, place.at("bidders").at("count")),
        turnout=crowd.turnout,
        values=_values(document.values, place.at("values"), path.parent),
        supply=_supply(document.supply, place.at("supply")),
        requirements=_requirements(document.requirements, place.at("requirements")),
        objective=document.objective,
        current=None if document.current is None else _current(document.current, place.at("current")),
        compare=None if document.compare is None else _compare(document.compare, place.at("compare")),
        given=_given(tables),
        source=place.source,
    )
    _check_sizes(file, place)
    return file


def _given(tables: Table) -> frozenset[str]:
    paths = set(tables)
    for name, table in tables.items():
        if isinstance(table, dict):
            paths.update(f"{name}.{key}" for key in table)
    return frozenset(paths)


def _line(text: str, place: Place) -> str:
    """Refuse control characters: the words reach terminals and pages."""
    if not text.isprintable():
        place.refuse_value(text, "one line of printable text")
    return text.strip()


def _sizes(count: int | list[int], place: Place) -> tuple[int, ...]:
    sizes = (count,) if isinstance(count, int) else tuple(count)
    if any(later <= earlier for earlier, later in itertools.pairwise(sizes)):
        place.refuse_value(list(sizes), "a growth path that rises strictly")
    return sizes


def _values(table: Table, place: Place, folder: Path) -> FamilyChoice | LogChoice:
    if "family" in table and "log" in table:
        place.refuse("found both family and log", "one of them")
    if "family" not in table and "log" not in table:
        _no_values(table, place)
    if "family" in table:
        return FamilyChoice(*_plug_in(table, "family", place))
    return _log(read_table(place, table, written.Log), place, folder)


def _no_values(table: Table, place: Place) -> NoReturn:
    for key in table:
        if difflib.get_close_matches(key.lower(), ["family", "log"], n=1):
            refuse_unknown(place, {key: None}, ["family", *written.Log.__struct_fields__])
    place.refuse(
        "found neither family nor log",
        'family = "..." with its parameters, or log = "..." with bid and bids_are',
    )


def _log(log: written.Log, place: Place, folder: Path) -> LogChoice:
    path = folder / log.log
    try:
        found = path.is_file()
    except OSError:
        found = False
    if not found:
        place.at("log").refuse_value(log.log, "a CSV file that exists, its path relative to the market file")
    if log.bids_are != "values":
        place.at("bids_are").refuse(
            f"found {log.bids_are!r}: bids that the bidders themselves pay are already shaded, and the "
            f"values must be recovered from them first, which this version does not do",
            'a log whose bids are "values"',
        )
    return LogChoice(path, log.bid, log.auction, log.bids_are)


def _supply(table: Table, place: Place) -> SupplyChoice:
    supply = read_table(place, table, written.Supply)
    rules = ("units", "units_per_bidder", "units_exponent")
    set_ones = [(rule, getattr(supply, rule)) for rule in rules if getattr(supply, rule) is not None]
    if len(set_ones) != 1:
        found = " and ".join(rule for rule, _ in set_ones) or "no units"
        place.refuse(f"found {found}", "exactly one of " + ", ".join(rules))
    ((rule, amount),) = set_ones
    return SupplyChoice(rule, amount, supply.reserve)


def _requirements(table: Table, place: Place) -> tuple[Requirement, ...]:
    refuse_unknown(place, table, MEASURES)
    return tuple(_requirement(measure, bound, place.at(measure)) for measure, bound in table.items())


def _requirement(measure: str, table: object, place: Place) -> Requirement:
    if not isinstance(table, dict):
        place.refuse_value(table, "{ at_most = x } or { at_least = x }")
    shape = written.ChanceBound if measure == "gain_chance" else written.Bound
    bound = read_table(place, table, shape)
    if (bound.at_most is None) == (bound.at_least is None):
        found = "neither at_most nor at_least" if bound.at_most is None else "both at_most and at_least"
        place.refuse(f"found {found}", "{ at_most = x } or { at_least = x }")
    for side, limit in (("at_most", bound.at_most), ("at_least", bound.at_least)):
        if limit is not None and limit > 1 and measure not in MONEY:
            place.at(side).refuse_value(table[side], "a share from 0 to 1 (5 % is 0.05)")
    return Requirement(measure, bound.at_most, bound.at_least, getattr(bound, "above", None))


def _current(table: Table, place: Place) -> MechanismChoice:
    return MechanismChoice(*_plug_in(table, "mechanism", place))


def _compare(table: Table, place: Place) -> tuple[MechanismChoice, ...]:
    chosen: list[MechanismChoice] = []
    for position, entry in enumerate(read_table(place, table, written.Compare).mechanisms, 1):
        here = Place(place.source, f"{place.path}.mechanisms, entry {position}")
        named: Table = {"name": entry} if isinstance(entry, str) else entry
        choice = MechanismChoice(*_plug_in(named, "name", here))
        if choice in chosen:
            here.refuse(f"found {choice.name} a second time with the same settings", "each rule once")
        chosen.append(choice)
    return tuple(chosen)


def _plug_in(table: Table, key: str, place: Place) -> tuple[str, dict[str, float | str]]:
    """Read a table that names a plug-in under `key` beside its settings, and prove that it can be made."""
    kind = "family" if key == "family" else "mechanism"
    if key not in table:
        refuse_unknown(place, table, [key])
        place.at(key).refuse("missing", f"the name of a {kind}")
    name = table[key]
    if not isinstance(name, str):
        place.at(key).refuse_value(name, f"the name of a {kind}")
    try:
        plug_in = discovery.family_class(name) if kind == "family" else discovery.mechanism_class(name)
    except InputError as error:
        place.at(key).refuse(str(error))
    _check_use(plug_in, place.at(key))
    refuse_unknown(place, table, [key, *(parameter.name for parameter in plug_in.parameters)])
    settings = {
        parameter.name: _setting(parameter, table, place.at(parameter.name)) for parameter in plug_in.parameters
    }
    try:
        plug_in(**settings)
    except InputError as error:
        place.refuse(str(error))
    except Exception as error:  # noqa: BLE001  a plug-in may raise anything at all
        place.refuse(f"{name} fails with these settings: {type(error).__name__}: {error}")
    return name, settings


def _check_use(plug_in: type[Distribution | Mechanism], place: Place) -> None:
    """Refuse a family that only a log can give, and a mechanism for another kind of supply."""
    if getattr(plug_in, "from_log", False):
        place.refuse(f"{plug_in.name} is fitted to a bid log", 'log = "..." in its place')
    serves = getattr(plug_in, "serves", {IdenticalUnits.kind})
    if IdenticalUnits.kind not in serves:
        place.refuse(f"{plug_in.name} serves {', '.join(sorted(serves))}", "a rule for identical units")


def _setting(parameter: Parameter, table: Table, place: Place) -> float | str:
    if parameter.name not in table:
        if parameter.default is None:
            place.refuse(f"missing ({parameter.meaning})", parameter.domain)
        return parameter.default
    found = table[parameter.name]
    try:
        return parameter.check(found, place.path)
    except (ValueError, OverflowError):  # InputError is one; so are numbers too long to print
        place.refuse_value(found, parameter.domain)


def _check_sizes(file: MarketFile, place: Place) -> None:
    """Refuse units that would do for every bidder, at any of the sizes, and a reserve above all values."""
    for bidders in file.bidders:
        units = file.supply.units(bidders)
        if units >= bidders:
            place.at("supply").at(file.supply.rule).refuse(
                f"found {units} units for {bidders} bidders",
                "fewer units than bidders (with enough for all, nobody competes)",
            )
    if isinstance(file.values, FamilyChoice):
        file.market(file.values.distribution(), file.bidders[0])
