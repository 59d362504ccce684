"""The decision on made-up numbers, the search over sizes, the spread from a log, and the sentences."""

import dataclasses
import math
import re
from pathlib import Path

import numpy as np
import pytest

from mechbench import discovery
from mechbench.choice import growth
from mechbench.choice.evidence import SHOWN, gather
from mechbench.choice.growth import Size, size_that_meets
from mechbench.choice.judge import Candidate, Finding, decide, difference, verdict
from mechbench.choice.report import report
from mechbench.choice.resampling import resampled_findings
from mechbench.choice.sentences import recommendation
from mechbench.contract import IdenticalUnits, InputError
from mechbench.engine.estimate import Estimate
from mechbench.engine.evaluate import evaluate
from mechbench.logs.fit import fit_log, log_interval, resampled_fits
from mechbench.logs.read import read_log
from mechbench.market.file import Requirement, SupplyChoice, read_market
from mechbench.market.market import Market

GAIN = Requirement("worst_gain", at_most=0.05)
SHARE = Requirement("efficiency", at_least=0.95)


def number(value, error=0.0, status="ok", method="exact", resampled=None):
    """Make up a finding."""
    return Finding(Estimate(value, error, method, status), resampled)


def rule(name, gain=0.0, revenue=100.0, shaded=90.0, efficiency=1.0, **more: object):
    """Make up a rule with its findings."""
    told = {"worst_gain": gain, "revenue": revenue, "shaded_revenue": shaded, "efficiency": efficiency}
    told |= more
    findings = {key: one if isinstance(one, Finding) else number(one) for key, one in told.items()}
    return Candidate(name, findings)


def sentence(candidates, requirements=(GAIN,), objective="revenue", current=None):
    """Decide and say it."""
    file = dataclasses.replace(read_market(None), requirements=tuple(requirements), objective=objective)
    return recommendation(file, candidates, decide(candidates, requirements, objective), current)


class TestVerdicts:
    @pytest.mark.parametrize(
        ("finding", "word"),
        [
            (number(0.04), "met"),
            (number(0.05), "met"),
            (number(0.06), "missed"),
            (number(0.04, 0.02), "cannot tell"),
            (number(0.06, 0.02), "cannot tell"),
            (number(0.08, 0.02), "missed"),
            (number(0.04, 0.001, "lower bound"), "cannot tell"),
            (number(0.08, 0.001, "lower bound"), "missed"),
            (number(math.nan, math.nan, "no sale"), "cannot tell"),
            (number(math.inf, math.inf, "infinite"), "missed"),
            (number(0.04, 1e-6, "not converged"), "met"),
            (number(0.04, 0.001, "infinite variance: the interval is not to be trusted"), "cannot tell"),
        ],
    )
    def test_at_most(self, finding, word):
        """A limit within the error cannot be told; a status that leaves the number open leaves the word open."""
        assert verdict(GAIN, finding).word == word

    @pytest.mark.parametrize(
        ("finding", "word"),
        [
            (number(1.0, 2e-16), "met"),
            (number(0.95), "met"),
            (number(0.94), "missed"),
            (number(0.94, 0.02), "cannot tell"),
            (number(0.90, 0.01, "lower bound"), "cannot tell"),
            (number(0.97, 0.01, "lower bound"), "met"),
            (number(math.inf, math.inf, "infinite"), "met"),
        ],
    )
    def test_at_least(self, finding, word):
        """The same from the other side."""
        assert verdict(SHARE, finding).word == word

    def test_the_log_counts(self):
        """A number that is exact but rests on a log has the log's error in the verdict."""
        spread = 0.04 * np.exp(0.3 * np.array([-1.0, 1.0] * 50))
        finding = number(0.04, resampled=spread)
        assert verdict(GAIN, finding).word == "cannot tell"
        low, high, half = log_interval(0.04, spread)
        assert finding.log_range == (low, high)
        assert finding.log_error == pytest.approx(half)

    def test_infinite_on_some_resamples(self):
        """Revenue that is infinite on some resamples of the log has no upper end."""
        finding = number(100.0, resampled=np.array([90.0, 110.0, math.inf, 100.0]))
        assert finding.log_error == math.inf
        assert verdict(Requirement("revenue", at_most=1e6), finding).word == "cannot tell"


