"""Compare room: how far scanners agree.

Enters: the tidy frame of readings (pandas) and the days to look at.
Leaves: an `Agreement` (`agree`): per scan and level bias, linearity, repeatability and reproducibility, Mandel's
statistics, variance components, pairs with limits of agreement, the smallest real change, and who left the others.
Knows nothing of the database, HTML or DICOM; holds no state and reads no clock.

The statistics (`precision`, `reml`, `pairs`, `linearity`) are pure functions on arrays.
"""

from __future__ import annotations

from importlib import import_module
from typing import Any

_HOMES = {
    "Agreement": "agreement",
    "Comparison": "agreement",
    "Departure": "agreement",
    "Level": "agreement",
    "LevelScanner": "agreement",
    "Pair": "agreement",
    "ScannerRow": "agreement",
    "SmallestChange": "agreement",
    "Variances": "agreement",
    "agree": "comparing",
}
__all__ = sorted(_HOMES)


def __getattr__(name: str) -> Any:
    if name in _HOMES:
        return getattr(import_module(f"qa.compare.{_HOMES[name]}"), name)
    raise AttributeError(f"module 'qa.compare' has no attribute '{name}'")
