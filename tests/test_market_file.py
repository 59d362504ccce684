"""The market file: what it says, how each mistake is told, and how it is echoed in words."""

import re
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from mechbench import discovery
from mechbench.contract import MEASURES, MONEY, InputError, Mechanism
from mechbench.market.file import (
    FamilyChoice,
    LogChoice,
    MarketFile,
    MechanismChoice,
    Requirement,
    SupplyChoice,
    read_market,
)
from mechbench.market.limits import NOT_MODELLED
from mechbench.market.words import market_words

CORPUS = Path(__file__).parent / "corpus"
MISTAKES = sorted(CORPUS.glob("*.toml"))
DEMO = (Path(discovery.__file__).parent / "market" / "demo.toml").read_bytes()

SMALL = """
[bidders]
count = 120
[values]
family = "weibull"
shape = 1.4
[supply]
units = 12
"""
LOGGED = SMALL.replace('family = "weibull"\nshape = 1.4', 'log = "bids.csv"\nbid = "offer"\nbids_are = "values"')


def written(folder, text):
    """Write a market file, and a log beside it."""
    (folder / "bids.csv").write_text("offer,night\n12,1\n", encoding="utf-8")
    path = folder / "market.toml"
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return path


def refusal(path):
    """Return the message with which a file is refused."""
    with pytest.raises(InputError) as caught:
        read_market(path)
    return str(caught.value)


