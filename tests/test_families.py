"""Families of values: digits against mpmath, laws that any family keeps, bad settings refused."""

from __future__ import annotations

import itertools
import math
import pickle
from collections.abc import Iterator

import mpmath as mp
import numpy as np
import pytest
from family_oracles import CLOSED_DIGITS, DIGITS, LAWS, law, quantile
from hypothesis import given, settings
from hypothesis import strategies as st
from published.families import CHI_SQUARE, F_RATIO, NORMAL

from mechbench.contract import Distribution, Floats, InputError, Parameter
from mechbench.discovery import families, family_class

TAILS = (1e-300, 1e-100, 1e-30, 1e-12, 1e-3, 0.1, 0.5, 0.9, 0.999, 1 - 1e-12)
RATIOS = (1e-13, 1e-6, 0.01, 0.3, 0.49, 0.6, 2.0, 30.0, 700.0)
SCALES = ("scale", "high")
LEAST = 1e-300


def by_hand() -> list[str]:
    """Families that can be given by their settings."""
    return [name for name in families() if not family_class(name).from_log]


def typical(name: str) -> list[Distribution]:
    """One family at every combination of the typical values of its shape; the scale at its first."""
    parameters = family_class(name).parameters
    choices = [p.typical[:1] if p.name in SCALES else p.typical for p in parameters]
    names = [p.name for p in parameters]
    return [family_class(name)(**dict(zip(names, each, strict=True))) for each in itertools.product(*choices)]


EVERY = [pytest.param(family, id=repr(family)) for name in by_hand() for family in typical(name)]
WITH_ORACLE = [each for each in EVERY if each.values[0].name in LAWS]


@pytest.fixture(autouse=True)
def _global_random_state_untouched() -> Iterator[None]:
    """No test of a family may change numpy's global random state."""
    before = np.random.get_state()  # noqa: NPY002
    yield
    after = np.random.get_state()  # noqa: NPY002
    assert before[0] == after[0]
    assert np.array_equal(before[1], after[1])
    assert before[2:] == after[2:]


def bounded(family: Distribution) -> bool:
    """Whether the values have an upper end."""
    return math.isfinite(family.support[1])


def truth(family: Distribution, s: float | mp.mpf) -> tuple[mp.mpf, mp.mpf]:
    """Quantile and shortfall by the oracle, started where the family says."""
    at = np.array([max(float(s), LEAST)])
    shortfall = family.shortfall(at)[0] if bounded(family) else math.inf
    with mp.workdps(CLOSED_DIGITS):
        return quantile(family.name, family.settings, mp.mpf(s), family.upper_quantile(at)[0], shortfall)


def miss(found: float, true: mp.mpf) -> float:
    """Relative error."""
    with mp.workdps(CLOSED_DIGITS):
        return abs(float(mp.mpf(float(found)) / true - 1))


@pytest.mark.parametrize("family", WITH_ORACLE)
def test_upper_quantile_and_shortfall_have_twelve_digits(family: Distribution) -> None:
    """Quantile and shortfall agree with mpmath to 1e-12 from s = 1e-300 to 1 - 1e-12."""
    for s in TAILS:
        value, shortfall = truth(family, s)
        if LEAST < value < 1 / LEAST:
            assert miss(family.upper_quantile(np.array([s]))[0], value) < 1e-12, s
        if bounded(family) and shortfall > LEAST:
            assert miss(family.shortfall(np.array([s]))[0], shortfall) < 1e-12, s


@pytest.mark.parametrize("family", WITH_ORACLE)
def test_lower_quantile_has_twelve_digits(family: Distribution) -> None:
    """The lower quantile agrees with mpmath to 1e-12 wherever it is a float, from u = 1e-300 on."""
    for u in TAILS:
        found = family.lower_quantile(np.array([u]))[0]
        if not LEAST < found < 1 / LEAST:
            continue
        with mp.workdps(CLOSED_DIGITS):
            shortfall = family.shortfall(np.array([1 - u]))[0] if bounded(family) else math.inf
            true, _ = quantile(family.name, family.settings, 1 - mp.mpf(u), found, shortfall)
        assert miss(found, true) < 1e-12, u


