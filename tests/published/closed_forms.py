"""Measures that have a closed form, at sizes from 2 bidders to 10^12, in 50 digits.

Every formula is derived from three facts on the order statistics of n independent uniforms (H. A. David and
H. N. Nagaraja, *Order Statistics*, 3rd ed., Wiley 2003, sections 2.1-2.5; from memory, and each fact is checked
against mpmath's quadrature of the joint density in tests/test_two_routes.py): with S_(j) the j-th smallest,

* S_(j) follows Beta(j, n - j + 1);
* given S_(k+1), the k below it are independent and uniform: S_(k)/S_(k+1) ~ Beta(k, 1), S_(1)/S_(k+1) ~ Beta(1, k);
* values of the power family are U^(1/a) and Pareto values S^(-xi), so their ratios are powers of these.

`Cell.truth` evaluates the formula with mpmath, because lgamma in floats has no digits left at n = 10^12.
Tolerance everywhere: 1e-9, absolute for shares and relative for money, the bound that the exact engine promises.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field

import mpmath as mp

__all__ = ["CELLS", "DIGITS", "SIZES", "Cell"]

DIGITS = 50
TOLERANCE = 1e-9

SIZES = (
    (2, 1),
    (3, 1),
    (3, 2),
    (10, 1),
    (10, 5),
    (10, 9),
    (1_000, 1),
    (1_000, 31),
    (1_000, 500),
    (1_000, 999),
    (10**6, 1),
    (10**6, 1_000),
    (10**6, 10**6 - 1),
    (10**9, 10),
    (10**12, 1),
    (10**12, 10**6),
    (10**12, 5 * 10**11),
    (10**12, 10**12 - 1),
)
"""Bidders and units."""

PAY_AS_BID = ("pay-as-bid", {})
LAST_ACCEPTED = ("uniform-price", {"price_at": "last-accepted"})
FIRST_REJECTED = ("uniform-price", {"price_at": "first-rejected"})


@dataclass(frozen=True)
class Cell:
    """One measure of one mechanism in one market, its true value and where that comes from."""

    family: str
    settings: Mapping[str, float]
    mechanism: tuple[str, Mapping[str, str]]
    measure: str
    bidders: int
    units: int
    formula: Callable[[], mp.mpf] = field(repr=False)
    source: str
    reserve: float = 0.0
    turnout: float = 1.0
    threshold: float = 0.05
    tolerance: float = TOLERANCE

    @property
    def truth(self) -> mp.mpf:
        """The value, good to well over 30 digits."""
        with mp.workdps(DIGITS):
            return +self.formula()

    def __str__(self) -> str:
        """Name the cell in a test report."""
        rule = "-".join([self.mechanism[0], *self.mechanism[1].values()])
        shape = ",".join(f"{name}={value:g}" for name, value in self.settings.items())
        rest = f"r{self.reserve:g}-p{self.turnout:g}-t{self.threshold:g}"
        return f"{self.measure}-{rule}-{self.family}({shape})-n{self.bidders}-k{self.units}-{rest}"


def _gamma_ratio(*pairs: tuple[mp.mpf, mp.mpf]) -> mp.mpf:
    """Product of Gamma(a) / Gamma(b)."""
    return mp.exp(mp.fsum(mp.loggamma(a) - mp.loggamma(b) for a, b in pairs))


def _harmonic(top: int, bottom: int) -> mp.mpf:
    """Sum of 1/j for bottom < j <= top."""
    return mp.digamma(top + 1) - mp.digamma(bottom + 1)


# --- uniform values on [0, 1] -------------------------------------------------------------------------------


def _at_most(successes: int, trials: int, chance: mp.mpf) -> mp.mpf:
    """P(Bin(trials, chance) <= successes), term by term; for few successes."""
    return mp.fsum(mp.binomial(trials, j) * chance**j * (1 - chance) ** (trials - j) for j in range(successes + 1))


def _uniform(n: int, k: int) -> Iterator[Cell]:
    def cell(rule: tuple[str, Mapping[str, str]], measure: str, formula: Callable[[], mp.mpf], source: str) -> Cell:
        return Cell("uniform", {"low": 0.0, "high": 1.0}, rule, measure, n, k, formula, source)

    best = "b_(k+1)/b_(1) ~ Beta(n-k, k)"
    yield cell(PAY_AS_BID, "worst_gain", lambda: mp.mpf(k) / n, f"{best}: k/n")
    yield cell(PAY_AS_BID, "worst_room", lambda: mp.mpf(k) / n, f"{best}: k/n")
    yield cell(
        PAY_AS_BID,
        "mean_gain",
        lambda: 1 - mp.mpf(n - k) / k * _harmonic(n, n - k),
        "E[1 + t log t / (1 - t)] over t ~ Beta(n-k, k+1), a derivative of the beta function",
    )
    yield cell(PAY_AS_BID, "price_spread", lambda: mp.mpf(k - 1) / n, "b_(k)/b_(1) ~ Beta(n-k+1, k-1): (k-1)/n")
    yield cell(LAST_ACCEPTED, "worst_gain", lambda: mp.mpf(1) / (n - k + 1), "b_(k+1)/b_(k) ~ Beta(n-k, 1)")
    yield cell(
        LAST_ACCEPTED,
        "mean_gain",
        lambda: (1 + (n - k + 1) * _harmonic(n, n - k + 1)) / (mp.mpf(k) * (n - k + 1)),
        "b_(k+1)/b_(k) ~ Beta(n-k, 1) is independent of what is above b_(k)",
    )
    yield cell(PAY_AS_BID, "revenue", lambda: k - mp.mpf(k) * (k + 1) / (2 * (n + 1)), "E b_(j) = 1 - j/(n+1)")
    yield cell(LAST_ACCEPTED, "revenue", lambda: mp.mpf(k) * (n + 1 - k) / (n + 1), "E b_(k) = 1 - k/(n+1)")
    yield cell(FIRST_REJECTED, "revenue", lambda: mp.mpf(k) * (n - k) / (n + 1), "E b_(k+1) = 1 - (k+1)/(n+1)")
    yield cell(PAY_AS_BID, "shaded_revenue", lambda: mp.mpf(k) * (n - k) / (n + 1), "E b_(k+1) = 1 - (k+1)/(n+1)")


def _uniform_chances(n: int, k: int, level: float) -> Iterator[Cell]:
    settings = {"low": 0.0, "high": 1.0}
    yield Cell(
        "uniform",
        settings,
        PAY_AS_BID,
        "gain_chance",
        n,
        k,
        lambda: _at_most(k - 1, n - 1, mp.mpf(level)),
        "b_(k+1)/b_(1) ~ Beta(n-k, k), whose distribution function is a binomial sum",
        threshold=level,
    )
    yield Cell(
        "uniform",
        settings,
        LAST_ACCEPTED,
        "gain_chance",
        n,
        k,
        lambda: (1 - mp.mpf(level)) ** (n - k),
        "b_(k+1)/b_(k) ~ Beta(n-k, 1)",
        threshold=level,
    )


# --- power values, F(x) = x^a on [0, 1] ---------------------------------------------------------------------


def _power(n: int, k: int, a: float) -> Iterator[Cell]:
    def cell(rule: tuple[str, Mapping[str, str]], measure: str, formula: Callable[[], mp.mpf]) -> Cell:
        source = "ratios are beta to the power 1/a"
        return Cell("power", {"exponent": a, "high": 1.0}, rule, measure, n, k, formula, source)

    def step() -> mp.mpf:
        return 1 / mp.mpf(a)

    yield cell(
        PAY_AS_BID,
        "worst_gain",
        lambda: 1 - _gamma_ratio((n - k + step(), n - k), (mp.mpf(n), n + step())),
    )
    if k > 1:
        yield cell(
            PAY_AS_BID,
            "price_spread",
            lambda: 1 - _gamma_ratio((n - k + 1 + step(), n - k + 1), (mp.mpf(n), n + step())),
        )
    yield cell(LAST_ACCEPTED, "worst_gain", lambda: step() / (n - k + step()))
    yield cell(
        FIRST_REJECTED,
        "revenue",
        lambda: k * _gamma_ratio((n - k + step(), n - k), (mp.mpf(n + 1), n + 1 + step())),
    )
    yield cell(
        LAST_ACCEPTED,
        "revenue",
        lambda: k * _gamma_ratio((n - k + 1 + step(), n - k + 1), (mp.mpf(n + 1), n + 1 + step())),
    )


# --- Pareto values, tail index xi ---------------------------------------------------------------------------


def _pareto(n: int, k: int, tail_index: float) -> Iterator[Cell]:
    def cell(
        rule: tuple[str, Mapping[str, str]], measure: str, formula: Callable[[], mp.mpf], level: float = 0.05
    ) -> Cell:
        source = "ratios are beta to the power xi, the same for every n > k"
        settings = {"tail_index": tail_index, "scale": 1.0}
        return Cell("pareto", settings, rule, measure, n, k, formula, source, threshold=level)

    xi = mp.mpf(tail_index)
    yield cell(PAY_AS_BID, "worst_gain", lambda: 1 - mp.gamma(1 + xi) * _gamma_ratio((mp.mpf(k + 1), k + 1 + xi)))
    yield cell(PAY_AS_BID, "mean_gain", lambda: xi / (1 + xi))
    if k > 1:
        yield cell(PAY_AS_BID, "price_spread", lambda: 1 - mp.gamma(1 + xi) * _gamma_ratio((mp.mpf(k), k + xi)))
    yield cell(LAST_ACCEPTED, "worst_gain", lambda: xi / (k + xi))
    yield cell(LAST_ACCEPTED, "mean_gain", lambda: xi / (k + xi) * (1 + (k - 1) / (1 + xi)) / k)
    for level in (0.05, 0.3):
        # log1p and expm1: at k = 10^12 the complement would need more digits than are carried
        beyond = (1 - mp.mpf(level)) ** (1 / xi)
        yield cell(PAY_AS_BID, "gain_chance", lambda beyond=beyond: -mp.expm1(k * mp.log1p(-beyond)), level)
        yield cell(LAST_ACCEPTED, "gain_chance", lambda beyond=beyond: beyond**k, level)
    if tail_index < 1:
        every = (mp.mpf(n + 1), n + 1 - xi)
        yield cell(PAY_AS_BID, "revenue", lambda: _gamma_ratio((k + 1 - xi, mp.mpf(k)), every) / (1 - xi))
        yield cell(PAY_AS_BID, "shaded_revenue", lambda: _gamma_ratio((k + 1 - xi, mp.mpf(k)), every))
        yield cell(LAST_ACCEPTED, "revenue", lambda: k * _gamma_ratio((k - xi, mp.mpf(k)), every))


# --- exponential values: harmonic numbers -------------------------------------------------------------------


def _exponential_money(n: int, k: int) -> Iterator[Cell]:
    source = "David & Nagaraja 2003, section 2.5: E b_(j) = H_n - H_(j-1) (from memory; second route mpmath)"
    for measure, rule, formula in (
        ("welfare", PAY_AS_BID, lambda: k * (1 + _harmonic(n, k))),
        ("revenue", PAY_AS_BID, lambda: k * (1 + _harmonic(n, k))),
        ("revenue", LAST_ACCEPTED, lambda: k * _harmonic(n, k - 1)),
        ("revenue", FIRST_REJECTED, lambda: k * _harmonic(n, k)),
        ("shaded_revenue", PAY_AS_BID, lambda: k * _harmonic(n, k)),
    ):
        yield Cell("exponential", {"scale": 1.0}, rule, measure, n, k, formula, source)


# --- one unit with a reserve and turnout, uniform values ----------------------------------------------------


def _uniform_with_reserve(n: int, r: float, p: float) -> Iterator[Cell]:
    """One unit; the best bid has distribution function (1 - p + p x)^n and the second follows given it."""

    def none() -> mp.mpf:
        return (1 - mp.mpf(p) * (1 - mp.mpf(r))) ** n

    def most(from_value: mp.mpf) -> mp.mpf:
        """E[b_(1); b_(1) >= a], by parts."""
        stay = 1 - mp.mpf(p) + mp.mpf(p) * from_value
        return 1 - from_value * stay**n - (1 - stay ** (n + 1)) / (mp.mpf(p) * (n + 1))

    source = "Krishna, Auction Theory, 2nd ed. 2010, section 2.5 (law of the highest value), by parts"
    settings = {"low": 0.0, "high": 1.0}
    for measure, formula in (
        ("no_sale", none),
        ("units_unsold", none),
        ("welfare", lambda: most(mp.mpf(r))),
        ("efficiency", lambda: most(mp.mpf(r)) / most(mp.mpf(0))),
    ):
        yield Cell("uniform", settings, PAY_AS_BID, measure, n, 1, formula, source, reserve=r, turnout=p)
    if p == 1 and r > 0:
        formula = lambda: 1 / mp.mpf(n) + mp.mpf(r) ** n * mp.log(r) / (1 - mp.mpf(r) ** n)  # noqa: E731
        for rule in (PAY_AS_BID, LAST_ACCEPTED):
            source = "derived: 1/n + r^n log r / (1 - r^n), the mean of 1 - max(b_(2), r)/b_(1) given a sale"
            yield Cell("uniform", settings, rule, "worst_gain", n, 1, formula, source, reserve=r)


# --- interim gains against truthful rivals, one unit --------------------------------------------------------


def _interim(n: int, a: float) -> Iterator[Cell]:
    """Best response ``b = v N / (N + 1)`` with N = a (n - 1), so the gain over v G(v) is N^N / (N+1)^(N+1)."""
    rivals = mp.mpf(a) * (n - 1)
    source = "Krishna 2010, section 2.3, b = v (n-1)/n for uniform values; F = x^a by the same first-order condition"
    for rule in (PAY_AS_BID, LAST_ACCEPTED):
        settings = {"exponent": a, "high": 1.0}
        yield Cell(
            "power",
            settings,
            rule,
            "interim_gain",
            n,
            1,
            lambda: mp.exp(rivals * mp.log(rivals / (rivals + 1))) / (rivals + 1),
            source,
        )


def _interim_with_reserve(n: int, r: float) -> Cell:
    """Uniform values, one unit: the best response is ``max(v (n - 1) / n, r)``."""

    def formula() -> mp.mpf:
        reserve, turn = mp.mpf(r), min(mp.mpf(1), mp.mpf(r) * n / (n - 1))
        at_reserve = n * reserve ** (n - 1) * (turn - reserve - reserve * mp.log(turn / reserve))
        above = (1 - turn**n) / n * (mp.mpf(n - 1) / n) ** (n - 1)
        return (at_reserve + above) / (1 - reserve**n)

    source = "Krishna 2010, section 2.3 (best response) with a reserve, integrated over values"
    settings = {"low": 0.0, "high": 1.0}
    return Cell("uniform", settings, PAY_AS_BID, "interim_gain", n, 1, formula, source, reserve=r)


def _cells() -> Iterator[Cell]:
    for n, k in SIZES:
        yield from _uniform(n, k)
        for a in (0.2, 1.5, 10.0):
            yield from _power(n, k, a)
        for xi in (0.1, 0.5, 0.9, 2.0):
            yield from _pareto(n, k, xi)
        yield from _exponential_money(n, k)
    for (n, k), level in itertools.product([(2, 1), (10, 9), (1_000, 31), (10**6, 20)], (0.0, 0.05, 0.5)):
        yield from _uniform_chances(n, k, level)
    for n, level in ((10**6, 1e-6), (10**12, 1e-12), (10**12, 2e-11)):
        yield from _uniform_chances(n, 1, level)
        yield from _uniform_chances(n, 10, level)
    for n, r, p in itertools.product((2, 5, 100, 10**6), (0.0, 0.5, 0.999), (1.0, 0.7, 1e-6)):
        yield from _uniform_with_reserve(n, r, p)
    for n, a in itertools.product((2, 3, 10, 1_000, 10**6), (0.2, 1.0, 10.0)):
        yield from _interim(n, a)
    for n, r in itertools.product((2, 3, 10), (0.1, 0.5, 0.95)):
        yield _interim_with_reserve(n, r)
    yield Cell(
        "uniform",
        {"low": 0.0, "high": 1.0},
        FIRST_REJECTED,
        "revenue",
        2,
        1,
        lambda: mp.mpf(5) / 12,
        "Myerson 1981, Optimal Auction Design, section 5; Krishna 2010, section 5.2 (from memory; derived: 5/12)",
        reserve=0.5,
    )


with mp.workdps(DIGITS):  # the formulas hold parts that are worked out here
    CELLS = tuple(_cells())
