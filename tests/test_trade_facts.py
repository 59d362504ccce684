"""Published order statistics through the engine, and facts of the trade as convergence over the bidders."""

from __future__ import annotations

import math
from itertools import pairwise

import mpmath as mp
import numpy as np
import pytest
from published.order_statistics import EXPONENTIAL_ONE_UNIT, NORMAL_OF_TEN, PATH_LIMITS
from scipy import special, stats

from mechbench.contract import Distribution, Floats, IdenticalUnits
from mechbench.discovery import family_class, mechanism_class
from mechbench.engine.evaluate import evaluate
from mechbench.market.market import Market

OWN = mechanism_class("pay-as-bid")()
LOWEST = mechanism_class("uniform-price")(price_at="last-accepted")


def exactly(values: Distribution, bidders: int, units: int, name: str = "worst_gain", rule: object = OWN) -> float:
    """Compute one measure exactly, without reserve or absent bidders."""
    market = Market(values, bidders, IdenticalUnits(units))
    return evaluate(market, rule, [name], method="exact")[name].value


class FarNormal(Distribution):
    """Normal values around 40 with deviation 1: the chance of one below 0 is less than 1e-340."""

    name = "far-normal"
    title = "for tests"
    middle = 40.0

    @property
    def support(self) -> tuple[float, float]:
        """From 0, as far as floats can tell."""
        return 0.0, math.inf

    def upper_quantile(self, s: Floats) -> Floats:
        """Minus the standard normal quantile."""
        return self.middle - special.ndtri(s)

    def survival(self, x: Floats) -> Floats:
        """Return the normal survival function."""
        return special.ndtr(self.middle - np.asarray(x))

    def density(self, x: Floats) -> Floats:
        """Return the normal density."""
        return np.exp(-0.5 * (np.asarray(x) - self.middle) ** 2) / math.sqrt(2.0 * math.pi)


@pytest.mark.parametrize("rank", range(1, 6))
def test_normal_order_statistics(rank: int):
    """Ten normal values have the published expected order statistics, by the lowest accepted bid and by mpmath."""
    published = NORMAL_OF_TEN[rank - 1]

    def density(x: mp.mpf) -> mp.mpf:
        return rank * mp.binomial(10, rank) * mp.ncdf(-x) ** (rank - 1) * mp.ncdf(x) ** (10 - rank) * mp.npdf(x)

    second = mp.quad(lambda x: x * density(x), [-9, -3, 0, 3, 9])
    found = exactly(FarNormal(), 10, rank, "revenue", LOWEST) / rank - FarNormal.middle
    assert float(second) == pytest.approx(published, abs=6e-6)
    assert found == pytest.approx(float(second), abs=1e-7)


@pytest.mark.parametrize("bidders", [2, 10, 1_000])
@pytest.mark.parametrize("family", ["uniform", "exponential", "half-normal", "lognormal", "gamma"])
def test_scipy_order_statistics(family: str, bidders: int):
    """The mean of the highest and of the second-highest value are those of scipy.stats.order_statistic, to 1e-6."""
    settings, law = {
        "uniform": ({"low": 0.0, "high": 1.0}, stats.uniform),
        "exponential": ({"scale": 1.0}, stats.expon),
        "half-normal": ({"scale": 1.0}, stats.halfnorm),
        "lognormal": ({"sigma": 0.8, "scale": 1.0}, None),
        "gamma": ({"shape": 2.5, "scale": 1.0}, None),
    }[family]
    values = family_class(family)(**settings)
    if family == "lognormal":
        base = stats.make_distribution(stats.lognorm)(s=0.8)
    elif family == "gamma":
        base = stats.make_distribution(stats.gamma)(a=2.5)
    else:
        base = stats.make_distribution(law)()
    for rank, name in ((1, "welfare"), (2, "shaded_revenue")):
        expected = stats.order_statistic(base, r=bidders + 1 - rank, n=bidders).mean()
        assert exactly(values, bidders, 1, name) == pytest.approx(float(expected), rel=1e-6)


@pytest.mark.parametrize("bidders", [1_000, 10**8])
def test_one_unit_of_exponential_values(bidders: int):
    """Truthful in the limit, yet 0.122 at 1,000 bidders and 0.0503 at 10^8: the published digits, and mpmath's."""
    published, half_digit = EXPONENTIAL_ONE_UNIT[bidders]
    with mp.workdps(30):

        def integrand(b: mp.mpf) -> mp.mpf:
            law = bidders * (bidders - 1) * mp.exp((bidders - 2) * mp.log1p(-mp.exp(-b)) - 2 * b)
            return (1 - b * mp.exp(b) * mp.e1(b)) * law

        middle = mp.log(bidders)
        truth = mp.quad(
            integrand, [max(mp.mpf(0), middle - 6), middle - 2, middle, middle + 4, middle + 12, middle + 45]
        )
    found = exactly(family_class("exponential")(scale=1.0), bidders, 1)
    assert found == pytest.approx(float(truth), abs=1e-9)
    assert found == pytest.approx(published, abs=half_digit)


SIZES = (10**3, 10**6, 10**9, 10**12)


