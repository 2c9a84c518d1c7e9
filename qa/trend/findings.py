"""What a finding is: something that moved, when, by how much, and why it is thought so."""

from __future__ import annotations

import hashlib
from dataclasses import asdict, dataclass
from datetime import UTC, date, datetime
from typing import Any, Literal

from qa.words import Verdict

FindingKind = Literal["step", "slope", "spread", "outlier", "limit"]
Cause = Literal["scanner", "vial", "phantom", "temperature", "unknown"]
FindingState = Literal["open", "returned", "past"]


@dataclass(frozen=True, slots=True)
class Forecast:
    """When a slope crosses the action limit, and the 90 % interval of that day; None: not within ten years."""

    crosses: date | None
    earliest: date | None
    latest: date | None


@dataclass(frozen=True, slots=True)
class NearEntry:
    """A log entry near an onset."""

    entry: str
    at: datetime
    kind: str
    text: str


@dataclass(frozen=True, slots=True)
class Finding:
    """One thing that moved. Sizes in percent; intervals hold 90 %; None where a field does not apply."""

    finding: str  # stable key: the same change keeps it as runs come
    scanner: str | None  # None: every scanner in `scanners`
    phantom: str | None  # None: every phantom in `phantoms`
    scanners: tuple[str, ...]
    phantoms: tuple[str, ...]
    vials: tuple[str, ...]
    quantity: str
    scan: str
    kind: FindingKind
    verdict: Verdict
    onset: date
    onset_interval: tuple[date, date]
    size_percent: float
    size_interval: tuple[float, float] | None
    percent_per_year: float | None
    rate_interval: tuple[float, float] | None
    cause: Cause
    cause_reasons: tuple[str, ...]
    log_entries: tuple[NearEntry, ...]
    forecast: Forecast | None
    first_raised: date
    state: FindingState  # open; returned: a later change undid it; past: the baseline was restarted since
    sentence: str

    def as_dict(self) -> dict[str, Any]:
        """Plain numbers, ISO 8601 dates and None, in the shape of ``vialbook drift --json``."""
        plain: dict[str, Any] = _plain(asdict(self))
        return plain


def _plain(value: Any) -> Any:
    if isinstance(value, dict):
        return {key: _plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(item) for item in value]
    if isinstance(value, date):  # a datetime is a date
        return value.isoformat()
    if isinstance(value, Verdict):
        return value.value
    if isinstance(value, float):
        return value if value == value and abs(value) != float("inf") else None
    return value


def key(*parts: object) -> str:
    """A short name for a finding that stays when its estimates are refined: built from what moved, not from how."""
    return "F-" + hashlib.sha256("\x1f".join(str(part) for part in parts).encode()).hexdigest()[:10]


def day_of(days: float) -> date:
    """The UTC date of a time in days since the epoch."""
    return datetime.fromtimestamp(days * 86400.0, tz=UTC).date()
