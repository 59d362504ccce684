"""The empirical family: a consistent law for any settings a fit may give."""

from __future__ import annotations

import itertools
import math
import pickle
from typing import Any

import mpmath as mp
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from mechbench.contract import Distribution, InputError
from mechbench.discovery import family_class

SETTINGS: dict[str, Any] = {
    "tail_index": 0.2,
    "tail_scale": 8.0,
    "threshold": 40.0,
    "tail_share": 0.1,
    "levels": (1.0, 0.95, 0.8, 0.5, 0.25),
    "reciprocal_hazards": (2.0, 9.0, 15.0, 18.0, 12.0),
}
"""A typical fit."""

INDICES = (-1.2, -0.3, 0.0, 1e-9, 0.4, 0.9)


def law(**changes: object) -> Distribution:
    """Return the typical fit with some settings changed."""
    return family_class("empirical")(**{**SETTINGS, **changes})


@st.composite
def laws(draw: st.DrawFn) -> Distribution:
    """Any law that a fit might give: steep and flat pieces, tails of any sign, any currency."""
    steps = draw(st.lists(st.floats(0.02, 1.5), min_size=1, max_size=8))
    starts = np.append(0.0, np.cumsum(steps))
    slopes = np.array(draw(st.lists(st.floats(1e-4, 10.0), min_size=starts.size, max_size=starts.size)))
    least = float(np.sum(np.diff(starts) * (slopes[:-1] + slopes[1:]) / 2))
    scale = draw(st.sampled_from([1e-6, 1.0, 1e9]))
    return family_class("empirical")(
        tail_index=draw(st.floats(-1.5, 0.9)),
        tail_scale=scale * float(slopes[-1]),
        threshold=scale * least * draw(st.floats(1.0 + 1e-9, 3.0)),
        tail_share=math.exp(-starts[-1]),
        levels=tuple(np.exp(-starts[:-1]).tolist()),
        reciprocal_hazards=tuple((scale * slopes[:-1]).tolist()),
    )


@given(laws(), st.lists(st.floats(1e-6, 0.999999), min_size=1, max_size=20))
def test_survival_and_cumulative_invert_the_quantile(family: Distribution, shares: list[float]) -> None:
    """Survival undoes the quantile to 1e-12, but for what one rounding of the value itself moves."""
    s = np.array(shares)
    value = family.upper_quantile(s)
    rounding = 4 * np.finfo(float).eps * value * family.density(np.minimum(value, family.support[1] * (1 - 1e-15)))
    assert (np.abs(family.survival(value) - s) <= 1e-12 * s + rounding).all()
    assert (np.abs(family.cumulative(value) - (1 - s)) <= 1e-12 + rounding).all()
    assert np.allclose(family.lower_quantile(s), family.upper_quantile(1 - s), rtol=1e-9)


@given(laws())
def test_the_quantile_falls_strictly_and_stays_above_0(family: Distribution) -> None:
    """Q falls from the upper end to the lower one, neither below 0 nor flat anywhere."""
    s = np.linspace(0.001, 1.0, 2000)
    value = family.upper_quantile(s)
    assert (np.diff(value) < 0).all()
    assert family.support[0] >= 0
    assert value[-1] == pytest.approx(family.support[0], abs=1e-12 * value[0])
    assert (family.upper_quantile(np.array([1e-300, 1e-30])) <= family.support[1] * (1 + 1e-15)).all()


@given(laws())
def test_density_integrates_to_the_probability_between_two_values(family: Distribution) -> None:
    """The density over each smooth piece integrates to what the survival says lies there."""
    levels = [1.0, *family.knots, family.knots[-1] / 30]
    nodes, weights = np.polynomial.legendre.leggauss(100)
    for high, low in itertools.pairwise(levels):
        ends = family.upper_quantile(np.array([high, low]))
        middle, half = (ends[1] + ends[0]) / 2, (ends[1] - ends[0]) / 2
        there = family.density(middle + half * nodes)
        if there.max() < 10 * there.min():  # a steeper one is too much for a fixed rule; see the next test
            assert half * (weights @ there) == pytest.approx(high - low, rel=1e-6)