class TestDifferences:
    def test_paired(self):
        """Two numbers that move together on the resamples differ more surely than either is known."""
        moves = np.linspace(-20.0, 20.0, 101)
        first, second = number(100.0, resampled=100.0 + moves), number(95.0, resampled=95.0 + moves)
        gap = difference(first, second)
        assert gap.value == 5.0
        assert gap.log_error == pytest.approx(0.0, abs=1e-12)
        assert first.log_error > 10

    def test_bounds_add(self):
        """Exact bounds add; half-widths add as independent errors."""
        assert difference(number(1.0, 0.3), number(1.0, 0.4)).error == pytest.approx(0.7)
        simulated = difference(number(1.0, 0.3, method="simulated"), number(1.0, 0.4))
        assert simulated.error == pytest.approx(0.5)


class TestDecisions:
    def test_constraints_come_first(self):
        """The highest revenue does not help a rule that misses a requirement."""
        found = decide([rule("rich", 0.5, 200), rule("fair", 0.0, 100)], [GAIN], "revenue")
        assert (found.leaders, found.followers, found.above) == ((1,), (), (0,))

    def test_ranking(self):
        """Among those that meet the requirements more of the objective wins."""
        rules = [rule("low", 0.01, 100), rule("high", 0.02, 120)]
        assert decide(rules, [GAIN], "revenue").leaders == (1,)
        assert decide(rules, [GAIN], "revenue").followers == (0,)

    def test_ties(self):
        """A difference within the combined error is a tie."""
        rules = [rule("a", revenue=number(100.0, 3.0)), rule("b", revenue=number(104.0, 3.0))]
        assert set(decide(rules, [GAIN], "revenue").leaders) == {0, 1}
        sharper = [rule("a", revenue=number(100.0, 1.0)), rule("b", revenue=number(104.0, 1.0))]
        assert decide(sharper, [GAIN], "revenue").leaders == (1,)

    def test_nobody_meets(self):
        """Where all miss, the one with fewest and then least misses is nearest."""
        rules = [rule("far", 0.5), rule("near", 0.06), rule("both", 0.06, efficiency=0.5)]
        found = decide(rules, [GAIN, SHARE], "revenue")
        assert (found.leaders, found.unsure, found.nearest) == ((), (), 1)

    def test_cannot_tell(self):
        """A rule that may meet a requirement is neither chosen nor dismissed."""
        found = decide([rule("maybe", number(0.05, 0.01)), rule("no", 0.5)], [GAIN], "revenue")
        assert (found.leaders, found.unsure, found.nearest) == ((), (0,), None)

    @pytest.mark.parametrize("unit", [1e-12, 1e-6, 1.0, 1e12])
    def test_any_unit_of_money(self, unit):
        """What is ranked first does not hang on the unit in which money is counted."""
        rules = [rule("low", 0.01, 100 * unit), rule("high", 0.02, 120 * unit)]
        assert decide(rules, [GAIN], "revenue").leaders == (1,)

    def test_infinite_revenue(self):
        """An infinite expectation is no number, so it outranks nothing."""
        endless = number(math.inf, math.inf, "infinite")
        found = decide([rule("finite"), rule("endless", revenue=endless)], [GAIN], "revenue")
        assert set(found.leaders) == {0, 1}

    def test_no_requirements(self):
        """Without requirements the objective alone decides."""
        assert decide([rule("a", 0.9, 100), rule("b", 0.0, 90)], [], "revenue").leaders == (0,)


