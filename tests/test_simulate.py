"""The simulation engine: draws of the top bids, estimates, intervals, and what it refuses."""

from __future__ import annotations

import importlib.util
import pickle
import tracemalloc
from pathlib import Path
from types import ModuleType

import numpy as np
import pytest
from scipy import stats

from mechbench.contract import MEASURES, Floats, IdenticalUnits, InputError, Mechanism, Outcome
from mechbench.discovery import family_class, mechanism_class
from mechbench.engine.simulated import batches
from mechbench.engine.simulated.draws import _one_minus_exp, bids_at, generators, lowest_uniforms, tiers
from mechbench.engine.simulated.intervals import Ratio, chance_half_width, difference_half_width
from mechbench.engine.simulated.simulate import Simulation, simulate
from mechbench.market.market import Market

PAY_AS_BID = mechanism_class("pay-as-bid")()
FIRST_REJECTED = mechanism_class("uniform-price")()
LAST_ACCEPTED = mechanism_class("uniform-price")(price_at="last-accepted")
UNIFORM = family_class("uniform")(low=0.0, high=1.0)
OF_DRAWS = [measure for measure in MEASURES if measure != "interim_gain"]


def _published() -> ModuleType:
    path = Path(__file__).parent / "published" / "simulated_cells.py"
    spec = importlib.util.spec_from_file_location("simulated_cells", path)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    import sys  # noqa: PLC0415 - dataclasses look their module up

    sys.modules["simulated_cells"] = module
    spec.loader.exec_module(module)
    return module


CELLS = _published().CELLS


def _market(cell) -> Market:
    settings = cell.settings or ({"low": 0.0, "high": 1.0} if cell.family == "uniform" else {})
    family = family_class(cell.family)(**settings)
    return Market(family, cell.bidders, IdenticalUnits(cell.units, cell.reserve))


def _mechanism(cell) -> Mechanism:
    return mechanism_class(cell.mechanism)(**({"price_at": cell.price_at} if cell.price_at else {}))


def _z_score(cell, seed: int) -> float:
    found = simulate(
        _market(cell),
        [_mechanism(cell)],
        [cell.measure],
        error=cell.error,
        seed=seed,
        threshold=cell.threshold,
    ).estimate(0, cell.measure)
    assert found.status == "ok"
    return 1.96 * (found.value - cell.value) / found.error


class OutcomeOnly(Mechanism):
    """Another mechanism of which only the outcome is known, and that all the bids may matter."""

    name = "outcome-only"
    title = "for tests"
    serves = frozenset({IdenticalUnits.kind})

    def __init__(self, inner: Mechanism, seen: int | None = None) -> None:
        super().__init__()
        self._inner, self._seen = inner, seen

    def outcome(self, bids: Floats, supply: IdenticalUnits, coins: Floats | None = None) -> Outcome:
        """See the contract."""
        return self._inner.outcome(bids, supply, coins)

    def depth(self, supply: IdenticalUnits) -> int | None:  # noqa: ARG002
        """See the contract."""
        return self._seen


# The draws.


@pytest.mark.parametrize(("bidders", "depth"), [(5, 5), (40, 4), (40, 39)])
def test_top_draws_follow_the_law_of_full_draws(bidders, depth):
    """Each of the smallest uniforms has the same law as in samples of the whole crowd."""
    rng = np.random.default_rng(bidders)
    edges = tiers(depth - 1, bidders, depth)
    drawn = lowest_uniforms([rng], 20_000, bidders, edges)
    full = np.sort(rng.random((20_000, bidders)), axis=1)[:, :depth]
    assert drawn.shape == full.shape
    assert (np.diff(drawn, axis=1) > 0).all()
    gaps = [np.diff(part, axis=1, prepend=0.0) for part in (drawn, full)]
    for one, other in ((drawn, full), gaps):
        p_values = [stats.ks_2samp(one[:, j], other[:, j]).pvalue for j in range(depth)]
        assert min(p_values) > 1e-3 / depth


