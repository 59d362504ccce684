"""Reading a bid log: a CSV file of any size, in bounded memory, refused in one clear line.

A bid of 0 never wins. It is counted and then left out: it stands for a bidder who did not turn up, so it
belongs to the market's turnout and not to the law of values.
"""

from __future__ import annotations

import csv
from collections import defaultdict
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from mechbench.contract import Floats, InputError, number_words
from mechbench.logs import faults
from mechbench.logs.summary import EXACT_BIDS, Summary
from mechbench.logs.ticks import find_tick, spread_ties, tied_share

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["LEAST_BIDS", "BidLog", "read_log"]

LEAST_BIDS = 30
"""Fewer bids than this say next to nothing about a law of values."""


@dataclass(frozen=True)
class BidLog:
    """The bids of a log, in rising order.

    Attributes
    ----------
    source, column : str
        The file and the column of the bids.
    bids, zeros : int
        Bids above 0, and bids of 0, which are left out.
    values : array (values,)
        Rising; ties spread over the tick.
    weights : array (values,)
        How many bids each value stands for: 1 throughout while `exact`.
    exact : bool
        Whether every bid is kept; False for a summary of a long log.
    auctions : array (values,) or None
        Number of each bid's auction, from 0; None where the log names none or is a summary.
    auction_count : int
        How many auctions there are; 0 where they are not kept.
    tick : float
        The step in which bids were written, 0 if none was found or ties are rare.
    notes : tuple of str
        What a reader of the numbers should know, in sentences.
    """

    source: str
    column: str
    bids: int
    zeros: int
    values: Floats = field(repr=False)
    weights: NDArray[np.int64] = field(repr=False)
    exact: bool = True
    auctions: NDArray[np.int64] | None = field(default=None, repr=False)
    auction_count: int = 0
    tick: float = 0.0
    notes: tuple[str, ...] = ()


