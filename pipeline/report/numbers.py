"""Numbers to text, once for terminal, HTML and PDF: the digits follow the uncertainty.

No more digits are shown than the interval supports: two significant digits of the half-width
when it leads with 1 or 2, else one (the customary rounding of an uncertainty; with one digit
only, a half-width of 1.4 shown as 1 would be 30 % off). Infinity is said in words.
"""

from __future__ import annotations

import math

#: Said where a margin or a bound never ends.
NO_LIMIT = "no limit"

#: Said where a value was not given.
NOT_GIVEN = "not given"

#: Digits of a number without an interval: enough to enter, few enough to read.
PLAIN_DIGITS = 3

#: Beyond these magnitudes a number is written with an exponent.
_LARGEST_PLAIN = 1e6
_SMALLEST_PLAIN = 1e-4

#: Up to this many seconds a time is told in seconds, up to this many in minutes, then in hours.
_SECONDS_UNTIL = 120.0
_MINUTES_UNTIL = 7200.0


def decimals(half_width: float) -> int:
    """Find the last decimal place worth showing beside an uncertainty.

    Parameters
    ----------
    half_width : float
        Half the interval, above zero and finite, in the value's unit.

    Returns
    -------
    int
        Places after the point; negative means rounding to tens, hundreds, and so on.
    """
    leading, exponent = f"{half_width:.1e}".split("e")
    return -int(exponent) + (1 if float(leading) < 3.0 else 0)


def plain(value: float | None, *, digits: int = PLAIN_DIGITS, unit: str = "") -> str:
    """Write a number that has no interval.

    Parameters
    ----------
    value : float or None
        None is said to be not given.
    digits : int
        Significant digits; trailing zeros are left out.
    unit : str
        Put behind the number.

    Returns
    -------
    str
    """
    if value is None:
        return NOT_GIVEN
    if math.isinf(value):
        return NO_LIMIT
    if value == 0.0:
        return _joined("0", unit)
    places = digits - 1 - math.floor(math.log10(abs(value)))
    return _joined(_fixed(value, places, trim=True), unit)


def rounded(value: float, half_width: float) -> str:
    """Write a number to the digits its uncertainty supports.

    Parameters
    ----------
    value : float
        Finite or infinite.
    half_width : float
        Half the interval; zero or infinite falls back to `plain`.

    Returns
    -------
    str
    """
    if math.isinf(value) or not math.isfinite(half_width) or half_width <= 0.0:
        return plain(value)
    return _fixed(value, decimals(half_width), trim=False)


def interval(value: float, low: float, high: float, unit: str = "") -> str:
    """Write a value with its interval, all to the same last place.

    Parameters
    ----------
    value, low, high : float
        low <= value <= high; an end may be infinite.
    unit : str
        Put behind the interval.

    Returns
    -------
    str
        "19.6 (18.9 to 20.4) s", or "4.2 (0 to no limit) s" for an open end.
    """
    if not math.isfinite(low) and not math.isfinite(high):
        return f"{plain(value, digits=2, unit=unit)} (not determined by this log)"
    half = half_width(value, low, high)
    body = f"{rounded(value, half)} ({bounds(low, high, half)})"
    return _joined(body, unit)


def half_width(value: float, low: float, high: float) -> float:
    """Take half an interval, or its finite side where the other has no end.

    Parameters
    ----------
    value, low, high : float
        Estimate and ends of its interval.
    """
    if math.isfinite(low) and math.isfinite(high):
        return (high - low) / 2.0
    return abs(value - low) if math.isfinite(low) else abs(high - value)


def bounds(low: float, high: float, half: float, unit: str = "") -> str:
    """Write two ends to the last place `half` supports: "18.9 to 20.4".

    Parameters
    ----------
    low, high : float
        Ends of the interval.
    half : float
        Half its width.
    unit : str
        Put behind it.
    """
    return _joined(f"{rounded(low, half)} to {rounded(high, half)}", unit)


def percent(value: float | None, *, digits: int = 2) -> str:
    """Write a number that already is in percent: "8.4 %".

    Parameters
    ----------
    value : float or None
        [%].
    digits : int
        Significant digits.
    """
    return plain(value, digits=digits, unit="%")


def share(value: float) -> str:
    """Write a share of one in percent; more than nothing is never called 0 %."""
    if 0.0 < value < 0.001:
        return "under 0.1 %"
    return percent(100.0 * value)


def duration(value: float | None, *, never: str = NO_LIMIT, digits: int = PLAIN_DIGITS) -> str:
    """Write a time in seconds, minutes or hours, whichever reads best.

    Parameters
    ----------
    value : float or None
        Time [s].
    never : str
        Said for infinity.
    digits : int
        Significant digits.

    Returns
    -------
    str
    """
    if value is None:
        return NOT_GIVEN
    if math.isinf(value):
        return never
    scale, unit = time_unit(value)
    return plain(value / scale, digits=digits, unit=unit)


def time_unit(longest: float) -> tuple[float, str]:
    """Choose the unit for times up to `longest` [s].

    Returns
    -------
    scale : float
        Seconds in the unit.
    unit : str
        "s", "min" or "h".
    """
    if longest < _SECONDS_UNTIL:
        return 1.0, "s"
    return (60.0, "min") if longest < _MINUTES_UNTIL else (3600.0, "h")


def _fixed(value: float, places: int, *, trim: bool) -> str:
    shown = round(value, places)
    size = abs(shown)
    if size != 0.0 and not _SMALLEST_PLAIN <= size < _LARGEST_PLAIN:
        digits = max(places + math.floor(math.log10(size)), 0)
        mantissa, exponent = f"{shown:.{digits}e}".split("e")
        return f"{_trimmed(mantissa) if trim else mantissa}e{int(exponent)}"
    text = f"{shown:.{max(places, 0)}f}"
    text = _trimmed(text) if trim else text
    return text.removeprefix("-") if float(text) == 0.0 else text


def _trimmed(text: str) -> str:
    return text.rstrip("0").rstrip(".") if "." in text else text


def _joined(number: str, unit: str) -> str:
    return f"{number} {unit}" if unit and number not in (NO_LIMIT, NOT_GIVEN) else number