def test_draws_lose_nothing_in_a_crowd_of_ten_to_the_fifteen():
    """The smallest uniforms, times n, are the first points of a Poisson process, all digits there."""
    bidders = 10**15
    drawn = lowest_uniforms([np.random.default_rng(5)], 20_000, bidders, (4,)) * bidders
    for j in range(4):
        assert stats.kstest(drawn[:, j], stats.gamma(j + 1).cdf).pvalue > 1e-3
    assert len(np.unique(drawn[:, 0])) == 20_000


def test_the_series_meets_expm1():
    """One minus the exponential is right to rounding on both sides of where the series is used."""
    x = -np.sort(np.geomspace(1e-300, 40.0, 30_000))[None, :]
    for mostly_small in (True, False):
        found = x.copy()
        _one_minus_exp(found, mostly_small=mostly_small)
        np.testing.assert_allclose(found, -np.expm1(x), rtol=1e-15)


def test_every_generator_draws_its_own():
    """Generators of other tiers, purposes, seeds and markets draw other numbers."""
    market, other = Market(UNIFORM, 9, IdenticalUnits(2)), Market(UNIFORM, 9, IdenticalUnits(2, 0.1))
    every = [
        rng
        for place, seed, purpose in ((market, 1, 0), (market, 1, 1), (market, 2, 0), (other, 1, 0))
        for rng in generators(place, seed, purpose, 3)
    ]
    assert len({rng.random() for rng in every}) == len(every)


def test_tiers_join_without_a_seam():
    """Draws that run over several generators have the law of those from one."""
    sources = [np.random.default_rng(seed) for seed in (1, 2, 3)]
    edges = tiers(2, 20, 11)
    assert edges == (3, 6, 12)
    drawn = lowest_uniforms(sources, 20_000, 20, edges)
    for j in range(12):
        assert stats.kstest(drawn[:, j], stats.beta(j + 1, 20 - j).cdf).pvalue > 1e-4


def test_turnout_thins_the_crowd():
    """With turnout, the top bids are those of a binomial number of bidders, and the absent bid 0."""
    market = Market(UNIFORM, 12, IdenticalUnits(3), turnout=0.3)
    rng = np.random.default_rng(8)
    drawn = bids_at(market, lowest_uniforms([rng], 40_000, 12, (4,)))
    full = rng.random((40_000, 12)) * (rng.random((40_000, 12)) < 0.3)
    full = -np.sort(-full, axis=1)[:, :4]
    for j in range(4):
        absent = [(part[:, j] == 0).mean() for part in (drawn, full)]
        assert abs(absent[0] - absent[1]) < 5 * np.sqrt(0.5 / 40_000)
        present = [part[part[:, j] > 0, j] for part in (drawn, full)]
        assert stats.ks_2samp(*present).pvalue > 1e-4


# Values.


def test_known_values_are_found_again():
    """Over all cells with a known value the z-scores are those of a standard normal law, as a set."""
    scores = np.array([_z_score(cell, seed) for seed, cell in enumerate(CELLS, start=100)])
    assert stats.kstest(scores, stats.norm.cdf).pvalue > 1e-3
    low, high = stats.chi2.ppf([1e-4, 1 - 1e-4], len(scores))
    assert low < (scores**2).sum() < high


@pytest.mark.long
def test_known_values_are_found_again_over_many_seeds():
    """The z-scores of forty seeds have no mean beyond chance, in any cell."""
    for place, cell in enumerate(CELLS):
        scores = [_z_score(cell, 1000 * place + seed) for seed in range(40)]
        assert abs(np.mean(scores)) * np.sqrt(40) < 4, cell


def test_difference_is_sharper_than_either_alone():
    """On common draws the revenue difference of two rules is known better than each revenue."""
    market = Market(UNIFORM, 20, IdenticalUnits(3))
    found = simulate(market, [PAY_AS_BID, LAST_ACCEPTED], ["revenue"], error=0.001, seed=3)
    apart = found.difference(0, 1, "revenue")
    first, second = found.estimate(0, "revenue"), found.estimate(1, "revenue")
    assert apart.value == pytest.approx(first.value - second.value)
    assert apart.error < 0.7 * np.hypot(first.error, second.error)
    assert abs(apart.value - 3 / 21) < 1.5 * apart.error


