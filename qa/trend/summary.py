"""How each stream stands, and the common levels and series to plot."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass
from datetime import date
from typing import TYPE_CHECKING, Any

import numpy as np

from qa.site.limits import LimitBlock, in_force
from qa.trend.baseline import LOSS, Segment
from qa.trend.budget import Promise, shares, smooth
from qa.trend.findings import Finding, day_of
from qa.trend.levels import Lane
from qa.trend.streams import Block
from qa.words import Quantity, Verdict

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True, slots=True)
class StreamSummary:
    """One stream today. Percent; None where unknown."""

    scanner: str
    phantom: str
    vial: str
    quantity: str
    scan: str
    runs: int  # usable runs since the baseline began
    baseline_runs: int
    baseline_complete: bool
    baseline_since: date | None  # first run of the baseline
    baseline_mean_ms: float | None
    baseline_sd_percent: float | None  # scatter of one reading, from the data and the stated uncertainty
    latest: date | None
    latest_ms: float | None
    from_baseline_percent: float | None  # of the last five runs (median)
    u_from_baseline_percent: float | None
    watch_percent: float | None
    act_percent: float | None
    verdict: Verdict
    findings: tuple[str, ...]

    def as_dict(self) -> dict[str, Any]:
        """Plain numbers, ISO 8601 dates and None."""
        fields = asdict(self)
        for name, value in fields.items():
            if isinstance(value, date):
                fields[name] = value.isoformat()
        return {**fields, "verdict": self.verdict.value, "findings": list(self.findings)}


Stretches = Mapping[tuple[str, str], tuple[Segment, ...]]
Parts = Mapping[tuple[str, str], tuple[tuple[Lane, ...], ...]]


def summaries(
    made: Sequence[Block],
    stretches: Stretches,
    parts: Parts,
    limits: tuple[LimitBlock, ...],
    today: date,
    findings: Sequence[Finding],
) -> tuple[StreamSummary, ...]:
    """One summary per stream, from its current stretch."""
    rows = []
    for block in made:
        segment, split = stretches[block.scanner, block.phantom][-1], parts[block.scanner, block.phantom][-1]
        open_here = [
            f for f in findings if f.state == "open" and block.scanner in f.scanners and block.phantom in f.phantoms
        ]
        for lane in split:
            for place, column in enumerate(lane.columns):
                rows.append(_summary(block, segment, lane, place, int(column), limits, today, open_here))
    return tuple(rows)


def _summary(
    block: Block,
    segment: Segment,
    lane: Lane,
    place: int,
    column: int,
    limits: tuple[LimitBlock, ...],
    today: date,
    findings: Sequence[Finding],
) -> StreamSummary:
    stream = block.streams[column]
    here = np.flatnonzero(np.isfinite(segment.percent[:, column]))
    complete = bool(segment.known[-1, column] or (here.size and segment.used[here, column].sum() < here.size))
    held = in_force(limits, today, Quantity(stream.quantity), stream.vial, block.scanner).get("baseline")
    mine = [f for f in findings if f.scan == stream.scan and stream.vial in f.vials]
    verdict = (
        Verdict.ACT
        if any(f.verdict is Verdict.ACT for f in mine)
        else Verdict.WATCH
        if any(f.verdict is Verdict.WATCH for f in mine)
        else Verdict.STEADY
    )
    last = segment.percent[here[-5:], column]
    sd = float(lane.sd_total[-1, place]) / np.sqrt(1.0 + LOSS / max(segment.count[column], 1.0)) if here.size else None
    u = sd * np.sqrt(1.0 / last.size + LOSS / max(segment.count[column], 1.0)) if sd is not None else None
    return StreamSummary(
        block.scanner,
        block.phantom,
        stream.vial,
        stream.quantity,
        stream.scan,
        int(here.size),
        int(segment.count[column]),
        complete,
        day_of(float(block.days[segment.first + here[0]])) if here.size else None,
        float(segment.mean_ms[column]) if here.size else None,
        sd,
        day_of(float(block.days[segment.first + here[-1]])) if here.size else None,
        float(block.value[segment.first + here[-1], column]) if here.size else None,
        float(np.median(last)) if complete else None,
        u if complete else None,
        held.watch_percent if held else None,
        held.act_percent if held else None,
        verdict,
        tuple(f.finding for f in mine),
    )


LEVEL_COLUMNS = (
    "scanner",
    "phantom",
    "scan",
    "quantity",
    "stretch",
    "run",
    "acquired",
    "level_percent",
    "u_percent",
    "smoothed_percent",
    "smoothed_limit_percent",
    "signal",
)


def levels_frame(
    made: Sequence[Block], stretches: Stretches, parts: Parts, schedule_days: float, promise: Promise
) -> pd.DataFrame:
    """The scanner-wide level of each scan at each run, with its smoothed value and chart limit (causal); percent."""
    import pandas as pd

    frames = []
    for block in made:
        same = [other for other in made if other.scanner == block.scanner]
        share = shares(
            promise, 365.25 / schedule_days, sum(len(o.scans) for o in same), sum(len(o.streams) for o in same)
        )
        pairs = zip(stretches[block.scanner, block.phantom], parts[block.scanner, block.phantom], strict=True)
        for number, (segment, split) in enumerate(pairs):
            for lane in split:
                if lane.level is None:
                    continue
                chart = smooth(lane.level, share.level_arl)
                columns = (
                    block.scanner,
                    block.phantom,
                    lane.scan,
                    lane.quantity,
                    number,
                    block.runs[segment.first : segment.last],
                    block.acquired[segment.first : segment.last],
                    lane.level.percent,
                    lane.level.sd,
                    chart.percent,
                    chart.limit,
                    chart.signal,
                )
                frames.append(pd.DataFrame(dict(zip(LEVEL_COLUMNS, columns, strict=True))))
    if not frames:
        return pd.DataFrame(columns=list(LEVEL_COLUMNS))
    frame = pd.concat(frames, ignore_index=True)
    frame["acquired"] = pd.to_datetime(frame["acquired"], utc=True)
    return frame