class TestWhatIsRead:
    def test_demo(self):
        """The built-in demo reads as the market it describes."""
        file = read_market(None)
        assert file.title == "Cold-room bays, weeknights"
        assert file.currency == "EUR"
        assert (file.bidders, file.turnout) == ((120,), 0.7)
        assert file.values == FamilyChoice("weibull", {"shape": 1.4, "scale": 30.0})
        assert file.supply == SupplyChoice("units", 12, 8.0)
        assert file.requirements == (
            Requirement("worst_gain", at_most=0.05),
            Requirement("gain_chance", at_most=0.1, above=0.05),
            Requirement("efficiency", at_least=0.95),
        )
        assert file.objective == "revenue"
        assert file.current == MechanismChoice("pay-as-bid", {})
        assert file.compare == (
            MechanismChoice("pay-as-bid", {}),
            MechanismChoice("uniform-price", {"price_at": "first-rejected"}),
            MechanismChoice("uniform-price", {"price_at": "last-accepted"}),
        )
        assert file.source == "the built-in demo market"

    def test_a_copy_of_the_demo_reads_the_same(self, tmp_path):
        """A copied demo differs from the built-in one in nothing but its name."""
        copy = read_market(written(tmp_path, DEMO))
        demo = read_market(None)
        assert copy.source == str(tmp_path / "market.toml")
        assert vars(copy) | {"source": demo.source} == vars(demo)

    def test_alternatives_in_the_demo_work(self, tmp_path):
        """Each line that the demo offers in a comment is accepted when it takes its neighbour's place."""
        text = DEMO.decode()
        text = re.sub(r"(?m)^(family|shape|scale) =.*\n", "", text)
        text, uncommented = re.subn(r"(?m)^# (log|bid|auction|bids_are|objective) =", r"\1 =", text)
        text = re.sub(r"(?m)^count =", "count = [30, 60, 120, 240] #", text)
        text = re.sub(r"(?m)^units =", "units_exponent = 0.5 #", text)
        file = read_market(written(tmp_path, text))
        assert uncommented == 5
        assert file.values == LogChoice(tmp_path / "bids.csv", "offer", "night", "values")
        assert [file.supply.units(size) for size in file.bidders] == [5, 8, 11, 15]

    def test_demo_tells_a_story(self):
        """In the demo's market pay-as-bid misses by far, the last accepted bid by a little, the first not."""
        file = read_market(None)
        market = file.market(file.values.distribution(), 120)
        rng = np.random.default_rng(7)
        bids = market.values.upper_quantile(1.0 - rng.random((4000, 120)))
        bids *= rng.random(bids.shape) < market.turnout
        worst = [choice.mechanism().gains(bids, market.supply).max(axis=1) for choice in file.compare]
        assert worst[0].mean() > 0.4
        assert worst[1].max() == 0
        assert worst[2].mean() < 0.04
        assert 0.15 < (worst[2] > 0.05).mean() < 0.22

    def test_defaults(self, tmp_path):
        """What a file leaves out takes its default and does not count as given."""
        file = read_market(written(tmp_path, SMALL))
        assert (file.title, file.currency, file.turnout) == ("market", "", 1.0)
        assert file.values == FamilyChoice("weibull", {"shape": 1.4, "scale": 1.0})
        assert (file.requirements, file.objective) == ((), "revenue")
        assert (file.current, file.compare, file.gain_threshold) == (None, None, 0.05)
        assert file.given == {
            *("bidders", "bidders.count", "supply", "supply.units"),
            *("values", "values.family", "values.shape"),
        }

    def test_log(self, tmp_path):
        """A log's path is taken relative to the market file, and its column of auctions may be left out."""
        file = read_market(written(tmp_path, LOGGED))
        assert file.values == LogChoice(tmp_path / "bids.csv", "offer", None, "values")

    def test_byte_order_mark(self, tmp_path):
        """A file saved with a byte order mark reads as one without."""
        assert read_market(written(tmp_path, b"\xef\xbb\xbf" + DEMO)).bidders == (120,)

    def test_threshold_of_the_chance(self, tmp_path):
        """A requirement on the chance of a gain may say which gain."""
        text = SMALL + "[requirements]\ngain_chance = { above = 0.1, at_most = 0.2 }"
        file = read_market(written(tmp_path, text))
        assert file.requirements == (Requirement("gain_chance", at_most=0.2, above=0.1),)
        assert file.gain_threshold == 0.1

    @pytest.mark.parametrize("measure", MEASURES)
    def test_every_measure_may_be_required(self, tmp_path, measure):
        """Every measure is accepted in a requirement, from below and from above."""
        for side in ("at_most", "at_least"):
            text = f"{SMALL}[requirements]\n{measure} = {{ {side} = 0.5 }}"
            assert read_market(written(tmp_path, text)).requirements == (Requirement(measure, **{side: 0.5}),)

    @pytest.mark.parametrize("measure", sorted(MONEY))
    def test_money_may_exceed_one(self, tmp_path, measure):
        """A requirement on money is an amount, not a share."""
        text = f"{SMALL}[requirements]\n{measure} = {{ at_least = 5000 }}"
        (bound,) = read_market(written(tmp_path, text)).requirements
        assert bound == Requirement(measure, at_least=5000.0)

    def test_market_of_one_size(self, tmp_path):
        """The market built for a size of the path has that size's units, the reserve and the turnout."""
        text = SMALL.replace("count = 120", "count = [30, 300]\nturnout = 0.5")
        text = text.replace("units = 12", "units_per_bidder = 0.1\nreserve = 0.2")
        file = read_market(written(tmp_path, text))
        market = file.market(file.values.distribution(), 300)
        assert (market.bidders, market.supply.units, market.supply.reserve) == (300, 30, 0.2)
        assert market.turnout == 0.5

    def test_market_refused_names_the_file(self, tmp_path):
        """Fitted values that never reach the reserve are refused under the file's name."""
        path = written(tmp_path, LOGGED + "reserve = 50")
        values = discovery.family_class("uniform")(high=40)
        with pytest.raises(InputError, match=re.escape(str(path)) + ".*no value exceeds 40"):
            read_market(path).market(values, 120)


class TestRounding:
    @pytest.mark.parametrize(
        ("rule", "amount", "bidders", "units"),
        [
            ("units", 12, 10**15, 12),
            ("units_per_bidder", 0.1, 15, 2),  # 1.5: halves go up
            ("units_per_bidder", 0.145, 100, 15),  # 14.5 as written, 14.499999999999998 in doubles
            ("units_per_bidder", 0.1, 14, 1),
            ("units_per_bidder", 0.001, 30, 1),  # at least 1
            ("units_per_bidder", 1e-9, 10**15, 10**6),
            ("units_exponent", 0.5, 10**12, 10**6),
            ("units_exponent", 0.5, 30, 5),  # 5.48
            ("units_exponent", 0.5, 31, 6),  # 5.57
            ("units_exponent", 0.001, 2, 1),
        ],
    )
    def test_whole_units(self, rule, amount, bidders, units):
        """Units are the nearest whole number, halves up, and at least 1."""
        assert SupplyChoice(rule, amount).units(bidders) == units