def test_searched_deviations_agree_with_closed_forms():
    """A rule known by its outcome alone gets the same gains and rooms, labelled as lower bounds."""
    market = Market(UNIFORM, 6, IdenticalUnits(2, 0.2), turnout=0.8)
    wanted = ["worst_gain", "mean_gain", "gain_chance", "worst_room", "shaded_revenue", "revenue"]
    for rule in (PAY_AS_BID, FIRST_REJECTED, LAST_ACCEPTED):
        bare = OutcomeOnly(rule, 3)
        found = simulate(market, [rule, bare], wanted, error=0.05, seed=1, max_draws=512)
        for measure in wanted:
            closed, searched = found.estimate(0, measure), found.estimate(1, measure)
            assert searched.value == pytest.approx(closed.value, abs=1e-12)
            assert ("lower bound" in searched.status) == (measure != "revenue")


# Reproducibility.


def _fixed(mechanisms: list[Mechanism], measures: list[str] = OF_DRAWS, seed: int = 7) -> Simulation:
    market = Market(family_class("exponential")(scale=3.0), 30, IdenticalUnits(4, 1.0), turnout=0.9)
    return simulate(market, mechanisms, measures, error=0.002, seed=seed, max_draws=4096)


def _all(found: Simulation, i: int) -> list[tuple[float, float, str]]:
    estimates = [found.estimate(i, measure) for measure in found.measures]
    return [(estimate.value, estimate.error, estimate.status) for estimate in estimates]


def test_same_seed_same_bytes():
    """The same seed gives the same numbers to the last bit, another seed gives others."""
    first, again, other = (_fixed([PAY_AS_BID], list(MEASURES), seed) for seed in (7, 7, 8))
    assert _all(first, 0) == _all(again, 0)
    assert first.estimate(0, "revenue").value != other.estimate(0, "revenue").value
    assert first.estimate(0, "revenue").seed == 7


def test_block_size_changes_nothing(monkeypatch):
    """Blocks of any size give the same numbers to the last bit."""
    whole = _all(_fixed([PAY_AS_BID, LAST_ACCEPTED], list(MEASURES)), 1)
    for block in (100, 3333, 10**6):
        monkeypatch.setattr(batches, "_BLOCK", block)
        assert _all(_fixed([PAY_AS_BID, LAST_ACCEPTED], list(MEASURES)), 1) == whole


def test_order_and_company_change_nothing():
    """A mechanism's numbers do not depend on which others are simulated beside it, or how deep they look."""
    alone = _all(_fixed([PAY_AS_BID], ["revenue", "worst_room", "interim_gain"]), 0)
    deep = OutcomeOnly(FIRST_REJECTED)
    together = _fixed([deep, LAST_ACCEPTED, PAY_AS_BID], ["revenue", "worst_room", "interim_gain"])
    assert _all(together, 2) == alone


def test_global_random_state_is_left_alone():
    """Neither draws nor depends on NumPy's global generator."""
    before = pickle.dumps(np.random.get_state())  # noqa: NPY002
    _fixed([PAY_AS_BID], list(MEASURES))
    assert pickle.dumps(np.random.get_state()) == before  # noqa: NPY002


def test_a_rule_that_overwrites_the_bids_is_stopped():
    """Draws are read-only, so that no rule spoils them for the next."""

    class Spoils(OutcomeOnly):
        def outcome(self, bids, supply, coins=None) -> Outcome:
            bids[:, 0] = 0.0
            return super().outcome(bids, supply, coins)

    with pytest.raises(ValueError, match="read-only"):
        _fixed([Spoils(PAY_AS_BID, 5)], ["revenue"])


# Intervals and stopping.