@given(laws(), st.floats(0.001, 0.999))
def test_inverse_hazard_is_the_slope_of_the_quantile(family: Distribution, s: float) -> None:
    """``s / density`` and a difference quotient of Q over log s agree with the inverse hazard rate."""
    at = np.array([s])
    inverse = family.inverse_hazard(at)
    value = family.upper_quantile(at)
    assert at / family.density(value) == pytest.approx(inverse, rel=1e-9, abs=1e-9 * float(value[0]))
    step = 1e-5
    rise = family.upper_quantile(at * math.exp(-step)) - family.upper_quantile(at * math.exp(step))
    assert rise / (2 * step) == pytest.approx(inverse, rel=1e-2, abs=1e-9 * float(value[0]) / step)


@pytest.mark.parametrize("index", INDICES)
def test_the_slope_is_continuous_at_every_knot(index: float) -> None:
    """No knot breaks the inverse hazard rate, the threshold included."""
    family = law(tail_index=index)
    for knot in family.knots:
        below, above = family.inverse_hazard(np.array([knot * (1 + 1e-12), knot * (1 - 1e-12)]))
        assert below == pytest.approx(above, rel=1e-9)
    assert family.inverse_hazard(np.array([0.5]))[0] == pytest.approx(18.0)


@pytest.mark.parametrize("index", INDICES)
def test_the_tail_is_generalised_pareto(index: float) -> None:
    """Above the threshold the law is the family `generalised-pareto`, a second route to the same numbers."""
    family = law(tail_index=index)
    tail = family_class("generalised-pareto")(tail_index=index, scale=8.0)
    s = np.array([1e-200, 1e-20, 1e-5, 0.01, 0.0999])
    assert np.allclose(family.upper_quantile(s), 40.0 + tail.upper_quantile(s / 0.1), rtol=1e-12)
    values = 40.0 + np.array([0.1, 1.0, 5.0])
    assert np.allclose(family.survival(values), 0.1 * tail.survival(values - 40.0), rtol=1e-12)
    assert np.allclose(family.density(values), 0.1 * tail.density(values - 40.0), rtol=1e-12)
    assert family.support[1] == pytest.approx(40.0 + tail.support[1])
    assert family.tail_index == index


def exact_quantile(index: float, scale: mp.mpf) -> mp.mpf:
    """Q of the typical fit as a function of E, written afresh: the slope integrated downwards."""
    starts = [-mp.log(mp.mpf(level)) for level in (*SETTINGS["levels"], SETTINGS["tail_share"])]
    slopes = [mp.mpf(slope) for slope in (*SETTINGS["reciprocal_hazards"], SETTINGS["tail_scale"])]
    value = mp.mpf(SETTINGS["threshold"])
    for start, stop, low, high in zip(starts, starts[1:], slopes, slopes[1:], strict=False):
        begin = min(max(scale, start), stop)
        at_begin = low + (high - low) * (begin - start) / (stop - start)
        value -= (stop - begin) * (at_begin + high) / 2
    beyond = max(scale - starts[-1], mp.mpf(0))
    tail = beyond if index == 0 else mp.expm1(mp.mpf(index) * beyond) / mp.mpf(index)
    return value + mp.mpf(SETTINGS["tail_scale"]) * tail


@pytest.mark.parametrize("index", INDICES)
@pytest.mark.parametrize("s", [1.0, 1 - 1e-12, 0.9500001, 0.95, 0.8, 0.3, 0.10000000001, 0.1, 0.09, 1e-3, 1e-200])
def test_relative_drop_keeps_its_digits(index: float, s: float) -> None:
    """Small drops within a piece, across knots and across the threshold keep 1e-12 against mpmath."""
    ratios = np.array([1e-13, 1e-9, 1e-3, 0.1, 3.0, 100.0])
    found = law(tail_index=index).relative_drop(np.array([s]), ratios)
    with mp.workdps(600):
        for ratio, drop in zip(ratios, found, strict=True):
            at = -mp.log(mp.mpf(s))
            low, high = exact_quantile(index, at), exact_quantile(index, at + mp.mpf(float(ratio)))
            assert drop == pytest.approx(float((high - low) / high), rel=1e-12, abs=0)


