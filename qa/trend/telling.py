"""The sentences of findings: what moved, by how much, since when, and what speaks for it."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import date

import numpy as np

from qa.trend.change import Change
from qa.trend.findings import NearEntry


def shape(change: Change) -> tuple[str, ...]:
    """Whether a step or a slope, and how surely."""
    other = "slope" if change.kind == "step" else "step"
    if not np.isfinite(change.favour):
        return ()
    if change.favour < 1.5:
        return (f"A {other} would fit nearly as well.",)
    return (f"A {change.kind} fits better than a {other} (likelihood ratio {_ratio(change.favour)}).",)


def _ratio(favour: float) -> str:
    return f"{np.exp(favour):.0f} to 1" if favour < 6.9 else "above 1000 to 1"


def events(entries: Sequence[NearEntry]) -> tuple[str, ...]:
    """One sentence for each log entry near the onset."""
    return tuple(f"Near the onset, {e.at.date().isoformat()}: {e.kind}: {e.text}" for e in entries)


def sentence(
    name: str, subject: str, scanners: tuple[str, ...], change: Change, onset: date, interval: tuple[date, date]
) -> str:
    """The finding in one sentence; `subject` is what moved ('vial 7', 'all vials')."""
    places = " and ".join(scanners)
    low, high = sorted(change.interval())
    if change.kind == "slope":
        rate = change.rate_interval() or (float("nan"), float("nan"))
        return (
            f"{name} of {subject} on {places} has drifted by {change.rate:+.1f} % a year ({rate[0]:+.1f} to "
            f"{rate[1]:+.1f}) since about {onset}, {change.size:+.1f} % in all."
        )
    return (
        f"{name} of {subject} on {places} stepped by {change.size:+.1f} % ({low:+.1f} to {high:+.1f}) by {onset} "
        f"(between {interval[0]} and {interval[1]})."
    )
