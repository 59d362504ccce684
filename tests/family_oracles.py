"""Families in many digits: the definitions written again with mpmath, independently of the code under test.

Every family gives its two tails and its density by the defining formula. The closed families give quantile
and shortfall by formula, in enough digits that 1 minus almost 1 is harmless; those of the others are found by
Newton's method on the definition, from the end that is near.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import mpmath as mp

DIGITS = 60
CLOSED_DIGITS = 700
LEAST_START = 1e-300

Number = mp.mpf
Function = Callable[[Number], Number]


@dataclass(frozen=True)
class Law:
    """Both tails and the density, functions of the value; `quantile` where there is a formula."""

    above: Function
    below: Function
    density: Function
    high: Number = mp.inf
    quantile: Function | None = None


def uniform(low: Number, high: Number) -> Law:
    """Law of the uniform family."""
    width = high - low
    return Law(
        lambda x: (high - x) / width,
        lambda x: (x - low) / width,
        lambda _: 1 / width,
        high,
        lambda s: high - width * s,
    )


def power(exponent: Number, high: Number) -> Law:
    """Law of the power family."""
    return Law(
        lambda x: 1 - (x / high) ** exponent,
        lambda x: (x / high) ** exponent,
        lambda x: exponent / high * (x / high) ** (exponent - 1),
        high,
        lambda s: high * (1 - s) ** (1 / exponent),
    )


def exponential(scale: Number) -> Law:
    """Law of the exponential family."""
    return weibull(mp.mpf(1), scale)


def weibull(shape: Number, scale: Number) -> Law:
    """Law of the Weibull family."""
    return Law(
        lambda x: mp.exp(-((x / scale) ** shape)),
        lambda x: -mp.expm1(-((x / scale) ** shape)),
        lambda x: shape / scale * (x / scale) ** (shape - 1) * mp.exp(-((x / scale) ** shape)),
        quantile=lambda s: scale * (-mp.log(s)) ** (1 / shape),
    )


def pareto(tail_index: Number, scale: Number) -> Law:
    """Law of the Pareto family."""
    return Law(
        lambda x: (x / scale) ** (-1 / tail_index),
        lambda x: 1 - (x / scale) ** (-1 / tail_index),
        lambda x: (x / scale) ** (-1 / tail_index) / (tail_index * x),
        quantile=lambda s: scale * s**-tail_index,
    )


def generalised_pareto(tail_index: Number, scale: Number) -> Law:
    """Law of the generalised Pareto family."""
    if tail_index == 0:
        return exponential(scale)
    return Law(
        lambda x: (1 + tail_index * x / scale) ** (-1 / tail_index),
        lambda x: 1 - (1 + tail_index * x / scale) ** (-1 / tail_index),
        lambda x: (1 + tail_index * x / scale) ** (-1 / tail_index - 1) / scale,
        -scale / tail_index if tail_index < 0 else mp.inf,
        lambda s: scale * (s**-tail_index - 1) / tail_index,
    )


def half_normal(scale: Number) -> Law:
    """Law of the half-normal family."""
    unit = scale * mp.sqrt(2)
    return Law(
        lambda x: mp.erfc(x / unit),
        lambda x: mp.erf(x / unit),
        lambda x: 2 / (mp.sqrt(mp.pi) * unit) * mp.exp(-((x / unit) ** 2)),
    )


def lognormal(sigma: Number, scale: Number) -> Law:
    """Law of the lognormal family."""
    return Law(
        lambda x: mp.erfc(mp.log(x / scale) / sigma / mp.sqrt(2)) / 2,
        lambda x: mp.erfc(-mp.log(x / scale) / sigma / mp.sqrt(2)) / 2,
        lambda x: mp.npdf(mp.log(x / scale), 0, sigma) / x,
    )


def gamma(shape: Number, scale: Number) -> Law:
    """Law of the gamma family."""
    return Law(
        lambda x: mp.gammainc(shape, x / scale, mp.inf, regularized=True),
        lambda x: mp.gammainc(shape, 0, x / scale, regularized=True),
        lambda x: mp.exp((shape - 1) * mp.log(x / scale) - x / scale - mp.loggamma(shape)) / scale,
    )


def beta(a: Number, b: Number, high: Number) -> Law:
    """Law of the beta family."""
    return Law(
        lambda x: incomplete_beta(b, a, 1 - x / high),
        lambda x: incomplete_beta(a, b, x / high),
        lambda x: (x / high) ** (a - 1) * (1 - x / high) ** (b - 1) / mp.beta(a, b) / high,
        high,
    )


LAWS: dict[str, Callable[..., Law]] = {
    "uniform": uniform,
    "power": power,
    "exponential": exponential,
    "weibull": weibull,
    "pareto": pareto,
    "generalised-pareto": generalised_pareto,
    "half-normal": half_normal,
    "lognormal": lognormal,
    "gamma": gamma,
    "beta": beta,
}


def law(name: str, settings: dict[str, float]) -> Law:
    """Return the law of a family with these settings."""
    return LAWS[name](**{key: mp.mpf(value) for key, value in settings.items()})


def incomplete_beta(a: Number, b: Number, x: Number) -> Number:
    """``I_x(a, b)`` by its series of positive terms (DLMF 8.17.8), or its mirror's beyond the mean."""
    if x > a / (a + b):
        return 1 - incomplete_beta(b, a, 1 - x)
    whole = mp.exp(a * mp.log(x) + b * mp.log(1 - x)) / (a * mp.beta(a, b))
    return whole * mp.hyp2f1(a + b, 1, a + 1, x)


def newton(target: Number, start: Number, reach: Function, slope: Function) -> Number:
    """Solve ``reach(x) = target`` for x > 0, in logarithms, from a start that is nearly right."""
    x = start
    for _ in range(20):
        reached = reach(x)
        step = mp.log(target / reached) * reached / (slope(x) * x)
        x *= mp.exp(step)
        if abs(step) < mp.mpf(10) ** (-DIGITS // 2):
            return x
    msg = f"no convergence from {start}"
    raise ArithmeticError(msg)


def beta_newton(target: Number, start: float, a: Number, b: Number) -> Number:
    """Solve ``I_x(a, b) = target``; from the leading term where x is beyond the floats."""
    whole = mp.beta(a, b)
    return newton(
        target,
        mp.mpf(start) if start > LEAST_START else (target * a * whole) ** (1 / a),
        lambda x: incomplete_beta(a, b, x),
        lambda x: x ** (a - 1) * (1 - x) ** (b - 1) / whole,
    )


def quantile(
    name: str, settings: dict[str, float], s: Number, start: float, start_shortfall: float
) -> tuple[Number, Number]:
    """``Q(s)`` and the shortfall (infinite without an upper end), each to full relative digits."""
    form = law(name, settings)
    if form.quantile is not None:
        value = form.quantile(s)
        return value, form.high - value
    with mp.workdps(DIGITS):
        if name == "beta":
            a, b, high = (mp.mpf(settings[key]) for key in ("a", "b", "high"))
            if start_shortfall < start:
                y = beta_newton(s, start_shortfall / settings["high"], b, a)
                return high * (1 - y), high * y
            x = beta_newton(1 - s, start / settings["high"], a, b)
            return high * x, high * (1 - x)
        if s < 0.5:
            return newton(s, mp.mpf(start), form.above, lambda x: -form.density(x)), mp.inf
        return newton(1 - s, mp.mpf(start), form.below, form.density), mp.inf
