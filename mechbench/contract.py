"""What a plug-in signs, and all that it imports.

A *family* subclasses `Distribution`: one law of bidders' values. A *mechanism* subclasses `Mechanism`: one
pricing rule. Both declare their parameters with `Parameter`; the constructors here validate them once, so
that everything inside may take them as good. What a mechanism must supply is `Mechanism.outcome`; what a
family must supply is `upper_quantile`, `survival`, `density` and `support`. Everything else has a working
default and exists for speed or for digits.

Conventions used throughout: ``s = P(value > x)`` is the *upper-tail probability*, ``Q(s)`` its quantile, so
that ``Q`` falls in ``s`` and the best of n bidders sits at a tiny ``s``; ``b_(1) >= b_(2) >= ...`` are the
bids in falling order; a bid of 0 never wins.
"""

from __future__ import annotations

import functools
import math
from abc import ABC, abstractmethod
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import ClassVar, Literal, Protocol

import numpy as np
from numpy.typing import NDArray

__all__ = [
    "CONTRACT_VERSION",
    "MEASURES",
    "MONEY",
    "Distribution",
    "Floats",
    "Functional",
    "IdenticalUnits",
    "InputError",
    "InterimPrice",
    "Mechanism",
    "Outcome",
    "Parameter",
    "Setting",
    "Winners",
    "number_words",
]

CONTRACT_VERSION = 1

Floats = NDArray[np.float64]
Setting = float | str | tuple[float, ...]

MEASURES: dict[str, str] = {
    "worst_gain": "largest gain any bidder has from a false bid, in hindsight, as a share of value",
    "mean_gain": "that gain averaged over the winners",
    "gain_chance": "chance that somebody could gain more than the threshold",
    "interim_gain": "gain a winner can expect who knows the crowd but not the others' bids",
    "worst_room": "largest share of the payment a winner could have kept",
    "price_spread": "gap between the winners' highest and lowest unit price, over the highest",
    "revenue": "revenue if nobody shades",
    "shaded_revenue": "revenue if each winner, each alone, pays the least that keeps the unit",
    "welfare": "value of the units sold to those who get them",
    "efficiency": "welfare as a share of the most that the supply allows, reserve ignored",
    "units_unsold": "share of the supply left unsold",
    "no_sale": "chance that nothing is sold",
}
"""The measures and what each is in words."""

MONEY = frozenset({"revenue", "shaded_revenue", "welfare"})
"""Measures in currency: unconditional expectations; their exact error is asked for as a share."""


class InputError(ValueError):
    """Bad input, told in one line that names where, what was found and what is accepted."""


def number_words(number: float) -> str:
    """Write a number for an error message or a label: as short as it can be and still be exact."""
    return f"{number:.0f}" if float(number).is_integer() and abs(number) < 1e15 else repr(float(number))  # noqa: PLR2004


@dataclass(frozen=True)
class Parameter:
    """One declared parameter of a family or a mechanism.

    Attributes
    ----------
    name : str
        As it is written in a market file and after ``--set`` or ``--with``.
    meaning : str
        A few words for the catalogue, with the unit where there is one.
    low, high : float
        The domain of a number; the ends belong to it only where `low_included` or `high_included` say so.
    typical : tuple
        Values that tests and the catalogue use; the first is the one shown as an example.
    default : float or str, optional
        What is taken when the parameter is not given; ``None`` means that it must be given.
    choices : tuple of str
        For a parameter that is a word: the words accepted. Empty for a number.
    """

    name: str
    meaning: str
    low: float = -math.inf
    high: float = math.inf
    low_included: bool = False
    high_included: bool = False
    typical: tuple[float | str, ...] = ()
    default: float | str | None = None
    choices: tuple[str, ...] = ()

    @property
    def domain(self) -> str:
        """The accepted values in words, as error messages and the catalogue print them."""
        if self.choices:
            return " or ".join(self.choices)
        if math.isinf(self.low) and math.isinf(self.high):
            return "any finite number"
        parts = []
        if not math.isinf(self.low):
            word = "at least" if self.low_included else "above"
            parts.append(f"{word} {number_words(self.low)}")
        if not math.isinf(self.high):
            word = "at most" if self.high_included else "below"
            parts.append(f"{word} {number_words(self.high)}")
        kind = "a number" if len(parts) > 1 else "a finite number"
        return f"{kind} {' and '.join(parts)}"

    def check(self, value: object, where: str) -> float | str:
        """Return `value` as this parameter holds it.

        Raises
        ------
        InputError
            If the value is of the wrong kind or outside the domain.
        """
        if self.choices:
            if value in self.choices:
                return str(value)
        elif isinstance(value, int | float) and not isinstance(value, bool) and math.isfinite(value):
            number = float(value)
            above = number > self.low or (self.low_included and number == self.low)
            below = number < self.high or (self.high_included and number == self.high)
            if above and below:
                return number
        msg = f"{where}: {self.name} is {value!r}; accepted is {self.domain}"
        raise InputError(msg)