class TestMistakes:
    @pytest.mark.parametrize("path", MISTAKES, ids=[path.stem for path in MISTAKES])
    def test_planted_mistake(self, path):
        """Each planted mistake gives one line that starts with the file and holds the words it promises."""
        promised = path.read_bytes().split(b"\n", 1)[0].decode().removeprefix("# refused: ").split(" | ")
        message = refusal(path)
        assert message.startswith(f"{path}: {promised[0]}")
        assert [words for words in promised if words not in message] == []
        assert message.isprintable()

    def test_the_corpus_is_large(self):
        """The corpus holds at least twenty-five mistakes."""
        assert len(MISTAKES) >= 25

    @pytest.mark.parametrize(
        ("table", "place"),
        [
            ("", "zzz"),
            ("[bidders]", "bidders.zzz"),
            ("[values]", "values.zzz"),
            ("[supply]", "supply.zzz"),
            ("[requirements]", "requirements.zzz"),
            ("worst_gain = {", "requirements.worst_gain.zzz"),
            ("gain_chance = {", "requirements.gain_chance.zzz"),
            ("[current]", "current.zzz"),
            ("[compare]", "compare.zzz"),
            ("{ name =", "compare.mechanisms, entry 3.zzz"),
        ],
    )
    def test_unknown_key(self, tmp_path, table, place):
        """An unknown key is refused at every level, with the known ones named."""
        entry = "zzz = 1\n"
        if table.endswith("{"):
            text = DEMO.decode().replace(table, table + " zzz = 1,")
        elif table.startswith("{"):
            text = DEMO.decode().replace(table, "{ zzz = 1, name =")
        else:
            text = re.sub(r"(?m)^" + re.escape(table) + r".*\n", rf"\g<0>{entry}", DEMO.decode(), count=1)
        message = refusal(written(tmp_path, text))
        assert f": {place}: unknown key; accepted is " in message

    def test_unknown_key_beside_a_log(self, tmp_path):
        """A key that a log does not know is refused too."""
        message = refusal(written(tmp_path, LOGGED.replace("bid =", "zzz = 1\nbid =")))
        assert "values.zzz: unknown key; accepted is log, bid, bids_are, auction" in message

    @pytest.mark.parametrize("limit", NOT_MODELLED, ids=lambda limit: limit.topic)
    def test_not_modelled(self, tmp_path, limit):
        """Whatever the model leaves out is refused wherever it is declared, with the reason."""
        for word in limit.words.split():
            for text in (f"[{word}]\nrate = 0.1\n", f"{word.upper()} = 1"):
                message = refusal(written(tmp_path, SMALL + text))
                assert f"{limit.topic}: not modelled, and the numbers would mislead: {limit.why}" in message

    def test_key_that_is_no_word(self, tmp_path):
        """A key with line ends, control characters or a great length is shown in one short line."""
        for key in (r"a\nb\u001b[31m", "k" * 10_000, "a.b"):
            message = refusal(written(tmp_path, f'"{key}" = 1\n{SMALL}'))
            assert "unknown key" in message
            assert message.isprintable()
            assert len(message) < 400


