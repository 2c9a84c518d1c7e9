"""Trend room: watches streams for drift.

Enters: tidy frames of readings, runs and log entries (pandas), the limit blocks of the site.
Leaves: judgements of runs (`judge`), findings and levels (`find`), and log entries for
software and coil changes that the data themselves show (`log_entries_from_runs`).
Knows nothing of the database, HTML or DICOM; holds no state and reads no clock.

The charts (`qa.trend.charts`) and their run lengths (`qa.trend.arl`) are pure functions on arrays.
"""

from __future__ import annotations

from importlib import import_module
from typing import Any

_HOMES = {
    "Judgement": "judgements",
    "StreamRow": "judgements",
    "judge": "judging",
    "Finding": "findings",
    "Forecast": "findings",
    "NearEntry": "findings",
    "Trend": "finding",
    "find": "finding",
    "StreamSummary": "summary",
    "ReadEntry": "logbook",
    "log_entries_from_runs": "logbook",
    "Promise": "budget",
}
__all__ = sorted(_HOMES)


def __getattr__(name: str) -> Any:
    if name in _HOMES:
        return getattr(import_module(f"qa.trend.{_HOMES[name]}"), name)
    raise AttributeError(f"module 'qa.trend' has no attribute '{name}'")