COVERED = (
    # measure, bidders, units, reserve, true value, error, mechanism; all uniform, gain threshold 0.7
    ("worst_gain", 20, 3, 0.0, 0.15, 0.01, PAY_AS_BID),
    ("worst_gain", 2, 1, 0.5, 0.5 - np.log(2) / 3, 0.01, PAY_AS_BID),
    ("efficiency", 2, 1, 0.5, 0.875, 0.01, PAY_AS_BID),
    ("revenue", 2, 1, 0.5, 5 / 12, 0.02, FIRST_REJECTED),
    ("units_unsold", 2, 1, 0.1, 0.01, 0.003, PAY_AS_BID),
    ("gain_chance", 2, 1, 0.0, 0.3, 0.02, PAY_AS_BID),
    ("interim_gain", 2, 1, 0.0, 0.25, 0.02, PAY_AS_BID),
)
RARE = (
    ("no_sale", 3, 1, 0.1, 0.001, 0.003, PAY_AS_BID),
    ("units_unsold", 5, 1, 0.25, 0.25**5, 0.003, PAY_AS_BID),
    ("efficiency", 2, 1, 0.05, 1 - 0.05**3, 0.003, PAY_AS_BID),
)


def _covered(cell, repeats: int) -> float:
    measure, bidders, units, reserve, true, error, mechanism = cell
    market = Market(UNIFORM, bidders, IdenticalUnits(units, reserve))
    inside = 0
    for seed in range(10_000, 10_000 + repeats):
        found = simulate(market, [mechanism], [measure], error=error, seed=seed, threshold=0.7)
        estimate = found.estimate(0, measure)
        assert estimate.status == "ok"
        assert estimate.error > 0
        inside += abs(estimate.value - true) <= estimate.error
    return inside / repeats


@pytest.mark.parametrize("cell", COVERED[:-1], ids=lambda cell: cell[0])
def test_intervals_cover(cell):
    """Over 200 repeats, each stopped by itself, the intervals cover 95 % within binomial bounds."""
    low, high = stats.binom(200, 0.95).ppf([5e-4, 1 - 5e-4]) / 200
    assert low <= _covered(cell, 200) <= high


@pytest.mark.long
@pytest.mark.parametrize("cell", COVERED, ids=lambda cell: cell[0])
def test_intervals_cover_over_a_thousand_repeats(cell):
    """Over 1,000 repeats, each stopped by itself, the intervals cover between 93 % and 97 %."""
    assert 0.93 <= _covered(cell, 1000) <= 0.97


@pytest.mark.parametrize("cell", RARE, ids=lambda cell: cell[0])
def test_intervals_of_rare_events_cover_at_least(cell):
    """What happens in a few draws or in none is covered no less often than said, and never without error."""
    assert _covered(cell, 200) >= stats.binom(200, 0.95).ppf(5e-4) / 200


def test_wilson_interval_as_published():
    """For few events the half-width is the farther end of Wilson's interval, as scipy computes it."""
    for hits, count in ((0, 50), (3, 50), (5, 900), (25, 50), (49, 50), (50, 50)):
        interval = stats.binomtest(hits, count).proportion_ci(0.95, method="wilson")
        farther = max(interval.high - hits / count, hits / count - interval.low)
        assert chance_half_width(hits, count) == pytest.approx(farther, rel=1e-12)


def test_coverage_of_chances_computed():
    """Over every chance the interval covers at least 94.2 %, and at most 96.8 % from 20 events on."""
    count = 4000
    hits = np.arange(count + 1)
    half_widths = np.array([chance_half_width(float(hit), count) for hit in hits])
    for events in (*np.arange(0.5, 20.0, 0.25), *np.arange(20.0, 2000.0, 33.0)):
        covered = np.abs(hits / count - events / count) <= half_widths
        coverage = stats.binom(count, events / count).pmf(hits)[covered].sum()
        assert coverage > 0.942
        if events >= 20:
            assert coverage < 0.968


def test_interval_of_a_plain_mean_is_students():
    """Where nothing is rare, the half-width is that of Student's t."""
    sample = np.random.default_rng(2).exponential(size=400)
    students = stats.t(399).ppf(0.975) * sample.std(ddof=1) / 20
    ratio = Ratio(sample, np.ones(400), 400.0)
    assert ratio.half_width == pytest.approx(students, rel=1e-9)
    nothing = Ratio(np.zeros(400), np.ones(400), 400.0)
    assert difference_half_width(ratio, nothing) == pytest.approx(students, rel=1e-9)