@pytest.mark.parametrize("family", WITH_ORACLE)
def test_survival_cumulative_and_density_keep_their_digits(family: Distribution) -> None:
    """Both tails and the density agree with mpmath to 1e-12 times the condition of the argument."""
    form = law(family.name, family.settings)
    for s in TAILS:
        x = float(family.upper_quantile(np.array([s]))[0])
        if not LEAST < x < 1 / LEAST or x >= family.support[1]:
            continue
        at = np.array([x])
        with mp.workdps(CLOSED_DIGITS if form.quantile else DIGITS):
            exact = mp.mpf(x)
            above, below, density = form.above(exact), form.below(exact), form.density(exact)
            condition = 1 + float(exact * density / above)
            left = float(exact / (form.high - exact)) if bounded(family) else 0.0
        if below <= 0 or above <= LEAST or density <= LEAST:
            continue
        assert miss(family.survival(at)[0], above) < 1e-13 * (10 + condition), s
        assert miss(family.cumulative(at)[0], below) < 1e-13 * (10 + float(exact * density / below)), s
        assert miss(family.density(at)[0], density) < 1e-13 * (10 + condition + left), s


@pytest.mark.parametrize("family", WITH_ORACLE)
def test_relative_drop_has_twelve_digits(family: Distribution) -> None:
    """The relative drop agrees with mpmath to 2e-12 for log ratios from 1e-13 to 700."""
    closed = law(family.name, family.settings).quantile is not None
    for s, log_ratio in itertools.product(TAILS, RATIOS):
        with mp.workdps(CLOSED_DIGITS):
            further = mp.mpf(s) * mp.exp(-mp.mpf(log_ratio))
        if further < LEAST and not closed:
            continue
        low, low_shortfall = truth(family, s)
        high, high_shortfall = truth(family, further)
        with mp.workdps(CLOSED_DIGITS):
            gap = low_shortfall - high_shortfall if bounded(family) and low_shortfall < low else high - low
            true = gap / high
        found = family.relative_drop(np.array([s]), np.array([log_ratio]))[0]
        if true > LEAST:
            assert miss(found, true) < 2e-12, (s, log_ratio)


@pytest.mark.parametrize("family", EVERY)
def test_default_relative_drop_serves_any_family(family: Distribution) -> None:
    """The contract's own relative drop agrees with the family's, so that a new family needs none."""
    s = np.array([1e-200, 1e-30, 1e-9, 1e-3, 0.1, 0.5, 0.9, 0.999])[:, None]
    log_ratio = np.array(RATIOS[:-1])
    default = Distribution.relative_drop(family, s, log_ratio)
    own = family.relative_drop(s, log_ratio)
    floats = np.isfinite(family.upper_quantile(s * np.exp(-log_ratio)))
    assert np.allclose(default[floats], own[floats], rtol=1e-11, atol=1e-300)


@pytest.mark.parametrize("family", EVERY)
def test_extreme_tails_give_finite_answers(family: Distribution) -> None:
    """At s = 1, at s = 1e-320 and at a log ratio of 0 or 700 the drop is in [0, 1] and nothing warns."""
    s = np.array([1e-320, 1e-308, 1e-300, 1e-16, 0.5, 1 - 2**-53, 1.0])[None, :, None]
    log_ratio = np.array([[0.0, 1e-13, 0.01, 0.6, 5.0, 700.0]])[:, None, :]
    drop = family.relative_drop(s, log_ratio)
    assert drop.shape == (1, 7, 6)
    assert np.isfinite(drop).all()
    assert (drop >= 0).all()
    assert (drop <= 1).all()
    assert (drop[..., 0] == 0).all()
    assert not np.isnan(family.upper_quantile(s)).any()
    outside = np.array([-1.0, 0.0, 1e308, np.inf])
    for method in (family.survival, family.cumulative, family.density):
        assert not np.isnan(method(outside)).any()
    assert np.isfinite(family.survival(outside)).all()
    assert family.survival(outside)[0] == 1
    assert family.survival(outside)[-1] == 0
    assert family.density(outside)[0] == 0
    assert family.density(outside)[-1] == 0