def checked_settings(
    parameters: Sequence[Parameter], given: Mapping[str, object], where: str
) -> dict[str, float | str]:
    """Validate the settings of a plug-in against its declared parameters, all of them, defaults filled in."""
    known = {parameter.name: parameter for parameter in parameters}
    for name in given:
        if name not in known:
            accepted = ", ".join(known) or "no parameters"
            msg = f"{where}: unknown parameter {name!r}; accepted: {accepted}"
            raise InputError(msg)
    settings: dict[str, float | str] = {}
    for name, parameter in known.items():
        if name in given:
            settings[name] = parameter.check(given[name], where)
        elif parameter.default is not None:
            settings[name] = parameter.default
        else:
            msg = f"{where}: {name} is missing ({parameter.meaning}); accepted is {parameter.domain}"
            raise InputError(msg)
    return settings


class Distribution(ABC):
    """One family of value distributions, with its parameters set.

    Values are never negative and the law has no atom. A subclass declares `name`, `title` and `parameters`,
    and reads its settings from ``self.settings`` in `prepare`, which runs once after validation.

    All methods are vectorised over float64 arrays and free of side effects; instances pickle.
    """

    name: ClassVar[str]
    title: ClassVar[str]
    parameters: ClassVar[tuple[Parameter, ...]] = ()
    from_log: ClassVar[bool] = False
    """True for a family that is fitted to a bid log and cannot be given by hand."""

    smooth_over: float = 0.5
    """Distance in log odds of s over which ten terms catch ``log Q``; less for a family with steep ends."""

    def __init__(self, **settings: Setting) -> None:
        self.settings: dict[str, Setting] = dict(checked_settings(self.parameters, settings, f"family {self.name}"))
        self.prepare()

    def prepare(self) -> None:  # noqa: B027 - most families have nothing to prepare
        """Turn the checked settings into attributes; refuse combinations that no single domain can."""

    def number(self, name: str) -> float:
        """One setting, known to be a number."""
        return float(self.settings[name])  # type: ignore[arg-type]

    def __repr__(self) -> str:
        """Show the family as it would be written: name and settings."""
        inside = ", ".join(f"{key}={value}" for key, value in self.settings.items())
        return f"{self.name}({inside})"

    @abstractmethod
    def upper_quantile(self, s: Floats) -> Floats:
        """Value exceeded with probability `s`, for s in (0, 1].

        Accurate to a relative 1e-12 down to s = 1e-300 wherever the mathematics allows.
        """

    @abstractmethod
    def survival(self, x: Floats) -> Floats:
        """P(value > x), accurate in the upper tail; 1 below the support and 0 above it."""

    @abstractmethod
    def density(self, x: Floats) -> Floats:
        """Probability density at x; 0 outside the support."""

    @property
    @abstractmethod
    def support(self) -> tuple[float, float]:
        """Lower and upper end of the values; the upper may be ``inf``."""

    @property
    def tail_index(self) -> float:
        """Extreme-value index xi of the upper tail: 0 unless the family says otherwise.

        Positive for a power tail (survival ~ x^(-1/xi)), negative for a bounded end reached like a power.
        Means are infinite from 1 on.
        """
        return 0.0

    @property
    def knots(self) -> tuple[float, ...]:
        """Upper-tail probabilities inside (0, 1) where the quantile function is not smooth."""
        return ()

    def cumulative(self, x: Floats) -> Floats:
        """P(value <= x); override where ``1 - survival`` would lose the lower tail's digits."""
        return 1.0 - self.survival(x)

    def lower_quantile(self, u: Floats) -> Floats:
        """Value not exceeded with probability `u`; override where small u matter (a lower end at 0)."""
        return self.upper_quantile(1.0 - u)

    def shortfall(self, s: Floats) -> Floats:
        """Upper end minus ``Q(s)``, ``inf`` without an end; override to keep the digits at small s."""
        high = self.support[1]
        return high - self.upper_quantile(s) if math.isfinite(high) else np.full(np.shape(s), math.inf)

    def two_ends(self, s: Floats) -> tuple[Floats, Floats]:
        """``Q(s)`` and its shortfall; override where finding both at once saves work."""
        return self.upper_quantile(s), self.shortfall(s)

    def inverse_hazard(self, s: Floats) -> Floats:
        """``s / density(Q(s))``, the reciprocal of the hazard rate at the quantile: ``-dQ(s) / d log s``.

        ``Q(s)`` less this is the virtual value. Override where the density runs out of floats or of digits.
        """
        return s / self.density(self.upper_quantile(s))

    def relative_drop(self, s: Floats, log_ratio: Floats) -> Floats:
        """``1 - Q(s) / Q(s * exp(-log_ratio))`` without the loss of digits of 1 minus almost 1.

        Parameters
        ----------
        s : array
            Upper-tail probability of the lower value.
        log_ratio : array, broadcastable against `s`
            How much further up the tail the higher value sits: the log of the ratio of probabilities, >= 0.

        Returns
        -------
        array
            Of the shape that the two broadcast to; it may be a read-only view.

        Notes
        -----
        Where the two are far apart the default subtracts them, or their shortfalls if these are less. Where
        they are near it integrates the slope of the lesser one's logarithm over the log odds of s, in which
        that slope is smooth at both ends: its mean over the way is a Chebyshev series whose coefficients
        depend on `s` alone. A probability of the higher value below 1e-322 is taken as that.
        """
        s, log_ratio = np.asarray(s, dtype=np.float64), np.asarray(log_ratio, dtype=np.float64)
        higher_at = np.maximum(s * np.exp(-log_ratio), _LEAST_AT)
        rest, gap = 1.0 - s, s * -np.expm1(-log_ratio)
        with np.errstate(over="ignore", divide="ignore", invalid="ignore"):
            way = np.log1p(gap / (rest + _LEAST)) + log_ratio
            higher, least_shortfall = self._ends_at(higher_at, rest + gap)
            lower, shortfall = self._ends_at(s, rest)
            by_end = shortfall < lower
            drop = np.asarray(np.where(by_end, shortfall - least_shortfall, higher - lower) / higher)
            near = way < self.smooth_over
            if near.any():
                nodes, weights = _mean_of_way()
                slope = self._log_slope(np.minimum(s, _BELOW_ONE)[..., None], self.smooth_over * nodes, by_end)
                series = np.broadcast_to(slope @ weights, (*near.shape, nodes.size))[near]
                mean = np.polynomial.chebyshev.chebval(2.0 / self.smooth_over * way[near] - 1.0, series.T, tensor=False)
                base = np.where(by_end, shortfall / higher, 1.0)[near]
                drop[near] = base * -np.expm1(-way[near] * mean)
        return drop

    def _ends_at(self, s: Floats, rest: Floats) -> tuple[Floats, Floats]:
        """`two_ends` at s, with the digits of ``rest = 1 - s`` near the lower end."""
        value, shortfall = self.two_ends(s)
        low = rest < _LOW
        if low.any():
            value, shortfall = np.array(value), np.array(shortfall)
            value[low] = self.lower_quantile(rest[low])
            shortfall[low] = self.support[1] - value[low]
        return value, shortfall

    def _log_slope(self, s: Floats, way: Floats, by_end: NDArray[np.bool_]) -> Floats:
        """Slope of ``log Q``, or of the log shortfall where `by_end`, by the log odds, `way` further up."""
        risen = (1.0 - s) * np.exp(way)
        at, rest = s / (s + risen), risen / (s + risen)
        value, shortfall = self._ends_at(at, rest)
        slope = rest * self.inverse_hazard(at)
        low = rest < _LOW
        if low.any():
            slope[low] = at[low] * rest[low] / self.density(value[low])
        return slope / (np.where(by_end[..., None], shortfall, value) + _LEAST)


