"""Numbers for people: rounded to their uncertainty, never with more digits than they carry.

The half-width of the interval is given with two significant digits and the value to the same decimal place (JCGM 100:2008,
7.2.6); a value without an interval carries three significant digits.
"""

from __future__ import annotations

import math

UNDEFINED = "–"
_THIN = "\u202f"


def plain(value: float | None, *, digits: int = 3) -> str:
    """A value with so many significant digits.

    Parameters
    ----------
    value
        The value; NaN and None give a dash.
    digits
        Significant digits.

    Examples
    --------
    >>> plain(0.43219), plain(1234.5), plain(float("nan"))
    ('0.432', '1230', '–')
    """
    if value is None or not math.isfinite(value):
        return UNDEFINED
    return fixed(value, _decimals(value, digits))


def interval(value: float | None, low: float | None, high: float | None) -> str:
    """A value with its interval, all to the decimal place that the interval allows.

    Parameters
    ----------
    value, low, high
        The value and the ends of its interval; without an interval the value stands alone.

    Examples
    --------
    >>> interval(0.43219, 0.41871, 0.44567)
    '0.432 (0.419 to 0.446)'
    """
    if value is None or not math.isfinite(value):
        return UNDEFINED
    decimals = decimals_of(value, low, high)
    if not _has_interval(low, high):
        return fixed(value, decimals)
    return f"{fixed(value, decimals)} ({fixed(low, decimals)} to {fixed(high, decimals)})"  # type: ignore[arg-type]


def decimals_of(value: float, low: float | None, high: float | None) -> int:
    """Decimal place to which a value with this interval is given; negative for tens and hundreds.

    Parameters
    ----------
    value, low, high
        The value and the ends of its interval (None or NaN where there is none).
    """
    half = (high - low) / 2 if _has_interval(low, high) else 0.0  # type: ignore[operator]
    return _decimals(half, 2) if half > 0 else _decimals(value, 3)


def fixed(value: float, decimals: int) -> str:
    """A value to a decimal place, thousands apart, with a true minus sign.

    Parameters
    ----------
    value
        A finite value.
    decimals
        Places after the point; negative for tens and hundreds.
    """
    rounded = round(value, decimals) + 0.0  # no minus zero
    text = f"{rounded:,.{max(0, decimals)}f}"
    text = text.replace(",", _THIN) if abs(rounded) >= 10_000 else text.replace(",", "")
    return text.replace("-", "−")


def _decimals(value: float, digits: int) -> int:
    if value == 0 or not math.isfinite(value):
        return max(0, digits - 1)
    exponent = math.floor(math.log10(abs(value)))
    rounded_up = round(abs(value), digits - 1 - exponent) >= 10.0 ** (exponent + 1)
    return min(12, digits - 1 - exponent - rounded_up)


def _has_interval(low: float | None, high: float | None) -> bool:
    return low is not None and high is not None and math.isfinite(low) and math.isfinite(high)