@pytest.mark.parametrize("family", EVERY)
def test_quantile_falls_and_drop_rises(family: Distribution) -> None:
    """The quantile falls in s within the support, and the relative drop rises in the log ratio."""
    s = np.concatenate([10.0 ** np.arange(-300, -1), np.linspace(0.011, 1.0, 400)])
    value = family.upper_quantile(s)
    value = value[np.isfinite(value)]
    low, high = family.support
    assert (np.diff(value) <= np.spacing(value[1:])).all()
    assert (value >= low).all()
    assert (value <= high).all()
    log_ratio = np.linspace(0.0, 3.0, 301)
    drop = family.relative_drop(np.array([1e-50, 0.01, 0.7, 0.99])[:, None], log_ratio)
    assert (np.diff(drop) >= -1e-12 * drop[:, 1:]).all()


@pytest.mark.parametrize("family", EVERY)
def test_density_is_the_slope_of_the_survival(family: Distribution) -> None:
    """A central difference of the survival gives the density."""
    x = family.upper_quantile(np.array([0.02, 0.1, 0.3, 0.5, 0.7, 0.9, 0.95]))
    x = x[(x > 1e-100) & (x < family.support[1] * (1 - 1e-4))]
    step = 1e-5 * np.minimum(x, family.support[1] - x)
    slope = (family.cumulative(x + step) - family.cumulative(x - step)) / (2 * step)
    assert x.size
    assert np.allclose(slope, family.density(x), rtol=3e-6)


@pytest.mark.parametrize("family", EVERY)
def test_inverse_hazard_is_the_slope_of_the_quantile(family: Distribution) -> None:
    """``s / density(Q(s))`` equals the quantile's fall per unit of log s."""
    s = np.array([1e-12, 1e-3, 0.1, 0.5, 0.9])
    step = 1e-4
    further, nearer = s * np.exp(-step), s * np.exp(step)
    if bounded(family):
        rise = family.shortfall(nearer) - family.shortfall(further)
    else:
        rise = family.upper_quantile(further) - family.upper_quantile(nearer)
    assert np.allclose(rise / (2 * step), family.inverse_hazard(s), rtol=2e-5)


@pytest.mark.parametrize("family", EVERY)
def test_tail_index_is_the_slope_of_the_inverse_hazard(family: Distribution) -> None:
    """Far up, the inverse hazard rate per value (or per shortfall) tends to the tail index (von Mises)."""
    s = np.array([1e-100, 1e-80])
    if bounded(family):
        shortfall = family.shortfall(s)
        if (shortfall > LEAST).all():
            assert np.allclose(family.inverse_hazard(s) / shortfall, -family.tail_index, rtol=0.02)
        return
    hazard, value = family.inverse_hazard(s), family.upper_quantile(s)
    slope = (hazard[0] - hazard[1]) / (value[0] - value[1])
    # The lognormal's slope falls to 0 only like sigma / sqrt(2 log(1 / s)).
    room = 0.02 if family.name != "lognormal" else 1.5 * family.number("sigma") / math.sqrt(2 * 80 * math.log(10))
    assert abs(slope - family.tail_index) < room


def drawn(parameter: Parameter) -> st.SearchStrategy[float]:
    """Draw a setting within the domain, spread over its orders of magnitude."""
    if parameter.name == "tail_index":
        low = 0.05 if parameter.low == 0 else -3.0
        return st.floats(low, 3.0)
    low = max(parameter.low, 0.1)
    high = min(parameter.high, 100.0) if parameter.name != "sigma" else 5.0
    return st.floats(math.log(low), math.log(high)).map(lambda e: min(max(math.exp(e), low), high))


@pytest.mark.parametrize("name", by_hand())
@settings(max_examples=60, deadline=None, derandomize=True)
@given(data=st.data())
def test_survival_undoes_the_quantile(name: str, data: st.DataObject) -> None:
    """Survival at the quantile is s, and cumulative at the lower quantile is u, for drawn settings."""
    parameters = family_class(name).parameters
    chosen = {p.name: data.draw(drawn(p), label=p.name) for p in parameters}
    if "low" in chosen:
        chosen["low"] = chosen["high"] * data.draw(st.floats(0.0, 0.9))
    family = family_class(name)(**chosen)
    s = np.exp(-np.array(data.draw(st.lists(st.floats(0.01, 690.0), min_size=5, max_size=5))))
    value, lower = family.upper_quantile(s), family.lower_quantile(s)
    with np.errstate(divide="ignore", invalid="ignore"):
        upper_condition = value / family.inverse_hazard(s)
    usable = (value > LEAST) & (value < 1 / LEAST) & (upper_condition < 1e10)
    error = np.abs(family.survival(value) / s - 1)
    assert (error <= 1e-12 + 4e-15 * upper_condition)[usable].all()
    usable = (lower > LEAST) & (lower < 1 / LEAST)
    lower, u = lower[usable], s[usable]
    lower_condition = lower * family.density(lower) / u
    error = np.abs(family.cumulative(lower) / u - 1)
    assert (error <= 1e-12 + 4e-15 * lower_condition).all()