class TestFiles:
    @pytest.mark.parametrize(
        ("text", "words"),
        [
            (b"", "the file is empty"),
            (b"# only a comment\n", "the file is empty"),
            (SMALL.encode("utf-16"), "line 1: byte 0xff is not UTF-8"),
            (b"#" * 2**20 + b"\n", "larger than 1 MiB"),
            (b"a = " + b"[" * 20_000, "nested too deeply"),
            (b"a = " + b"9" * 5_000, "line 1, at its end: found"),
            (b"\x00" * 50, "line 1, column 1: found"),
            (b"title = 'a\x00b'", "line 1"),
        ],
        ids=["empty", "comment", "utf16", "huge", "deep", "digits", "zeros", "nul"],
    )
    def test_not_a_market_file(self, tmp_path, text, words):
        """Bytes that are no market file are refused in one line."""
        path = written(tmp_path, text)
        message = refusal(path)
        assert message.startswith(f"{path}: ")
        assert words in message
        assert message.isprintable()

    def test_no_such_file(self, tmp_path):
        """A path where nothing is, or a folder is, or nothing can be, is refused."""
        assert "there is no such file" in refusal(tmp_path / "nowhere.toml")
        assert "this is a folder" in refusal(tmp_path)
        assert "cannot be read" in refusal(tmp_path / ("x" * 5000))
        assert "cannot be read" in refusal(Path("a\0b"))

    def test_log_that_cannot_be(self, tmp_path):
        """A log's path that no system can hold is refused like one where nothing is."""
        for name in ("x" * 5000, r"a\u0000b", ".", "bids.csv/x"):
            message = refusal(written(tmp_path, LOGGED.replace("bids.csv", name)))
            assert "values.log: found" in message


class TestPlugIns:
    def test_family_that_raises(self, tmp_path, monkeypatch):
        """A family that raises while it is made is refused with its reason."""
        weibull = discovery.family_class("weibull")

        class Broken(weibull):
            def prepare(self) -> None:
                message = "scale\nbroken"
                raise ZeroDivisionError(message)

        monkeypatch.setattr(discovery, "family_class", lambda _: Broken)
        message = refusal(written(tmp_path, SMALL))
        assert "values: weibull fails with these settings: ZeroDivisionError: scale broken" in message

    def test_family_from_a_log_only(self, tmp_path, monkeypatch):
        """A family that only a log can give is refused where it is named."""
        fitted = type("Fitted", (discovery.family_class("weibull"),), {"from_log": True})
        monkeypatch.setattr(discovery, "family_class", lambda _: fitted)
        assert 'values.family: weibull is fitted to a bid log; accepted is log = "..."' in refusal(
            written(tmp_path, SMALL)
        )

    def test_mechanism_for_other_supply(self, tmp_path, monkeypatch):
        """A rule that does not serve identical units is refused where it is named."""
        other = type("Other", (Mechanism,), {"name": "other", "serves": frozenset({"ranked slots"})})
        monkeypatch.setattr(discovery, "mechanism_class", lambda _: other)
        message = refusal(written(tmp_path, SMALL + '[current]\nmechanism = "other"'))
        assert "current.mechanism: other serves ranked slots; accepted is a rule for identical units" in message

    def test_settings_that_do_not_fit_together(self, tmp_path):
        """A combination that the family itself refuses names the file and the table."""
        text = SMALL.replace('"weibull"\nshape = 1.4', '"uniform"\nlow = 3\nhigh = 2')
        assert ": values: " in refusal(written(tmp_path, text))


ODD = ["-1", "0", "1", "nan", "-inf", "1e308", "9" * 30, "0x" + "f" * 4000, "true", '"text"', '""', "[]"]
ODD += ["{}", "[[1]]", "{ name = 3 }", "1979-05-27", "12", '"uniform-price"', '"empirical"', '"__init__"']


class TestFuzz:
    @staticmethod
    def check(folder, text) -> None:
        """Read a file that may be anything: a market or one clear line comes back, nothing else."""
        path = written(folder, text)
        message = ""
        try:
            file = read_market(path)
        except InputError as error:
            file, message = None, str(error)
        assert isinstance(file, MarketFile) or message.startswith(f"{path}: ")
        assert message == "" or message.isprintable()
        assert len(message) < 1000

    @settings(max_examples=200, deadline=None, derandomize=True)
    @given(data=st.data())
    def test_bytes(self, tmp_path_factory, data):
        """The demo with bytes dropped, doubled or replaced gives a market or one clear line."""
        text = bytearray(DEMO)
        for _ in range(data.draw(st.integers(1, 4))):
            start = data.draw(st.integers(0, len(text) - 1))
            end = start + data.draw(st.integers(0, 40))
            kind = data.draw(st.sampled_from(["drop", "double", "replace"]))
            part = {"drop": b"", "double": bytes(text[start:end]) * 2}.get(kind)
            text[start:end] = data.draw(st.binary(max_size=6)) if part is None else part
        self.check(tmp_path_factory.getbasetemp(), bytes(text))

    @settings(max_examples=200, deadline=None, derandomize=True)
    @given(data=st.data())
    def test_values(self, tmp_path_factory, data):
        """The demo with odd values in place of its own gives a market or one clear line."""
        text = re.sub(r"#.*", "", DEMO.decode())
        tokens = list(re.finditer(r'"[^"]*"|(?<![\w."])[0-9.]+(?!\w)|\w+(?= =)', text))
        token = data.draw(st.sampled_from(tokens))
        odd = data.draw(st.sampled_from(ODD))
        self.check(tmp_path_factory.getbasetemp(), text[: token.start()] + odd + text[token.end() :])