def test_interval_of_a_ratio_is_the_delta_methods():
    """For a ratio the variance is the textbook one, covariance with the denominator included."""
    rng = np.random.default_rng(3)
    under = rng.integers(0, 5, 500).astype(np.float64)
    top = under * rng.random(500)
    ratio = Ratio(top, under, float(under.sum()))
    moments = np.cov(top, under)
    value = top.mean() / under.mean()
    variance = (moments[0, 0] - 2 * value * moments[0, 1] + value**2 * moments[1, 1]) / 500 / under.mean() ** 2
    assert ratio.value == pytest.approx(value, rel=1e-12)
    assert ratio.half_width == pytest.approx(stats.t(499).ppf(0.975) * np.sqrt(variance), rel=1e-9)


def test_never_seen_is_not_without_error():
    """A share that is 0 in every draw has an error that falls with the draws; so has a difference of 0."""
    market = Market(UNIFORM, 9, IdenticalUnits(2))
    errors = []
    for most in (64, 1024):
        found = simulate(market, [FIRST_REJECTED] * 2, list(MEASURES), error=1e-9, seed=1, max_draws=most)
        for measure in ("worst_gain", "gain_chance", "interim_gain", "no_sale", "price_spread"):
            estimate = found.estimate(0, measure)
            assert estimate.value == 0
            assert estimate.error > 0.5 / most
            assert found.difference(0, 1, measure).error > 0.5 / most
        errors.append(found.estimate(0, "worst_gain").error)
        assert found.estimate(0, "efficiency").value == 1
        assert found.estimate(0, "efficiency").error > 0.5 / most
    assert errors[1] < errors[0] / 10


def test_stops_at_the_error_or_says_so():
    """The error asked for is met, or the most draws are made and the status says that it was not."""
    market = Market(UNIFORM, 20, IdenticalUnits(3))
    loose = simulate(market, [PAY_AS_BID], ["worst_gain", "revenue"], error=0.01, seed=1)
    assert loose.estimate(0, "worst_gain").error <= 0.01
    assert loose.estimate(0, "revenue").error <= 0.01 * loose.estimate(0, "revenue").value
    tight = simulate(market, [PAY_AS_BID], ["worst_gain"], error=1e-6, seed=1, max_draws=5000)
    assert tight.draws["worst_gain"] == 4096
    assert tight.estimate(0, "worst_gain").status == "error not reached"


@pytest.mark.parametrize(
    ("tail_index", "measure", "mechanism", "word"),
    [
        (0.2, "revenue", PAY_AS_BID, ""),
        (0.4, "revenue", PAY_AS_BID, "heavy tail"),
        (0.6, "revenue", PAY_AS_BID, "infinite variance"),
        (1.2, "revenue", PAY_AS_BID, "infinite"),
        (1.2, "efficiency", PAY_AS_BID, "infinite"),
        (0.6, "revenue", FIRST_REJECTED, ""),
        (1.2, "revenue", FIRST_REJECTED, "heavy tail"),
        (2.2, "shaded_revenue", PAY_AS_BID, "infinite variance"),
        (3.2, "revenue", LAST_ACCEPTED, "infinite"),
        (3.2, "worst_gain", PAY_AS_BID, ""),
    ],
)
def test_heavy_tails_say_what_no_number_can(tail_index, measure, mechanism, word):
    """What has no mean is infinite, what has no variance says so, by the bids that the amount depends on."""
    market = Market(family_class("pareto")(tail_index=tail_index, scale=2.0), 50, IdenticalUnits(3))
    found = simulate(market, [mechanism], [measure], error=0.9, seed=1, max_draws=2048)
    estimate = found.estimate(0, measure)
    assert estimate.status.startswith(word or "ok")
    if word == "infinite":
        assert not np.isfinite(estimate.value)
        assert found.difference(0, 0, measure).status == "infinite"
    else:
        assert np.isfinite(estimate.value)