_ORDER = 10
"""Terms of its series: with the nearest singularity pi away, a way of 0.5 leaves out (8 pi)^-10."""
_BELOW_ONE = 1.0 - 2.0**-53
_LEAST_AT = 1e-322
_LOW = 1e-3
"""Lower-tail probability below which values are found from it: ``1 - s`` would carry an error of 1e-13."""
_LEAST = 5e-324
"""The smallest float: added to what may be 0, it makes 0 / 0 a plain 0 and changes nothing else."""


@functools.cache
def _mean_of_way() -> tuple[Floats, Floats]:
    """Nodes in (0, 1), and what turns values there into the Chebyshev series of their mean from 0 to t."""
    chebyshev = np.polynomial.chebyshev
    nodes = 0.5 + 0.5 * chebyshev.chebpts1(_ORDER)
    to_series = np.linalg.inv(chebyshev.chebvander(2.0 * nodes - 1.0, _ORDER - 1))
    gauss, gauss_weights = np.polynomial.legendre.leggauss(_ORDER)
    inside = nodes[:, None] * (0.5 + 0.5 * gauss)
    means = np.einsum("g,igk->ik", 0.5 * gauss_weights, chebyshev.chebvander(2.0 * inside - 1.0, _ORDER - 1))
    return nodes, (to_series @ means @ to_series).T