@pytest.mark.parametrize(
    ("family", "settings"),
    [
        ("uniform", {"low": 0.0, "high": 1.0}),
        ("beta", {"a": 2.0, "b": 3.0, "high": 1.0}),
        ("exponential", {"scale": 1.0}),
        ("half-normal", {"scale": 1.0}),
        ("weibull", {"shape": 2.0, "scale": 1.0}),
        ("lognormal", {"sigma": 0.5, "scale": 1.0}),
    ],
)
def test_a_fixed_number_of_units_leaves_no_room_in_the_limit(family: str, settings: dict[str, float]):
    """Common practice, no source: with five units the gain falls towards 0 for bounded, MHR and lognormal values."""
    gains = [exactly(family_class(family)(**settings), n, 5) for n in SIZES]
    assert all(later < earlier for earlier, later in pairwise(gains))
    assert gains[-1] < 0.6 * gains[0]


@pytest.mark.parametrize("tail_index", [0.2, 0.5])
def test_a_power_tail_keeps_its_room(tail_index: float):
    """Common practice, no source: Pareto values keep the same gain at any size, a generalised Pareto tends to it."""
    limit = 1 - math.gamma(1 + tail_index) * math.gamma(6) / math.gamma(6 + tail_index)
    pareto = family_class("pareto")(tail_index=tail_index, scale=1.0)
    assert [exactly(pareto, n, 5) for n in SIZES] == pytest.approx([limit] * 4, abs=1e-9)
    general = family_class("generalised-pareto")(tail_index=tail_index, scale=1.0)
    gaps = [exactly(general, n, 5) - limit for n in SIZES]
    assert all(0 < later < earlier for earlier, later in pairwise(gaps))
    # the lower end shifts values by scale / xi, which fades like n^-xi
    assert gaps[-1] / gaps[-2] == pytest.approx(1e3**-tail_index, rel=0.1)


@pytest.mark.parametrize("family", sorted(PATH_LIMITS))
def test_sqrt_n_units_may_keep_room(family: str):
    """Common practice, no source: sqrt(n) units leave 1/2 of exponential and 0.29 of half-normal values."""
    _, limit = PATH_LIMITS[family]
    values = family_class(family)(scale=1.0)
    gaps = [abs(exactly(values, n, math.isqrt(n)) - limit) for n in (10**4, 10**6, 10**8, 10**10, 10**12)]
    assert all(later < earlier for earlier, later in pairwise(gaps))
    # the error falls like 1 / log n
    assert gaps[-1] < 0.05


def test_sqrt_n_units_of_bounded_values_leave_no_room():
    """A bounded family loses its room along sqrt(n) units: k / n for uniform values."""
    uniform = family_class("uniform")(low=0.0, high=1.0)
    for n in SIZES:
        assert exactly(uniform, n, math.isqrt(n)) == pytest.approx(math.isqrt(n) / n, rel=1e-9)


@pytest.mark.parametrize("share", [0.1, 0.5, 0.9])
def test_a_share_of_units_keeps_the_gap_to_the_upper_end(share: float):
    """With q n units the gain tends to 1 - Q(q) / upper end, like 1 / n; derived, no source."""
    values = family_class("beta")(a=2.0, b=1.0, high=1.0)
    limit = 1.0 - math.sqrt(1.0 - share)
    gaps = [abs(exactly(values, n, round(share * n)) - limit) for n in SIZES]
    assert gaps[1] < 2e-3 * gaps[0] + 1e-12
    assert gaps[-1] < 1e-9


@pytest.mark.parametrize(
    ("family", "settings"),
    [("uniform", {"low": 0.0, "high": 1.0}), ("exponential", {"scale": 1.0}), ("half-normal", {"scale": 1.0})],
)
@pytest.mark.parametrize("units", [1, 3])
def test_more_bidders_beat_the_best_reserve(family: str, settings: dict[str, float], units: int):
    """Bulow & Klemperer 1996, American Economic Review 86, 180-194: k bidders more earn more than any reserve."""
    values, rejected = family_class(family)(**settings), mechanism_class("uniform-price")()
    n = units + 2
    more = exactly(values, n + units, units, "revenue", rejected)
    for reserve in values.upper_quantile(np.linspace(0.02, 0.98, 25)):
        market = Market(values, n, IdenticalUnits(units, float(reserve)))
        assert evaluate(market, rejected, ["revenue"], method="exact")["revenue"].value < more


@pytest.mark.parametrize(
    ("family", "settings", "truth"),
    [
        # one unit of two bidders and the digits of a gain of 1e-12: closed forms of the ratio near an end
        ("uniform", {"low": 0.0, "high": 1.0}, lambda n: 1 / mp.mpf(n)),
        (
            "power",
            {"exponent": 7.0, "high": 1.0},
            lambda n: 1 - mp.gammaprod([n - 1 + mp.mpf(1) / 7, n], [n - 1, n + mp.mpf(1) / 7]),
        ),
        ("beta", {"a": 1.0, "b": 1.0, "high": 1.0}, lambda n: 1 / mp.mpf(n)),
        ("generalised-pareto", {"tail_index": -1.0, "scale": 1.0}, lambda n: 1 / mp.mpf(n)),
    ],
)
def test_tiny_gains_keep_their_digits(family: str, settings: dict[str, float], truth: object):
    """A worst gain of 1e-12 is right to a relative 1e-9, not lost in 1 minus almost 1."""
    with mp.workdps(60):
        expected = float(truth(10**12))
    assert exactly(family_class(family)(**settings), 10**12, 1) == pytest.approx(expected, rel=1e-9, abs=0)