def test_nothing_sold_is_said():
    """Where no draw sells, a measure conditional on a sale has no value, money no interval, and both say why."""
    market = Market(UNIFORM, 2, IdenticalUnits(1, 1 - 1e-12))
    measures = ["worst_gain", "no_sale", "revenue"]
    found = simulate(market, [PAY_AS_BID], measures, error=0.01, seed=1, max_draws=256)
    assert np.isnan(found.estimate(0, "worst_gain").value)
    assert found.estimate(0, "worst_gain").status == "nothing was sold in any draw"
    assert found.estimate(0, "no_sale").value == 1
    money = found.estimate(0, "revenue")
    assert (money.value, money.error, money.status) == (0, np.inf, "no money in any draw")


# Bounds and bad input.


@pytest.mark.parametrize(("bidders", "units"), [(10**9, 200_000), (10**15, 1)])
def test_memory_stays_bounded(bidders, units):
    """A cell never holds more than 256 MiB."""
    tracemalloc.start()
    market = Market(UNIFORM, bidders, IdenticalUnits(units))
    simulate(market, [PAY_AS_BID, LAST_ACCEPTED], OF_DRAWS, error=0.5, seed=1, max_draws=64)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < 256 * 2**20


@pytest.mark.long
def test_memory_stays_bounded_at_the_deepest_draw():
    """Nor does a cell whose draws hold as many bids as are accepted."""
    test_memory_stays_bounded(10**9, 1_999_999)


def test_progress_is_told():
    """The callback sees the draws rise to the number made."""
    told: list[int] = []
    market = Market(UNIFORM, 20, IdenticalUnits(3))
    found = simulate(market, [PAY_AS_BID], ["revenue"], error=1e-9, seed=1, max_draws=2048, progress=told.append)
    assert told == sorted(told)
    assert told[-1] == found.draws["revenue"] == 2048


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"error": 0.0}, "error is 0.0"),
        ({"error": float("nan")}, "error is nan"),
        ({"seed": -1}, "seed is -1"),
        ({"threshold": 1.0}, "threshold is 1.0"),
        ({"max_draws": 63}, "max_draws is 63"),
        ({"measures": ["profit"]}, "no measure 'profit'"),
        ({"measures": []}, "measures is 0"),
        ({"mechanisms": []}, "mechanisms is 0"),
    ],
)
def test_bad_arguments_are_refused(change, words):
    """Each bad argument gives one line that says what was found and what is accepted."""
    given = {"mechanisms": [PAY_AS_BID], "measures": ["revenue"], "error": 0.1, "seed": 1} | change
    with pytest.raises(InputError, match=words) as refused:
        simulate(Market(UNIFORM, 5, IdenticalUnits(1)), **given)
    assert "accepted" in str(refused.value)
    assert "\n" not in str(refused.value)


@pytest.mark.parametrize(
    ("mechanism", "bidders", "units", "words"),
    [
        (OutcomeOnly(PAY_AS_BID), 10**9, 3, "looks at all the bids"),
        (PAY_AS_BID, 10**9, 10**8, "down to the first rejected"),
        (OutcomeOnly(PAY_AS_BID), 10**3, 3, "a search over 1000 bids"),
    ],
)
def test_draws_too_large_are_refused(mechanism, bidders, units, words):
    """A draw that cannot be held or searched is refused in one line."""
    market = Market(UNIFORM, bidders, IdenticalUnits(units))
    with pytest.raises(InputError, match=words):
        simulate(market, [mechanism], ["worst_gain"], error=0.1, seed=1, max_draws=64)


def test_a_measure_not_asked_for_is_refused():
    """Reading a measure that was not simulated names those that were."""
    found = simulate(Market(UNIFORM, 5, IdenticalUnits(1)), [PAY_AS_BID], ["revenue"], error=0.5, seed=1)
    with pytest.raises(InputError, match="accepted: revenue"):
        found.estimate(0, "welfare")


def test_a_mechanism_for_another_supply_is_refused():
    """A mechanism that does not serve the supply is refused by name."""

    class Elsewhere(OutcomeOnly):
        serves = frozenset({"ranked slots"})

    market = Market(UNIFORM, 5, IdenticalUnits(1))
    with pytest.raises(InputError, match="serves: ranked slots"):
        simulate(market, [Elsewhere(PAY_AS_BID)], ["revenue"], error=0.5, seed=1)
