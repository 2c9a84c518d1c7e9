"""Numbers as people should read them: rounded by their uncertainty (GUM, JCGM 100:2008, 7.2.6)."""

from __future__ import annotations

from math import floor, isfinite, log10

NONE = "–"
DIGITS = 2  # significant digits of an uncertainty
_LEAST = 1e-12


def decimals_of(u: float, digits: int = DIGITS) -> int:
    """How many decimals leave `digits` significant digits of `u`; negative: tens, hundreds."""
    if not isfinite(u) or u <= _LEAST:
        return digits
    places = digits - 1 - floor(log10(u))
    if round(u, places) >= 10.0 ** (digits - places):  # rounding up gave one digit more, as 0.0996 -> 0.10
        places -= 1
    return places


def fixed(value: float | None, decimals: int, *, sign: bool = False) -> str:
    """`value` with so many decimals, a true minus sign, and no minus before a zero."""
    if value is None or not isfinite(value):
        return NONE
    rounded = round(value, decimals)
    text = f"{abs(rounded):.{max(decimals, 0)}f}"
    if float(text) == 0:
        return text
    return f"{'−' if rounded < 0 else '+' if sign else ''}{text}"


def with_u(value: float | None, u: float | None, unit: str = "", *, sign: bool = False) -> str:
    """``812.4 ± 3.1 ms``; without an uncertainty, three significant digits and the words that there is none."""
    tail = f" {unit}" if unit else ""
    if value is None or not isfinite(value):
        return NONE
    if u is None or not isfinite(u):
        return f"{significant(value, 3, sign=sign)}{tail} (uncertainty unknown)"
    places = decimals_of(u)
    return f"{fixed(value, places, sign=sign)} ± {fixed(u, places)}{tail}"


def significant(value: float | None, digits: int = 3, *, sign: bool = False) -> str:
    """`value` with so many significant digits."""
    if value is None or not isfinite(value):
        return NONE
    return fixed(value, decimals_of(abs(value), digits) if value else digits - 1, sign=sign)


def interval(low: float | None, high: float | None, unit: str = "", *, sign: bool = False) -> str:
    """``1.2 to 3.4 %``, rounded to two digits of its width."""
    if low is None or high is None or not (isfinite(low) and isfinite(high)):
        return NONE
    places = decimals_of((high - low) / 2.0 or abs(high) / 10.0)
    return f"{fixed(low, places, sign=sign)} to {fixed(high, places, sign=sign)}{' ' + unit if unit else ''}"