class TestWords:
    def test_demo(self):
        """The demo is echoed line by line, each figure followed by where it comes from."""
        file = read_market(None)
        told = """
        Cold-room bays, weeknights.
        Crowd: 120 bidders, each of whom turns up with chance 0.7; about 84 of 120 turn up
            for 12 units [given].
        Values: weibull, shape 1.4, scale 30; half the values are above 23.1 EUR, one in twenty above
            65.7 EUR [given].
        Reserve: 8 EUR a unit; 85.5 % of the values are above it [given].
        Required: worst_gain at most 0.05, gain_chance (of a gain above 0.05) at most 0.1, efficiency
            at least 0.95 [given].
        Ranked by: revenue, the revenue if nobody shades [default].
        Rules compared: pay-as-bid, uniform-price, uniform-price (price_at last-accepted); in use
            today: pay-as-bid [given].
        """
        lines = re.sub(r"\n {12}", " ", told).split("\n")
        assert market_words(file, file.values.distribution(), 120) == [line.strip() for line in lines[1:-1]]

    def test_quantiles_are_the_family_s(self):
        """The median and the upper twentieth are those of a Weibull law by its textbook formula."""
        told = market_words(read_market(None), read_market(None).values.distribution(), 120)[2]
        for share in (0.5, 0.05):
            assert f"above {30 * (-np.log(share)) ** (1 / 1.4):.1f} EUR" in told

    def test_defaults_are_marked(self, tmp_path):
        """Figures that rest on a default say so, and so do figures worked out from one."""
        text = SMALL.replace("count = 120", "count = [30, 120]").replace("units = 12", "units_exponent = 0.5")
        file = read_market(written(tmp_path, text + "reserve = 0.5"))
        lines = market_words(file, file.values.distribution(), 120)
        assert lines[1] == "Crowd: 120 bidders [given], all of whom turn up [default] for 11 units [given]."
        assert lines[2] == "Growth path: 30 and 120 bidders, with 5 and 11 units [given]."
        assert lines[3].startswith("Values: weibull, shape 1.4 [given], scale 1; half the values are above")
        assert lines[3].endswith("[default].")
        assert lines[4] == "Reserve: 0.5 a unit [given]; 68.5 % of the values are above it [default]."

    def test_fits_are_marked(self, tmp_path):
        """Figures that rest on a log are marked as fitted."""
        file = read_market(written(tmp_path, LOGGED + "reserve = 8"))
        pareto = discovery.family_class("pareto")(tail_index=0.25, scale=6)
        lines = market_words(file, pareto, 120)
        assert lines[2] == (
            "Values: fitted to the bids in bids.csv, column offer, tail index 0.25; half the values are "
            "above 7.14, one in twenty above 12.7 [fitted]."
        )
        assert lines[3] == "Reserve: 8 a unit [given]; 31.6 % of the values are above it [fitted]."

    @pytest.mark.parametrize("text", [SMALL, LOGGED, DEMO], ids=["small", "log", "demo"])
    def test_every_figure_is_marked(self, tmp_path, text):
        """On every line below the title, a mark follows the last figure."""
        file = read_market(written(tmp_path, text))
        for line in market_words(file, discovery.family_class("exponential")(), 120)[1:]:
            assert re.fullmatch(r".*\d.*\[(given|default|fitted)\]\.|\D*", line)
