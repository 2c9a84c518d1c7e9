"""What an agreement is: the rows of every table, in percent unless named otherwise.

Intervals hold 95 %. A number that cannot be given is None, and `not_given` says why, by the name of its field.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass, field
from datetime import date
from typing import Any, Literal

from qa.compare.intervals import Interval

Reasons = Mapping[str, str]
Flag = Literal["5 %", "1 %"]


@dataclass(frozen=True, slots=True)
class LevelScanner:
    """One scanner at one level; the flags say at which level of chance h or k is out of the ordinary."""

    scanner: str
    runs: int
    mean_percent: float
    u_percent: float | None  # standard uncertainty of the mean, from the scatter between runs
    s_percent: float | None  # scatter of single runs
    h: float | None
    h_flag: Flag | None
    k: float | None
    k_flag: Flag | None
    k_critical: tuple[float, float] | None  # at 5 % and 1 %


@dataclass(frozen=True, slots=True)
class Level:
    """One vial of one phantom over all scanners that measured it."""

    phantom: str
    vial: str
    against: Literal["reference", "mean of the scanners"]
    nominal_ms: float  # mean of the scanners' mean values
    mean_percent: float  # mean of the scanners' means
    s_r_percent: float | None  # between runs of one scanner
    s_r_interval: Interval | None
    s_R_percent: float | None  # noqa: N815 - the standard's own symbol; between runs of any scanners
    s_R_interval: Interval | None  # noqa: N815
    h_critical: tuple[float, float] | None  # at 5 % and 1 %
    scanners: tuple[LevelScanner, ...]
    not_given: Reasons = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class ScannerRow:
    """One scanner in one scan."""

    scanner: str
    phantoms: tuple[str, ...]
    runs: int
    vials: int
    first: date
    last: date
    bias_percent: float | None  # from the references, mean over vials
    u_bias_percent: float | None
    bias_interval: Interval | None
    slope: float | None  # 1: in proportion to the references
    slope_interval: Interval | None
    intercept_ms: float | None
    intercept_interval_ms: Interval | None
    within_cv_percent: float | None  # scatter of single readings between runs
    within_cv_interval: Interval | None
    not_given: Reasons = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class Variances:
    """Standard deviations of the parts of one reading's deviation, by restricted maximum likelihood."""

    scanner_percent: float | None  # between scanners, common to all vials
    scanner_vial_percent: float | None  # between scanners, different from vial to vial
    vial_percent: float | None  # common to all scanners: what the references are off by
    run_percent: float | None  # between runs of one scanner, common to all vials of a run
    rest_percent: float | None  # one vial in one run
    s_r_percent: float | None
    s_r_interval: Interval | None
    s_R_percent: float | None  # noqa: N815
    s_R_interval: Interval | None  # noqa: N815
    between_cv_percent: float | None  # between scanners: scanner and scanner x vial together
    between_cv_interval: Interval | None
    not_given: Reasons = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class SmallestChange:
    """The smallest difference between two readings of one object that is real with 95 % confidence."""

    single_scanner_percent: float | None  # both on one scanner: 2.77 s_r
    single_scanner_interval: Interval | None
    any_two_percent: float | None  # on any two: 2.77 s_R
    any_two_interval: Interval | None
    not_given: Reasons = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class Pair:
    """Two scanners on the vials both measured; differences are first minus second."""

    first: str
    second: str
    phantoms: tuple[str, ...]
    vials: int
    bias_percent: float | None
    bias_interval: Interval | None
    lower_limit_percent: float | None  # limits of agreement: 95 % of differences between single readings
    upper_limit_percent: float | None
    lower_limit_interval: Interval | None
    upper_limit_interval: Interval | None
    concordance: float | None  # of the vials' mean values
    concordance_interval: Interval | None
    not_given: Reasons = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class Departure:
    """A scanner whose level left that of the others."""

    scanner: str
    quantity: str
    scan: str
    kind: Literal["step", "slope"]
    onset: date
    onset_interval: tuple[date, date]  # holds 90 %
    size_percent: float  # of the change, against the median of the others
    size_interval: Interval
    percent_per_year: float | None  # of a slope
    now_percent: float  # from where it stood among the others before, median of its last five runs
    returned: date | None  # the first run after which it was back
    others: tuple[str, ...]
    reasons: tuple[str, ...]
    sentence: str


@dataclass(frozen=True, slots=True)
class Comparison:
    """All scanners in one scan."""

    quantity: str
    scan: str
    levels: tuple[Level, ...]
    scanners: tuple[ScannerRow, ...]
    variances: Variances
    smallest_change: SmallestChange
    pairs: tuple[Pair, ...]
    remarks: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Agreement:
    """How the scanners agree, and who has left the others."""

    since: date | None  # as asked
    until: date | None
    first: date | None  # of the runs that counted
    last: date | None
    runs: int
    scanners: tuple[str, ...]
    comparisons: tuple[Comparison, ...]
    departures: tuple[Departure, ...]  # still apart, the largest first
    returned: tuple[Departure, ...]  # were apart for a while
    remarks: tuple[str, ...]  # what could not be compared, and why

    def as_dict(self) -> dict[str, Any]:
        """Plain numbers, ISO 8601 dates and None."""
        plain: dict[str, Any] = _plain(asdict(self))
        return plain


def _plain(value: Any) -> Any:
    if isinstance(value, Mapping):
        return {str(key): _plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(item) for item in value]
    if isinstance(value, date):
        return value.isoformat()
    if isinstance(value, float):
        return value if value == value and abs(value) != float("inf") else None
    return value