class TestSentences:
    def test_change(self):
        """The sentence names the rule in use, the one to take, why, and what would change it."""
        said = sentence([rule("old", 0.5, 200), rule("new", 0.0, 100)], current=0)
        assert said.startswith("Recommended: new in place of old, because it alone meets every requirement")
        assert "accepting a worst_gain of 0.5000 would put old first (200 EUR if nobody shades, 90" in said
        assert "if each alone shades, new earns the same" in said

    def test_keep(self):
        """Where the rule in use is best, the advice is to keep it."""
        assert sentence([rule("old"), rule("new", 0.5, 90)], current=0).startswith("Recommended: keep old")

    def test_lead_if_nobody_shades(self):
        """A lead in revenue that turns round if each alone shades is told so."""
        said = sentence([rule("a", 0.01, 120, 80), rule("b", 0.0, 100, 100)])
        assert said.startswith("Recommended: a, because of the 2 rules that meet every requirement")
        assert "20.00 EUR ahead of b" in said or "20 EUR ahead of b" in said
        assert "if each alone shades, b earns more, 100 EUR" in said

    def test_tie(self):
        """Rules that the evidence cannot separate are named together, with both revenues."""
        said = sentence([rule("a", revenue=number(100.0, 3.0)), rule("b", revenue=number(104.0, 3.0))], current=0)
        assert said.startswith("No single recommendation: the evidence cannot separate b and a by revenue")
        assert "nothing here speaks for a change from a" in said

    def test_equal(self):
        """Rules that come out the same are called equal, not uncertain."""
        said = sentence([rule("a"), rule("b", 0.02)], objective="shaded_revenue")
        assert "a and b come out equal by shaded_revenue, 90 EUR" in said
        assert "a has the smaller worst_gain" in said

    def test_infinite(self):
        """An infinite mean is named as the reason why rules cannot be ranked, not as an amount within its error."""
        endless = number(math.inf, math.inf, "infinite")
        said = sentence([rule("finite"), rule("endless", revenue=endless)])
        assert "finite and endless cannot be ranked by revenue, whose mean is infinite under endless" in said
        assert "endless earns an infinite mean if nobody shades, 90 EUR if each alone shades" in said
        assert "within its error" not in said

    def test_none(self):
        """Where no rule meets the requirements, the nearest is named with what it misses."""
        said = sentence([rule("a", 0.5), rule("b", 0.06)])
        assert "no rule meets every requirement; b comes nearest" in said
        assert "0.06000 where worst_gain at most 0.05 is required" in said

    def test_unsure(self):
        """Where it cannot be told whether a rule meets a requirement, that is what is said."""
        said = sentence([rule("a", number(0.05, 0.01)), rule("b", 0.5)])
        assert "no rule is known to meet every requirement; a may, but worst_gain at most 0.05 (0.05)" in said

    @pytest.mark.parametrize("objective", ["revenue", "shaded_revenue", "efficiency"])
    @pytest.mark.parametrize("gains", [(0.0, 0.0), (0.5, 0.0), (0.5, 0.5)])
    def test_never_one_revenue_alone(self, objective, gains):
        """Revenue if nobody shades is never shown without revenue if each alone shades."""
        rules = [rule("a", gains[0], 120, 80, 0.99), rule("b", gains[1], 100, 100, 0.98)]
        said = sentence(rules, objective=objective)
        assert "if nobody shades" in said
        assert said.count("if nobody shades") <= said.count("if each alone shades")


def made_up(gains):
    """Stand in for the engine with gains by the number of bidders."""

    def evaluate_sizes(markets, *_: object, **__: object) -> list[Estimate]:
        return [Estimate(gains(market.bidders), 0.0, "exact") for market in markets]

    return evaluate_sizes


class TestSizes:
    def search(self, name="pay-as-bid", family="uniform", bound=GAIN, units=2, start=10, **settings: object):
        """Search in a market with a fixed number of units."""
        values = discovery.family_class(family)(**settings)
        file = dataclasses.replace(read_market(None), turnout=1.0, supply=SupplyChoice("units", units))
        return size_that_meets(file, values, discovery.mechanism_class(name)(), bound, start)

    def test_uniform(self):
        """With uniform values the gain is k / n, so two units need 40 bidders for a limit of 0.05."""
        assert self.search() == Size("from", 40)

    def test_exponential(self):
        """One unit and exponential values: 0.0503 at 10^8 bidders, so 0.05 is met somewhat beyond."""
        found = self.search(family="exponential", units=1)
        assert found.kind == "from"
        assert 1e8 < found.bidders < 1.2e8

    @pytest.mark.parametrize("least", [11, 12, 20, 21, 37, 1023, 5121, 123_456_789, 10**12])
    def test_to_the_bidder(self, least, monkeypatch):
        """The least size that meets a limit is found to one bidder, wherever it lies."""
        gains = lambda size: 0.04 if size >= least else 0.06  # noqa: E731
        monkeypatch.setattr(growth, "evaluate_sizes", made_up(gains))
        assert self.search() == Size("from", least)

    def test_not_monotone(self, monkeypatch):
        """A limit that is met only for a while is told so, with the size looked at that misses it again."""
        gains = lambda size: 0.04 if 100 <= size < 1000 else 0.06  # noqa: E731
        monkeypatch.setattr(growth, "evaluate_sizes", made_up(gains))
        assert self.search() == Size("once", 100, 1280)

    def test_no_integral(self, monkeypatch):
        """A rule without exact integrals is not searched."""
        monkeypatch.setattr(growth, "evaluate_sizes", lambda *_, **__: None)
        assert self.search() == Size("unknown")

    @pytest.mark.parametrize("start", [10**12, 10**15])
    def test_as_large_as_the_search_goes(self, start):
        """A market beyond the largest size searched is told so; it is no failure."""
        assert self.search(start=start) == Size("unsearched")

    def test_nowhere(self):
        """A Pareto tail keeps the gain at any size, and the search says so."""
        assert self.search(family="pareto", tail_index=0.5) == Size("nowhere")


