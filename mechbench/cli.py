"""The command line: parse, call, print.

Every command exits with 0 when done and 2 when the input was wrong, told in one line on stderr. Its output is
written whole, once, when all of it is known.
"""

from __future__ import annotations

import argparse
import contextlib
import os
import sys
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any, NoReturn, Self

from mechbench.contract import MEASURES, InputError

__all__ = ["main"]

_DONE, _WRONG_INPUT, _INTERRUPTED = 0, 2, 130

_CHOOSE = """\
example:
  mechbench choose                  the built-in demo market: cold-room bays leased by the night
  mechbench choose market.toml      your own; the file mechbench/market/demo.toml shows every key
"""
_MEASURE = """\
example:
  mechbench measure --mechanism uniform-price --with price_at=last-accepted \\
      --family weibull --set shape=1.4 scale=30 --bidders 120 --units 12 --reserve 8 --turnout 0.7
"""
_CATALOGUE = """\
example:
  mechbench catalogue --format markdown
"""


class _Parser(argparse.ArgumentParser):
    """A parser whose mistakes are told in one line, like all others."""

    def error(self, message: str) -> NoReturn:
        """Raise the mistake in place of printing a usage."""
        hint = "" if "accepted is" in message else f"; accepted is what `{self.prog} --help` shows"
        line = f"{self.prog}: {message}{hint}"
        raise InputError(line)


def main(arguments: Sequence[str] | None = None) -> int:
    """Run a command and return its exit code.

    Parameters
    ----------
    arguments : sequence of str, optional
        Those of the command line unless given.
    """
    try:
        options = _parser().parse_args(arguments)
        text = options.run(options)
        return _print(text)
    except InputError as error:
        return _refuse(str(error))
    except KeyboardInterrupt:
        return _refuse("interrupted", _INTERRUPTED)


def _parser() -> argparse.ArgumentParser:
    parser = _Parser(
        prog="mechbench",
        description="Compare auction pricing rules at your market's size: how much a bidder gains by\n"
        "bidding below value, what each rule earns, who gets the units, with error bounds.",
        epilog="example:\n  mechbench choose\n",
        formatter_class=argparse.RawDescriptionHelpFormatter,
        allow_abbrev=False,
    )
    parser.add_argument("--version", action=_Version, help="show the version and exit")
    commands = parser.add_subparsers(dest="command", required=True, metavar="COMMAND")
    _add_choose(commands)
    _add_measure(commands)
    _add_catalogue(commands)
    return parser


class _Version(argparse.Action):
    """Print the version: looked up only when asked for."""

    def __init__(self, option_strings: Sequence[str], dest: str, **rest: Any) -> None:
        super().__init__(option_strings, dest, nargs=0, **rest)

    def __call__(self, parser: argparse.ArgumentParser, *_: object) -> NoReturn:
        from importlib import metadata  # noqa: PLC0415 - 30 ms

        try:
            version = metadata.version("mechbench-auctions")
        except metadata.PackageNotFoundError:
            version = "(not installed)"
        parser.exit(_print(f"mechbench {version}\n"))


def _command(
    commands: Any, name: str, what: str, example: str, run: Callable[[argparse.Namespace], str]
) -> argparse.ArgumentParser:
    parser: argparse.ArgumentParser = commands.add_parser(
        name,
        help=what,
        description=what[0].upper() + what[1:] + ".",
        epilog=example,
        formatter_class=argparse.RawDescriptionHelpFormatter,
        allow_abbrev=False,
    )
    parser.add_argument(
        "--format",
        choices=("table", "csv", "json", "markdown"),
        default="table",
        help="how the result is written (default: table)",
    )
    parser.set_defaults(run=run)
    return parser


def _add_choose(commands: Any) -> None:
    parser = _command(
        commands,
        "choose",
        "weigh every pricing rule that fits a market, and recommend one",
        _CHOOSE,
        _choose,
    )
    parser.add_argument(
        "market", nargs="?", type=Path, metavar="MARKET.toml", help="market file (default: the demo market)"
    )


def _add_measure(commands: Any) -> None:
    parser = _command(commands, "measure", "measure one pricing rule in one market", _MEASURE, _measure)
    add = parser.add_argument
    add("--mechanism", required=True, metavar="M", help="pricing rule; `mechbench catalogue` lists them")
    add("--with", **_SETTINGS, dest="mechanism_settings", help="the rule's own parameters")
    add("--family", required=True, metavar="F", help="family of the bidders' values")
    add("--set", **_SETTINGS, dest="family_settings", help="the family's parameters")
    add("--bidders", required=True, type=_whole, metavar="N", help="how many may turn up")
    add("--units", required=True, type=_whole, metavar="K", help="identical units, fewer than bidders")
    add("--reserve", type=_number, default=0.0, metavar="R", help="reserve price of a unit (default: 0)")
    add("--turnout", type=_number, default=1.0, metavar="P", help="chance of turning up (default: 1)")
    add(
        "--measure",
        action="append",
        choices=tuple(MEASURES),
        metavar="X",
        help=f"a measure, repeatable (default: all): {', '.join(MEASURES)}",
    )
    add("--method", choices=("auto", "exact", "simulated"), default="auto", help="default: auto")
    add("--error", type=_number, metavar="E", help="error to reach: absolute for shares, relative for money")
    add("--seed", type=_seed, default=0, metavar="S", help="seed of a simulation (default: 0)")
    add("--threshold", type=_number, default=0.05, metavar="T", help="gain that gain_chance counts from")