def read_log(
    path: Path | str, *, bid: str, auction: str | None = None, progress: Callable[[int], object] | None = None
) -> BidLog:
    """Read the bids of a CSV file.

    Parameters
    ----------
    path : Path or str
        Comma-separated UTF-8 with a row of column names.
    bid : str
        Name of the column of the bids: numbers, 0 or more.
    auction : str, optional
        Name of a column that tells the auctions apart. It is kept up to 200,000 bids.
    progress : callable, optional
        Called with the number of rows read since the last call.

    Raises
    ------
    InputError
        If the file cannot be read as such a log; the line names the file, the row (the header is row 1), the
        column, what was found and what is accepted.
    """
    path = Path(path)
    width = _check_file(path, bid, auction)
    summary, zeros, names = Summary(), 0, []
    for bids, block_names in _blocks(path, bid, auction, max(_FIELDS // width, 1)):
        above = bids > 0
        zeros += int(bids.size - np.count_nonzero(above))
        summary.add(bids[above])
        if block_names is not None and summary.exact:
            names.append(block_names[above])
        if progress is not None:
            progress(bids.size)
    if summary.bids < LEAST_BIDS:
        plural = "" if summary.bids == 1 else "s"
        found = f"{summary.bids} bid{plural} above 0" if summary.bids + zeros else "no bids below the header"
        faults.refuse(path, f"column {faults.quoted(bid)}", found, f"at least {LEAST_BIDS}")
    if summary.exact:
        return _whole(path, bid, summary, zeros, names)
    return _long(path, bid, summary, zeros, auction)


def _check_file(path: Path, bid: str, auction: str | None) -> int:
    """Refuse what is no file, and a header that will not do; return the number of columns."""
    try:
        with path.open(encoding="utf-8-sig", newline="") as lines:
            header = next(csv.reader(lines), None)
            first = next((row for row in csv.reader(lines) if any(map(str.strip, row))), [])
    except UnicodeDecodeError:
        faults.refuse_encoding(path)
    except OSError as error:
        faults.refuse(path, "", error.strerror or "no readable file", "the path of a readable CSV file")
    except csv.Error as error:
        faults.refuse(path, "row 1", faults.fields_fault(error), "comma-separated text")
    if header is None:
        faults.refuse(path, "", "an empty file", "a CSV file with a row of column names")
    faults.check_header(path, header, [bid] if auction is None else [bid, auction])
    if len(first) > len(header):
        faults.refuse_first_fault(path, bid, auction, "more fields than column names")
    return len(header)


def _blocks(
    path: Path, bid: str, auction: str | None, rows: int
) -> Iterator[tuple[Floats, NDArray[np.object_] | None]]:
    """Bids, and the names of their auctions, in blocks of so many rows."""
    import pandas as pd  # noqa: PLC0415 - half a second that only logs should cost

    kinds: defaultdict[str, str] = defaultdict(lambda: "object", {bid: "float64"})
    try:
        with pd.read_csv(
            path, dtype=kinds, na_filter=False, index_col=False, encoding="utf-8-sig", chunksize=rows
        ) as blocks:
            for block in blocks:
                yield _checked(block, path, bid, auction)
    except UnicodeDecodeError:
        faults.refuse_encoding(path)
    except InputError:
        raise
    except (pd.errors.ParserWarning, ValueError) as error:  # a parser's error is a ValueError
        faults.refuse_first_fault(path, bid, auction, str(error))


def _checked(
    block: pd.DataFrame, path: Path, bid: str, auction: str | None
) -> tuple[Floats, NDArray[np.object_] | None]:
    """Return the block's bids and their auctions, or refuse the file."""
    bids = np.array(block[bid], dtype=np.float64)
    good = (bids == 0) | ((bids >= faults.LOWEST_BID) & (bids <= faults.HIGHEST_BID))
    names = None if auction is None else block[auction].to_numpy(dtype=np.object_)
    if not good.all() or (names is not None and (names == "").any()):
        faults.refuse_first_fault(path, bid, auction, "a bid that is no amount")
    return bids, names


def _whole(path: Path, bid: str, summary: Summary, zeros: int, names: list[NDArray[np.object_]]) -> BidLog:
    """Make a log that is kept bid by bid."""
    import pandas as pd  # noqa: PLC0415 - see above

    bids = summary.values()
    order = np.argsort(bids, kind="stable")
    ordered = bids[order]
    _refuse_equal(path, bid, ordered)
    tick, notes = _written(ordered)
    values = spread_ties(ordered, tick)
    again = np.argsort(values, kind="stable")
    auctions, count = None, 0
    if names:
        codes, found = pd.factorize(np.concatenate(names))
        auctions, count = codes[order][again].astype(np.int64), len(found)
        if count < _LEAST_AUCTIONS:
            auctions, few = None, count
            count = 0
            note = (
                f"The log names {few} auctions, too few to resample whole ({_LEAST_AUCTIONS} would do): its "
                f"sampling error takes its bids as independent."
            )
            notes = (*notes, note)
    notes = (*_zero_notes(zeros, summary.bids), *notes)
    return BidLog(
        source=str(path),
        column=bid,
        bids=bids.size,
        zeros=zeros,
        values=values[again],
        weights=np.ones(bids.size, dtype=np.int64),
        auctions=auctions,
        auction_count=count,
        tick=tick,
        notes=notes,
    )


def _long(path: Path, bid: str, summary: Summary, zeros: int, auction: str | None) -> BidLog:
    """Make a log that is kept as a summary."""
    values, weights = summary.weighted()
    _refuse_equal(path, bid, values)
    tick, notes = _written(np.sort(summary.first))
    steps, top = np.split(values, [values.size - summary.top])
    values = np.concatenate([steps, spread_ties(top, tick)])
    again = np.argsort(values, kind="stable")
    notes = (
        *_zero_notes(zeros, summary.bids),
        f"The log is long: its {summary.top:,} highest bids are kept one by one, the others in fine steps.",
        *notes,
    )
    if auction is not None:
        note = (
            f"With more than {EXACT_BIDS:,} bids auctions are not kept: the log's sampling error takes its "
            f"bids as independent, and is too small if bids of one auction move together."
        )
        notes = (*notes, note)
    return BidLog(
        source=str(path),
        column=bid,
        bids=summary.bids,
        zeros=zeros,
        values=values[again],
        weights=weights[again],
        exact=False,
        tick=tick,
        notes=notes,
    )


def _refuse_equal(path: Path, bid: str, ordered: Floats) -> None:
    if ordered[0] == ordered[-1]:
        found = f"every bid equal to {number_words(ordered[0])}"
        faults.refuse(path, f"column {faults.quoted(bid)}", found, "bids that differ")


def _written(ordered: Floats) -> tuple[float, tuple[str, ...]]:
    """Find the tick in which bids are written, 0 where ties are rare or keep none, and what to say of it."""
    tied = tied_share(ordered)
    if tied < _TIES:
        return 0.0, ()
    tick = find_tick(ordered)
    share = f"{100 * tied:.0f} in a hundred bids equal another one"
    if tick == 0:
        return 0.0, (f"{share} and keep no common step; they are taken as they are.",)
    return tick, (f"{share}; bids keep to steps of {tick:.6g} and are spread evenly within a step.",)


def _zero_notes(zeros: int, bids: int) -> tuple[str, ...]:
    if zeros == 0:
        return ()
    share = bids / (bids + zeros)
    note = (
        f"{zeros:,} bids of 0 are left out: they never win and stand for bidders who did not turn up "
        f"(a turnout of {share:.3g} would count them)."
    )
    return (note,)


_FIELDS = 200_000
"""Fields of a block of rows, so that a wide log takes no more memory than a narrow one."""
_TIES = 0.01
_LEAST_AUCTIONS = 20
"""Fewer auctions than this resampled whole give too ragged a bootstrap."""