@pytest.mark.parametrize("name", by_hand())
def test_a_family_survives_pickling(name: str) -> None:
    """A pickled family gives the same bits and the same text."""
    family = typical(name)[0]
    again = pickle.loads(pickle.dumps(family))  # noqa: S301
    s = np.array(TAILS)
    assert repr(again) == repr(family)
    assert np.array_equal(again.upper_quantile(s), family.upper_quantile(s))


@pytest.mark.parametrize("name", by_hand())
def test_input_arrays_stay_as_they_were(name: str) -> None:
    """No method writes into the arrays it is given."""
    family = typical(name)[0]
    for method in (family.upper_quantile, family.lower_quantile, family.inverse_hazard, family.survival):
        given_array = np.array([1e-30, 0.2, 0.7])
        before = given_array.copy()
        method(given_array)
        assert np.array_equal(given_array, before)


def refused(parameter: Parameter) -> list[object]:
    """List settings that a parameter must refuse."""
    wrong: list[object] = [math.nan, math.inf, -math.inf, "much", None, True, [1.0]]
    if math.isfinite(parameter.low):
        wrong.append(parameter.low - 1)
        if not parameter.low_included:
            wrong.append(parameter.low)
    if math.isfinite(parameter.high):
        wrong.append(parameter.high + 1)
    return wrong


BAD = [
    pytest.param(name, parameter, value, id=f"{name}-{parameter.name}-{value}")
    for name in by_hand()
    for parameter in family_class(name).parameters
    for value in refused(parameter)
]


@pytest.mark.parametrize(("name", "parameter", "value"), BAD)
def test_bad_settings_are_refused_in_one_line(name: str, parameter: Parameter, value: object) -> None:
    """A setting outside its domain is refused; the line names family, parameter, found and accepted."""
    family = family_class(name)
    others = {p.name: p.typical[0] for p in family.parameters if p.name != parameter.name}
    with pytest.raises(InputError) as caught:
        family(**others, **{parameter.name: value})  # type: ignore[arg-type]
    words = str(caught.value)
    for part in (name, parameter.name, repr(value), "accepted"):
        assert part in words
    assert "\n" not in words


@pytest.mark.parametrize("name", by_hand())
def test_unknown_and_missing_settings_are_refused(name: str) -> None:
    """An unknown setting is refused with the known ones listed; a needed one that is missing is asked for."""
    family = family_class(name)
    full = {p.name: p.typical[0] for p in family.parameters}
    with pytest.raises(InputError, match="unknown parameter 'colour'"):
        family(**full, colour=1.0)
    for parameter in family.parameters:
        rest = {key: value for key, value in full.items() if key != parameter.name}
        if parameter.default is None:
            with pytest.raises(InputError, match=f"{parameter.name} is missing"):
                family(**rest)
        else:
            assert family(**rest).settings[parameter.name] == parameter.default


def test_uniform_ends_must_be_in_order() -> None:
    """A uniform family whose low end is not below its high end is refused."""
    with pytest.raises(InputError, match="family uniform: low is 7 and high is 3; accepted is low below high"):
        family_class("uniform")(low=7, high=3)