def _add_catalogue(commands: Any) -> None:
    _command(commands, "catalogue", "list the pricing rules and the families of values", _CATALOGUE, _catalogue)


def _choose(options: argparse.Namespace) -> str:
    from mechbench.choice.evidence import gather  # noqa: PLC0415 - not for --help
    from mechbench.choice.records import choice_records  # noqa: PLC0415
    from mechbench.choice.report import report  # noqa: PLC0415
    from mechbench.market.file import read_market  # noqa: PLC0415
    from mechbench.show import records  # noqa: PLC0415

    with _Bars() as bars:
        evidence = gather(read_market(options.market), bars.advance)
    if options.format == "json":
        return records.to_json(choice_records(evidence))
    if options.format == "csv":
        return records.to_csv(choice_records(evidence))
    return report(evidence, options.format)


def _measure(options: argparse.Namespace) -> str:
    from mechbench.measuring import Cell, cell_records, cell_table  # noqa: PLC0415 - not for --help
    from mechbench.show import records  # noqa: PLC0415

    cell = Cell(
        mechanism=options.mechanism,
        mechanism_settings=_once("--with", options.mechanism_settings),
        family=options.family,
        family_settings=_once("--set", options.family_settings),
        bidders=options.bidders,
        units=options.units,
        reserve=options.reserve,
        turnout=options.turnout,
        measures=tuple(options.measure or MEASURES),
        method=options.method,
        error=options.error,
        seed=options.seed,
        threshold=options.threshold,
    )
    with _Bars() as bars:
        rows = cell_records(cell, lambda done: bars.reach("draws", done))
    if options.format == "json":
        return records.to_json(rows)
    if options.format == "csv":
        return records.to_csv(rows)
    return cell_table(rows, options.format)


def _catalogue(options: argparse.Namespace) -> str:
    from mechbench.show import catalogue, records  # noqa: PLC0415 - not for --help

    rows = catalogue.catalogue_rows()
    if options.format == "json":
        return records.to_json(rows)
    if options.format == "csv":
        return records.to_csv(rows, catalogue.CATALOGUE_FIELDS)
    return catalogue.catalogue_tables(rows, options.format)


class _Bars:
    """Progress on stderr, one bar for each thing that takes long, where a terminal is there to see it."""

    def __init__(self) -> None:
        self._bars: dict[str, Any] = {}

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        for bar in self._bars.values():
            bar.close()

    def advance(self, what: str, done: int) -> None:
        """Add to what was done."""
        if _watched():
            self._bar(what).update(done)

    def reach(self, what: str, done: int) -> None:
        """Say how much was done so far."""
        if _watched():
            bar = self._bar(what)
            bar.update(max(0, done - bar.n))

    def _bar(self, what: str) -> Any:
        if what not in self._bars:
            from tqdm import tqdm  # noqa: PLC0415 - only where work is long

            self._bars[what] = tqdm(desc=what, unit="", unit_scale=True, delay=1.0, leave=False)
        return self._bars[what]


def _watched() -> bool:
    return sys.stderr is not None and sys.stderr.isatty()


def _setting(text: str) -> tuple[str, float | str]:
    name, equals, value = text.partition("=")
    if not (name and equals and value):
        msg = f"found {text!r}; accepted is name=value"
        raise argparse.ArgumentTypeError(msg)
    try:
        return name, float(value)
    except ValueError:
        return name, value


_SETTINGS: dict[str, Any] = {
    "type": _setting,
    "nargs": "+",
    "action": "extend",
    "default": [],
    "metavar": "name=value",
}


def _once(option: str, settings: Sequence[tuple[str, float | str]]) -> dict[str, float | str]:
    """Refuse a parameter that is set twice."""
    found: dict[str, float | str] = {}
    for name, value in settings:
        if name in found:
            msg = f"mechbench measure: argument {option}: found {name} twice; accepted is each parameter once"
            raise InputError(msg)
        found[name] = value
    return found


def _whole(text: str) -> int:
    try:
        return int(text)
    except ValueError:
        msg = f"found {text!r}; accepted is a whole number"
        raise argparse.ArgumentTypeError(msg) from None


def _seed(text: str) -> int:
    number = _whole(text)
    if number < 0:
        msg = f"found {text!r}; accepted is a whole number of at least 0"
        raise argparse.ArgumentTypeError(msg)
    return number


def _number(text: str) -> float:
    try:
        return float(text)
    except ValueError:
        msg = f"found {text!r}; accepted is a number"
        raise argparse.ArgumentTypeError(msg) from None


def _print(text: str) -> int:
    """Write the output, all of it; a reader that has seen enough is no error."""
    if sys.stdout is None:  # closed by who started this
        return _refuse("the output cannot be written: it is closed")
    encoding = getattr(sys.stdout, "encoding", None) or "utf-8"
    try:
        sys.stdout.write(text.encode(encoding, "replace").decode(encoding))
        sys.stdout.flush()
    except BrokenPipeError:
        _silence()
    except OSError as error:
        _silence()
        return _refuse(f"the output cannot be written: {error.strerror}")
    return _DONE


def _silence() -> None:
    """Keep the interpreter from writing the rest again at its end."""
    os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def _refuse(message: str, code: int = _WRONG_INPUT) -> int:
    line = " ".join(message.split())
    name = "" if line.startswith("mechbench") else "mechbench: "
    if sys.stderr is not None:  # else closed by who started this: the exit code has to do
        encoding = getattr(sys.stderr, "encoding", None) or "utf-8"
        with contextlib.suppress(OSError):
            sys.stderr.write(f"{name}{line}\n".encode(encoding, "backslashreplace").decode(encoding))
    return code