def test_shortfall_keeps_its_digits() -> None:
    """The distance to a bounded upper end is a power of s, where subtraction shows 0; else infinite."""
    s = np.array([1e-100, 1e-30, 1e-3])
    found = law(tail_index=-0.5).shortfall(s)
    assert np.allclose(found, 16.0 * np.sqrt(s / 0.1), rtol=1e-12, atol=0)
    body = law(tail_index=-0.5)
    at = np.array([0.3, 0.9])
    assert np.allclose(body.shortfall(at), body.support[1] - body.upper_quantile(at), rtol=1e-12)
    assert np.isinf(law().shortfall(s)).all()


def test_the_lower_end_keeps_its_digits() -> None:
    """A body that starts at 0 vanishes like u there, and the cumulative share likewise."""
    drop = 40.0 - law().support[0]
    family = law(threshold=drop)
    u = np.array([1e-200, 1e-20, 1e-10])
    assert family.support[0] == pytest.approx(0.0, abs=1e-12)
    assert np.allclose(family.lower_quantile(u), 2.0 * u, rtol=1e-8, atol=0)
    assert np.allclose(family.cumulative(2.0 * u), u, rtol=1e-8, atol=0)
    assert family.relative_drop(np.array([1.0]), np.array([0.0]))[0] == 0


@pytest.mark.parametrize("index", INDICES)
def test_ends_and_beyond_give_no_warning(index: float) -> None:
    """At s = 1 and the smallest floats, and outside the support, answers are finite and quiet."""
    family = law(tail_index=index)
    s = np.array([1.0, 1e-300, 1e-320, 5e-324])
    assert np.isfinite(family.upper_quantile(s)).all()
    assert np.isfinite(family.relative_drop(s, np.array([700.0]))).all()
    assert family.survival(np.array([-1.0, 0.0])).tolist() == [1.0, 1.0]
    assert family.density(np.array([-1.0, 0.0])).tolist() == [0.0, 0.0]
    if index < 0:
        beyond = np.array([family.support[1], 1e300])
        assert family.survival(beyond).tolist() == [0.0, 0.0]
        assert family.density(beyond).tolist() == [0.0, 0.0]


def test_settings_build_the_law_again() -> None:
    """A pickled copy and one made from the settings are the same law to the last bit."""
    family = law()
    s = np.linspace(0.001, 1.0, 50)
    for copy in (pickle.loads(pickle.dumps(family)), family_class("empirical")(**family.settings)):  # noqa: S301
        assert copy.upper_quantile(s).tobytes() == family.upper_quantile(s).tobytes()
        assert copy.settings == family.settings


@settings(max_examples=20)
@given(st.integers(0, 4))
def test_arrays_of_any_shape_pass(dimensions: int) -> None:
    """Shapes are kept, and the input is left as it was."""
    s = np.linspace(0.01, 0.99, 2**dimensions).reshape((2,) * dimensions)
    before = s.copy()
    family = law()
    for method in (family.upper_quantile, family.lower_quantile, family.inverse_hazard, family.shortfall):
        assert method(s).shape == s.shape
    for method in (family.survival, family.cumulative, family.density):
        assert method(40 * s).shape == s.shape
    assert family.relative_drop(s[..., None], s).shape == np.broadcast_shapes((*s.shape, 1), s.shape)
    assert family.relative_drop(s, 1e-9 * s).shape == s.shape
    assert (s == before).all()


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"tail_index": math.nan}, "tail_index"),
        ({"threshold": 0.0}, "threshold"),
        ({"threshold": 10.0}, "lower end"),
        ({"tail_scale": -1.0}, "reciprocal_hazards"),
        ({"tail_share": 0.3}, "levels"),
        ({"tail_share": 0.0}, "levels"),
        ({"levels": (0.9, 0.8, 0.5, 0.25, 0.2)}, "levels"),
        ({"levels": ()}, "levels"),
        ({"reciprocal_hazards": (1.0,)}, "reciprocal_hazards"),
        ({"reciprocal_hazards": (2.0, 9.0, 0.0, 18.0, 12.0)}, "reciprocal_hazards"),
    ],
)
def test_settings_that_make_no_law_are_refused(changes: dict[str, object], words: str) -> None:
    """Each impossible setting is named in one line, with what is accepted."""
    with pytest.raises(InputError, match=words) as refusal:
        law(**changes)
    assert "accepted" in str(refusal.value)
    assert "\n" not in str(refusal.value)
