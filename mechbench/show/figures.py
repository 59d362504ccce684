"""Numbers as people read them: only the digits that the largest of their errors leaves.

The last digit shown stands where the error's first digit does, as in 0.16 ± 0.06; and never are more than
`MOST_DIGITS` shown, however well a number is known.
"""

from __future__ import annotations

import math

__all__ = ["MOST_DIGITS", "change", "figure", "largest_error", "limits_digits", "plus_minus"]

MOST_DIGITS = 4
"""Significant digits shown of a number that is known to more."""

_SMALL, _LARGE = 1e-4, 1e9
"""Outside these a number is written with a power of ten."""
_CERTAIN = 1e-9
"""Error below which a whole number is taken for what it is."""
_SLACK = 1.0 - 1e-9
"""Keeps an error of one digit from being rounded up for its last bits."""
_LEAST_PLACE = -300


def largest_error(error: float, log_error: float | None = None) -> float:
    """Return the largest of the errors of a number; an error that is no number counts as infinite."""
    errors = [error] if log_error is None else [error, log_error]
    return max(math.inf if math.isnan(one) else one for one in errors)


def figure(value: float, error: float, status: str = "ok") -> str:
    """Write a number with the digits that its error leaves.

    Parameters
    ----------
    value : float
    error : float
        The largest of its errors, absolute, at least 0.
    status : str
        As an `Estimate` carries it: a lower bound is written as one, what is infinite in a word.

    Returns
    -------
    str
        Never a bare nan or inf: "infinite", "no number", or "not known" where no digit is certain.
    """
    if math.isinf(value):
        return "infinite"
    if math.isnan(value):
        return "no number"
    if not math.isfinite(error):
        return "not known"
    sure = error < _CERTAIN and float(value).is_integer() and abs(value) < 10**MOST_DIGITS
    told = f"{value + 0.0:,.0f}" if sure else _written(value, _place(value, error))
    return f"at least {told}" if "lower bound" in status else told


def change(value: float, error: float) -> str:
    """Write a difference, with its sign."""
    told = figure(abs(value), error)
    if not math.isfinite(value) or not any(digit in "123456789" for digit in told.split("e")[0]):
        return told
    return ("+" if value > 0 else "-") + told


def plus_minus(error: float, value: float = 0.0) -> str:
    """Write an error itself, to one digit and never too small.

    The smallest, which are rounding, are written as a bound, unless the bound would deny digits of the value
    that are right.
    """
    if error == 0:
        return "0"
    if error < _CERTAIN and (value == 0 or math.isnan(value) or 10.0 ** _place(value, error) > _CERTAIN):
        return f"< {_CERTAIN:.0e}".replace("e-0", "e-")
    if not math.isfinite(error):
        return "unknown"
    unit = 10.0 ** _first_place(error)
    rounded = math.ceil(error / unit * _SLACK) * unit
    return _written(rounded, math.floor(math.log10(rounded * (1 + 1e-12))))


def limits_digits(value: float, error: float) -> bool:
    """Whether it is the error that ends the digits of a number, and so is worth showing beside it."""
    return math.isfinite(error) and error >= _CERTAIN and _place(value, error) > _place(value, 0.0)


def _place(value: float, error: float) -> int:
    """Power of ten of the last digit shown."""
    most = _LEAST_PLACE
    if value != 0:
        most = _leading(value) - MOST_DIGITS + 1
    elif error != 0:
        most = -MOST_DIGITS
    if error == 0:
        return most
    return max(most, _first_place(error))


def _first_place(error: float) -> int:
    """Power of ten of an error's first digit."""
    return max(math.floor(math.log10(error)), _LEAST_PLACE)


def _leading(value: float) -> int:
    """Power of ten of the first digit that `MOST_DIGITS` digits of a number begin with."""
    return int(f"{value:.{MOST_DIGITS - 1}e}".partition("e")[2])


def _written(value: float, place: int) -> str:
    """Write a number rounded to a power of ten, zeros behind a whole number known exactly left out."""
    if value == 0 and place <= _LEAST_PLACE:
        return "0"
    size = abs(value)
    if size != 0 and place > _leading(value):  # no digit of it is left: all or nothing of one unit
        value = round(value / 10.0**place) * 10.0**place
        size = abs(value)
    if (size < _SMALL and place < math.log10(_SMALL) and size != 0) or size >= _LARGE:
        digits = max(0, _leading(value) - place)
        head, _, power = f"{value:.{digits}e}".partition("e")
        return f"{head}e{int(power)}"
    if place >= 0:
        rounded = round(value / 10.0**place) * 10**place
        return f"{rounded:,}"
    rounded = round(value, -place) + 0.0
    places = -place if rounded else min(-place, MOST_DIGITS)  # a row of zeros tells no more than four of them
    return f"{rounded:,.{places}f}"