@dataclass(frozen=True)
class IdenticalUnits:
    """Supply of `units` identical units, one to a bidder, with a reserve price per unit.

    Raises
    ------
    InputError
        If `units` is not a whole number of at least 1, or the reserve is negative or not finite.
    """

    units: int
    reserve: float = 0.0
    kind: ClassVar[str] = "identical units"

    def __post_init__(self) -> None:
        """Refuse a supply that makes no sense."""
        if isinstance(self.units, bool) or not isinstance(self.units, int) or self.units < 1:
            msg = f"supply: units is {self.units!r}; accepted is a whole number of at least 1"
            raise InputError(msg)
        if not (math.isfinite(self.reserve) and self.reserve >= 0):
            msg = f"supply: reserve is {self.reserve!r}; accepted is a finite number of at least 0"
            raise InputError(msg)

    def highest(self, bids: Floats) -> tuple[Floats, Floats]:
        """Who wins when the highest bids do, and the first rejected bid.

        Parameters
        ----------
        bids : array (draws, bidders)
            Floats >= 0, in any order; equal bids win in the order of the bidders.

        Returns
        -------
        allocation : array (draws, bidders)
            1 for a winner, else 0: the `units` highest of the bids that are at least the reserve and above 0.
        threshold : array (draws,)
            The larger of the highest bid left without a unit for want of supply, and the reserve.
        """
        draws, bidders = bids.shape
        eligible = (bids >= self.reserve) & (bids > 0)
        if (bids[:, 1:] <= bids[:, :-1]).all():
            # bids that come in falling order, as the draws of the engine do, need no sorting
            first, rejected = np.arange(bidders) < self.units, bids[:, self.units : self.units + 1]
        else:
            order = np.argsort(-bids, axis=1, kind="stable")
            rank = np.empty_like(order)
            np.put_along_axis(rank, order, np.broadcast_to(np.arange(bidders), (draws, bidders)), axis=1)
            first = rank < self.units
            rejected = np.take_along_axis(bids, order[:, self.units : self.units + 1], axis=1)
        allocation = (eligible & first).astype(np.float64)
        threshold = np.full(draws, float(self.reserve))
        if bidders > self.units:
            np.maximum(threshold, rejected[:, 0], out=threshold)
        return allocation, threshold


@dataclass(frozen=True)
class Outcome:
    """What a mechanism decides.

    Attributes
    ----------
    allocation : array, the shape of the bids
        Quantity (or slot weight) each bidder gets.
    payment : array (draws, bidders)
        Each bidder's total payment.
    """

    allocation: Floats
    payment: Floats


