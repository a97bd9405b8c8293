"""One rule for every number a person reads.

JCGM 100:2008, 7.2.6: a standard uncertainty is given to two significant digits, and its value to
the same decimal place. Interval ends go to the decimal place that two digits of half the interval
would take. A number without an uncertainty keeps four significant digits.
"""

from __future__ import annotations

import math

__all__ = ["interval_text", "place_of", "rounded", "scaled_unit", "value_text"]

_PLAIN_DIGITS = 4


def place_of(u: float) -> int:
    """Return the decimal place (as for `round`) that keeps two significant digits of ``u``.

    Examples
    --------
    >>> place_of(0.0234), place_of(3120.0), place_of(0.0996)
    (3, -2, 2)
    """
    place = 1 - math.floor(math.log10(abs(u)))
    # 0.0996 rounds to 0.10: two digits are then one place higher
    return place - 1 if round(abs(u), place) >= 10.0 ** (2 - place) else place


def rounded(value: float, place: int) -> str:
    """Return ``value`` at a decimal place; in powers of ten where digits would not fit.

    Examples
    --------
    >>> rounded(131.278, 1), rounded(3.4567e-4, 6), rounded(1234.5, -2)
    ('131.3', '3.46e-4', '1200')
    """
    value = round(value, place)
    exponent = _exponent(value, place)
    if exponent:
        digits = max(place + exponent, 0)
        mantissa = f"{value / 10.0**exponent:.{digits}f}"
        return f"{mantissa}e{exponent}"
    return f"{value:.{max(place, 0)}f}"


def value_text(value: float | None, u: float | None = None, total: float | None = None) -> str:
    """Return value and uncertainty rounded together, with a second uncertainty in brackets.

    Examples
    --------
    >>> value_text(131.278, 3.12), value_text(0.31234), value_text(None)
    ('131.3 ± 3.1', '0.3123', '–')
    >>> value_text(3.904e-4, 2.8e-5, 2.9e-5)
    '(3.90 ± 0.28 [± 0.29])e-4'
    """
    if value is None:
        return "–"
    if u is None or u <= 0.0 or not math.isfinite(u):
        if value == 0.0:
            return "0"
        return rounded(value, _PLAIN_DIGITS - 1 - math.floor(math.log10(abs(value))))
    place = place_of(u)
    exponent = _exponent(value, place)
    factor, digits = 10.0**-exponent, max(place + exponent, 0)

    def show(x: float) -> str:
        return f"{round(x, place) * factor:.{digits}f}"

    text = f"{show(value)} ± {show(u)}"
    if total is not None:
        text += f" [± {show(total)}]"
    return f"({text})e{exponent}" if exponent else text


def _exponent(value: float, place: int) -> int:
    """Return the power of ten to take out of a rounded value; 0 where its digits fit."""
    rounded_value = round(value, place)
    if rounded_value == 0.0 or 1e-3 <= abs(rounded_value) < 1e6:
        return 0
    return math.floor(math.log10(abs(rounded_value)))


def interval_text(low: float | None, high: float | None) -> str:
    """Return an interval or limit in words.

    Examples
    --------
    >>> interval_text(1.7884, 2.2235), interval_text(None, 1.1525), interval_text(None, None)
    ('1.79 to 2.22', '≤ 1.15', 'not bounded')
    """
    if low is None and high is None:
        return "not bounded"
    if low is None or high is None:
        end = low if high is None else high
        sign = "≥" if high is None else "≤"
        return (
            f"{sign} {rounded(end, 2 - math.floor(math.log10(abs(end))))}" if end else f"{sign} 0"
        )
    half = (high - low) / 2.0
    if half <= 0.0:
        return value_text(low)
    place = place_of(half)
    return f"{rounded(low, place)} to {rounded(high, place)}"


def scaled_unit(unit: str, value: float | None) -> tuple[float, str]:
    """Return the factor and the unit people read a quantity in.

    Examples
    --------
    >>> scaled_unit("g/mol", 131000.0), scaled_unit("1", 2.0)
    ((0.001, 'kg/mol'), (1.0, ''))
    """
    if unit == "g/mol" and value is not None and abs(value) >= 1e4:
        return 1e-3, "kg/mol"
    return 1.0, "" if unit == "1" else unit