def outside() -> dict[str, tuple[Distribution, object]]:
    """Every family beside its scipy.stats law, at moderate settings."""
    from scipy import stats  # noqa: PLC0415 - a second to import, for this test alone

    settings_and_laws = {
        "uniform": ({"low": 5, "high": 40}, stats.uniform(5, 35)),
        "power": ({"exponent": 2.5, "high": 40}, stats.powerlaw(2.5, scale=40)),
        "beta": ({"a": 2, "b": 3.5, "high": 40}, stats.beta(2, 3.5, scale=40)),
        "exponential": ({"scale": 25}, stats.expon(scale=25)),
        "weibull": ({"shape": 1.7, "scale": 25}, stats.weibull_min(1.7, scale=25)),
        "gamma": ({"shape": 3.3, "scale": 8}, stats.gamma(3.3, scale=8)),
        "half-normal": ({"scale": 25}, stats.halfnorm(scale=25)),
        "lognormal": ({"sigma": 0.8, "scale": 23}, stats.lognorm(0.8, scale=23)),
        "pareto": ({"tail_index": 0.4, "scale": 10}, stats.pareto(2.5, scale=10)),
        "generalised-pareto": ({"tail_index": -0.2, "scale": 20}, stats.genpareto(-0.2, scale=20)),
    }
    return {name: (family_class(name)(**chosen), there) for name, (chosen, there) in settings_and_laws.items()}


def test_families_agree_with_scipy_stats() -> None:
    """Quantile, tails and density agree with scipy.stats at moderate probabilities."""
    s: Floats = np.array([1e-6, 0.01, 0.2, 0.5, 0.8, 0.99])
    for name, (family, there) in outside().items():
        x = family.upper_quantile(s)
        assert np.allclose(x, there.isf(s), rtol=1e-9), name
        assert np.allclose(family.survival(x), there.sf(x), rtol=1e-9), name
        assert np.allclose(family.cumulative(x), there.cdf(x), rtol=1e-9), name
        assert np.allclose(family.density(x), there.pdf(x), rtol=1e-9), name


def test_normal_points_are_the_tables() -> None:
    """Half-normal points are the published two-sided points of the normal law."""
    family = family_class("half-normal")(scale=1.0)
    for s, point in NORMAL.items():
        assert abs(family.upper_quantile(np.array([s]))[0] - point) <= 5e-6
        assert abs(float(mp.erfc(mp.mpf(point) / mp.sqrt(2))) - s) < 1e-4 * s


def test_chi_square_points_are_the_tables() -> None:
    """Gamma points are the published points of chi-square."""
    for freedom, point in CHI_SQUARE.items():
        family = family_class("gamma")(shape=freedom / 2, scale=2.0)
        assert abs(family.upper_quantile(np.array([0.05]))[0] - point) <= 0.0005
        assert abs(mp.gammainc(freedom / 2, point / 2, mp.inf, regularized=True) - 0.05) < 1e-4


def test_f_points_are_the_tables() -> None:
    """Beta points are the published points of the F ratio."""
    for (m, n), point in F_RATIO.items():
        family = family_class("beta")(a=m / 2, b=n / 2, high=1.0)
        value = family.upper_quantile(np.array([0.05]))[0]
        shortfall = family.shortfall(np.array([0.05]))[0]
        assert abs(n * value / (m * shortfall) - point) <= 0.0005
        assert abs(mp.betainc(m / 2, n / 2, m * point / (m * point + n), 1, regularized=True) - 0.05) < 1e-4


DECLARED = {
    "uniform": {"low": (0.0, -1), "high": (1.0, 0)},
    "power": {"exponent": (None, 0), "high": (1.0, 0)},
    "beta": {"a": (None, 0.05), "b": (None, 0.05), "high": (1.0, 0)},
    "exponential": {"scale": (1.0, 0)},
    "weibull": {"shape": (None, 0), "scale": (1.0, 0)},
    "gamma": {"shape": (None, 0.01), "scale": (1.0, 0)},
    "half-normal": {"scale": (1.0, 0)},
    "lognormal": {"sigma": (None, 16), "scale": (1.0, 0)},
    "pareto": {"tail_index": (None, 0), "scale": (1.0, 0)},
    "generalised-pareto": {"tail_index": (None, math.inf), "scale": (1.0, 0)},
}
"""The fixed parameters of each family: default, and a value that must be refused."""


@pytest.mark.parametrize("name", sorted(DECLARED))
def test_fixed_parameters_defaults_and_domains(name: str) -> None:
    """Each family has its fixed parameters with their defaults, and refuses what its mathematics forbids."""
    parameters = family_class(name).parameters
    assert {p.name: p.default for p in parameters} == {key: pair[0] for key, pair in DECLARED[name].items()}
    for parameter in parameters:
        with pytest.raises(InputError, match=f"family {name}: {parameter.name} is .*; accepted is"):
            parameter.check(DECLARED[name][parameter.name][1], f"family {name}")