class Winners(Protocol):
    """What the exact engine hands to `Functional.amount`: arrays over its quadrature nodes.

    `threshold` is the larger of the first rejected bid and the reserve, `winner` the winner the functional
    runs over, `lowest` the lowest winner. The ratios come without cancellation; use them, not differences.
    """

    @property
    def threshold(self) -> Floats:
        """The larger of the first rejected bid and the reserve."""
        ...

    @property
    def winner(self) -> Floats:
        """The winner that the functional runs over."""
        ...

    @property
    def lowest(self) -> Floats:
        """The lowest winner."""
        ...

    @property
    def room(self) -> Floats:
        """``1 - threshold / winner``."""
        ...

    @property
    def lowest_room(self) -> Floats:
        """``1 - threshold / lowest``."""
        ...

    @property
    def spread(self) -> Floats:
        """``1 - lowest / winner``."""
        ...


@dataclass(frozen=True)
class Functional:
    """A measure as the exact engine integrates it: the expectation of an amount over the winners of a draw.

    Every rule that gives identical units to the highest bids has its measures in this form, because given the
    threshold the winners' upper-tail probabilities are independent and uniform.

    Attributes
    ----------
    over : "best", "lowest", "mean", "sum"
        The winner whose amount counts: the highest, the lowest, the mean over the winners, or the sum.
    uses : subset of {"threshold", "winner", "lowest"}
        What the amount looks at; the engine integrates over nothing else.
    amount : callable
        `Winners` to array. For a gain that runs over "best" or "lowest" it must rise with that winner's bid,
        so that the chance of a gain above a level can be found.
    """

    over: Literal["best", "lowest", "mean", "sum"]
    uses: frozenset[str]
    amount: Callable[[Winners], Floats] = field(repr=False)


@dataclass(frozen=True)
class InterimPrice:
    """A winner's unit price as a weighted mean, which is all that interim gains need.

    The price is ``own * (own bid) + lowest * (lowest accepted bid) + threshold * (first rejected bid or
    reserve)``; the weights add to 1.
    """

    own: float = 0.0
    lowest: float = 0.0
    threshold: float = 0.0


class Mechanism(ABC):
    """One pricing rule, with its parameters set.

    A subclass declares `name`, `title`, `serves` (the kinds of supply it can price) and `parameters`, and
    implements `outcome`. The other methods are for speed and exactness; ``None`` means "not known here".
    """

    name: ClassVar[str]
    title: ClassVar[str]
    serves: ClassVar[frozenset[str]]
    parameters: ClassVar[tuple[Parameter, ...]] = ()

    def __init__(self, **settings: Setting) -> None:
        self.settings: dict[str, float | str] = checked_settings(self.parameters, settings, f"mechanism {self.name}")

    def __repr__(self) -> str:
        """Show the rule as it would be written: name and settings."""
        inside = ", ".join(f"{key}={value}" for key, value in self.settings.items())
        return f"{self.name}({inside})" if inside else self.name

    @abstractmethod
    def outcome(self, bids: Floats, supply: IdenticalUnits, coins: Floats | None = None) -> Outcome:
        """Allocation and payments for every draw.

        Parameters
        ----------
        bids : array (draws, bidders)
            Floats >= 0. Draws never influence one another; the input is left as it was.
        supply : IdenticalUnits
        coins : array, optional
            Only for a rule that declares that it tosses some.
        """

    def depth(self, supply: IdenticalUnits) -> int | None:  # noqa: ARG002
        """How many of the highest bids decide the outcome, or ``None`` if all may."""
        return None

    def gains(self, bids: Floats, supply: IdenticalUnits) -> Floats | None:  # noqa: ARG002
        """Each bidder's ex post gain at truthful bids, array (draws, bidders), in closed form.

        The gain is ``(best utility over reports - truthful utility) / D``, D the larger of the value of the
        truthful allocation and of the best response's, plus the truthful loss if there is one.
        """
        return None

    def least_payments(self, bids: Floats, supply: IdenticalUnits) -> Floats | None:  # noqa: ARG002
        """Return the least total each winner could pay and keep its allocation, array (draws, bidders)."""
        return None

    def functional(self, measure: str, supply: IdenticalUnits) -> Functional | InterimPrice | float | None:  # noqa: ARG002
        """Return what the exact engine integrates for `measure`; a plain float is the value itself, known exactly."""
        return None