@pytest.fixture(scope="module")
def logged(tmp_path_factory):
    """Write a small log and the market file that names it; the market keeps a rule that is quick to weigh."""
    folder = tmp_path_factory.mktemp("log")
    bids = np.random.default_rng(5).weibull(1.4, 600) * 30
    rows = "\n".join(f"{bid:.6f}" for bid in bids)
    (folder / "bids.csv").write_text("offer\n" + rows + "\n", encoding="utf-8")
    text = """
currency = "EUR"
[bidders]
count = 40
[values]
log = "bids.csv"
bid = "offer"
bids_are = "values"
[supply]
units = 4
[requirements]
worst_gain = { at_most = 0.3 }
[compare]
mechanisms = ["pay-as-bid", "uniform-price"]
"""
    path = folder / "market.toml"
    path.write_text(text, encoding="utf-8")
    return path


@pytest.fixture(scope="module")
def evidence(logged):
    """Gather the evidence of the log once."""
    return gather(read_market(logged))


class TestLogs:
    def test_every_number_carries_the_log(self, evidence):
        """Each finding has the log's error, and money that is not nought a positive one."""
        for candidate in evidence.sizes[0].candidates:
            for measure in SHOWN:
                assert candidate.findings[measure].log_error is not None
            assert candidate.findings["revenue"].log_error > 1.0

    def test_same_resamples(self, evidence):
        """Shaded revenue of pay-as-bid and revenue at the first rejected bid are one number on every resample."""
        first, second = evidence.sizes[0].candidates
        gap = difference(first.findings["shaded_revenue"], second.findings["revenue"])
        assert abs(gap.value) + gap.error < 1e-5
        assert first.findings["shaded_revenue"].log_error > 1.0

    def test_report(self, evidence):
        """The report tells the log's size, its threshold and tail, and the errors beside the numbers."""
        text = report(evidence, "table")
        assert "600 bids above 0 in column offer" in text
        assert re.search(r"tail index -?\d\.\d\d ± 0\.\d\d", text)
        assert re.search(r"± \d", text)
        assert "only aggregates of this one are shown" in text

    def test_changes_against_exact(self, logged):
        """Common draws tell how a measure moves from one law to another as the exact engine does."""
        log = read_log(logged.with_name("bids.csv"), bid="offer")
        laws = [fit_log(log).values]
        laws += [fit.values for fit in resampled_fits(log, 4, np.random.default_rng(1))]
        markets = [Market(law, 40, IdenticalUnits(4)) for law in laws]
        payer = discovery.mechanism_class("pay-as-bid")()
        measures = ["worst_gain", "mean_gain", "revenue", "shaded_revenue", "interim_gain"]
        moved = resampled_findings(markets[0], markets[1:], [payer], measures, 0.05, np.random.default_rng(2))
        for measure in measures:
            exact = [evaluate(market, payer, [measure], error=1e-6)[measure].value for market in markets]
            changes = np.array(exact[1:]) - exact[0]
            reach = 0.15 * np.abs(changes).max()
            assert moved[0, measure] == pytest.approx(changes, abs=reach), measure

    @pytest.mark.parametrize(
        ("change", "word"),
        [(("count = 40", "count = 2\nturnout = 1e-6"), "met"), (("count = 40", "count = 40"), "met")],
    )
    def test_nought_by_the_rule(self, logged, change, word, monkeypatch):
        """A gain that is 0 by the rule itself is 0 under every law; money that no draw shows is not known."""
        monkeypatch.setattr("mechbench.choice.evidence._RESAMPLES", 4)
        path = logged.with_name("thin.toml")
        text = logged.read_text(encoding="utf-8").replace(*change)
        path.write_text(text.replace("units = 4", "units = 1"), encoding="utf-8")
        found = gather(read_market(path))
        payer, uniform = found.sizes[0].candidates
        assert verdict(GAIN, uniform.findings["worst_gain"]).word == word
        error = payer.findings["revenue"].log_error
        assert error == math.inf if "turnout" in change[1] else 0 < error < math.inf

    def test_a_reserve_near_the_highest_bids(self, logged):
        """A reserve that some resamples of the log never reach is refused in words that say so."""
        log = read_log(logged.with_name("bids.csv"), bid="offer")
        end = min(fit.values.support[1] for fit in resampled_fits(log, 20, np.random.default_rng(0)))
        assert end < fit_log(log).values.support[1]
        path = logged.with_name("high.toml")
        text = logged.read_text(encoding="utf-8").replace("units = 4", f"units = 4\nreserve = {end}")
        path.write_text(text, encoding="utf-8")
        with pytest.raises(InputError, match="by some resamples of the log nothing"):
            gather(read_market(path))


