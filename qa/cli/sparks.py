"""A history as one line of text."""

from __future__ import annotations

from collections.abc import Sequence

_BARS = "▁▂▃▄▅▆▇█"
LONGEST = 40


def spark(values: Sequence[float]) -> str:
    """The newest values as bars from the smallest to the largest; a blank where there is none.

    Parameters
    ----------
    values : any number of them, oldest first; NaN where there is none
    """
    shown = [float(value) for value in values][-LONGEST:]
    known = [value for value in shown if value == value]
    if not known:
        return ""
    low, high = min(known), max(known)
    span = (high - low) or 1.0
    return "".join(" " if value != value else _BARS[round((value - low) / span * (len(_BARS) - 1))] for value in shown)