class TestUnseenChances:
    def test_blur(self, evidence):
        """A chance that nearly every draw sees come true is known to 3 in the draws, not to the last digit."""
        payer, uniform = evidence.sizes[0].candidates
        assert payer.findings["gain_chance"].value > 0.999
        assert payer.findings["gain_chance"].log_error > 1e-3
        assert uniform.findings["gain_chance"].log_error == 0


class TestReport:
    def test_demo(self):
        """The demo names the rule that alone meets its requirements, within 100 columns, with its limits."""
        text = report(gather(read_market(None)), "table")
        assert max(map(len, text.splitlines())) <= 100
        assert "Recommended: uniform-price (price_at first-rejected) in place of pay-as-bid" in text
        for said in ("private values", "common values", "counsel", "newcomers resemble today's"):
            assert said in text
        assert "nan" not in text.replace("nance", "")

    def test_a_rule_without_integrals(self, monkeypatch):
        """A rule that declares no integrals is simulated, to the error of simulations, and shown with it."""
        monkeypatch.setattr(discovery.mechanism_class("pay-as-bid"), "functional", lambda *_: None)
        evidence = gather(read_market(None))
        simulated = evidence.sizes[0].candidates[0].findings["worst_gain"]
        assert (simulated.estimate.method, simulated.estimate.seed) == ("simulated", 0)
        assert abs(simulated.value - 0.48293791) < 2 * simulated.error < 0.01
        text = report(evidence, "table")
        assert "half-width of a simulation" in text
        assert "not searched, as this rule has no exact integral" in text

    def test_infinite(self, tmp_path):
        """A change from an infinite revenue is told in words, and so is a market too large to search."""
        path = Path(tmp_path, "market.toml")
        path.write_text(
            f'[bidders]\ncount = {10**15}\n[values]\nfamily = "pareto"\ntail_index = 1.2\n[supply]\nunits = 2\n'
            '[requirements]\nworst_gain = { at_most = 0.1 }\n[current]\nmechanism = "pay-as-bid"\n'
            '[compare]\nmechanisms = ["uniform-price"]\n',
            encoding="utf-8",
        )
        text = report(gather(read_market(path)), "table")
        changes = text.partition("Change from")[2].partition("Requirements")[0]
        assert re.search(r"\sfrom\s", changes)
        assert "infinite" in changes
        assert "no number" not in text
        assert "worst_gain at most 0.1: not searched, as sizes are searched up to 10^12 bidders" in text

    def test_growth_path(self, tmp_path):
        """A growth path has a block for every size."""
        path = Path(tmp_path, "market.toml")
        path.write_text(
            '[bidders]\ncount = [30, 60]\n[values]\nfamily = "uniform"\n[supply]\nunits_per_bidder = 0.1\n',
            encoding="utf-8",
        )
        text = report(gather(read_market(path)), "markdown")
        assert "## Rules side by side: 30 bidders, 3 units" in text
        assert "## Rules side by side: 60 bidders, 6 units" in text
