"""Judges runs: limits in force on their day, charts with a promised number of false alarms, remarks of the run.

Causal: a run is judged with what was known at that run, so judging again later gives the same answer.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, date, datetime, tzinfo
from typing import TYPE_CHECKING

import numpy as np

from qa.site.limits import LimitBlock
from qa.trend.baseline import segments
from qa.trend.budget import Promise, Shares, shares, smooth
from qa.trend.judgements import Judgement
from qa.trend.levels import lanes
from qa.trend.sentences import quantity_name
from qa.trend.standing import tolerance
from qa.trend.streams import Block, blocks, restarts, stamps
from qa.trend.weighing import Charted, Said, Weighing
from qa.words import Consequence, Verdict, worst

if TYPE_CHECKING:
    import pandas as pd

Remarks = Mapping[str, Sequence[Mapping[str, str]]]


def judge(
    history: pd.DataFrame,
    log: pd.DataFrame | None,
    limits: Sequence[LimitBlock],
    *,
    runs: pd.DataFrame | Collection[str] | None = None,
    baseline_runs: int = 8,
    schedule_days: float = 7.0,
    promise: Promise | None = None,
    timezone: tzinfo = UTC,
) -> dict[str, Judgement]:
    """Judge each run from the readings up to it.

    Parameters
    ----------
    history : tidy frame of readings, all runs of the scanners concerned
    log : tidy frame of log entries; entries with `restart_baseline` restart the baselines they speak of
    limits : the blocks of limits.toml
    runs : the tidy frame of runs (adds runs without any reading, and remarks with their consequence), or the ids
        of the runs to answer for; absent: every run of `history`
    baseline_runs : usable runs that make a baseline
    schedule_days : days between runs, for sharing out the promised false alarms
    promise : false alarms per scanner-year; absent: one `watch` a year, one `act` in four
    timezone : of the site, for the day on which limits hold

    Returns
    -------
    Judgement by run, in order of scanner, phantom and time.
    """
    promise = promise or Promise()
    limits = tuple(limits)
    remarks, extra, wanted = _about_runs(runs)
    bench = _Bench(log, limits, baseline_runs, timezone, remarks, wanted)
    made = blocks(history)
    judged: dict[str, Judgement] = {}
    for block in made:
        same = [other for other in made if other.scanner == block.scanner]
        share = shares(
            promise,
            365.25 / schedule_days,
            sum(len(other.scans) for other in same),
            sum(len(other.streams) for other in same),
        )
        judged.update(bench.judge(block, share))
    for run, scanner, phantom, when in extra:
        if run not in judged:
            digest = _digest(limits, scanner, _day(when, timezone))
            reasons = _void_reasons(remarks.get(run, []), no_reading=True)
            judged[run] = Judgement(run, scanner, phantom, Verdict.VOID, reasons, digest)
    return judged


def _about_runs(
    runs: pd.DataFrame | Collection[str] | None,
) -> tuple[Remarks, list[tuple[str, str, str, np.datetime64]], frozenset[str] | None]:
    """Remarks by run, runs to answer for though they may have no reading, and which are wanted (None: all)."""
    import pandas as pd

    if runs is None:
        return {}, [], None
    if not isinstance(runs, pd.DataFrame):
        return {}, [], frozenset(str(run) for run in runs)
    names = [str(run) for run in runs["run"]]
    remarks: Remarks = {}
    if "remarks" in runs:
        remarks = {
            name: list(found)
            for name, found in zip(names, runs["remarks"], strict=True)
            if isinstance(found, list | tuple)
        }
    when = stamps(runs["acquired"]) if names else np.array([], dtype="datetime64[ns]")
    extra = list(zip(names, map(str, runs["scanner"]), map(str, runs["phantom"]), when, strict=True))
    return remarks, extra, frozenset(names)


def _day(when: np.datetime64, timezone: tzinfo) -> date:
    instant = datetime.fromtimestamp(when.astype("datetime64[ns]").astype(np.int64) / 1e9, tz=UTC)
    return instant.astimezone(timezone).date()


def _digest(limits: Sequence[LimitBlock], scanner: str, day: date) -> str:
    """Sixteen hex digits that change when a limit block that holds for this scanner on that day changes."""
    held = [
        block.model_dump(mode="json") for block in limits if block.since <= day and block.scanner in (None, scanner)
    ]
    return hashlib.sha256(json.dumps(held, sort_keys=True).encode()).hexdigest()[:16]


def _void_reasons(remarks: Sequence[Mapping[str, str]], *, no_reading: bool) -> tuple[str, ...]:
    voiding = [r["text"] for r in remarks if r.get("consequence") == Consequence.VOID and not r.get("subject")]
    if not voiding:
        voiding = [r["text"] for r in remarks if r.get("consequence") == Consequence.VOID]
    if not voiding:
        voiding = ["This run gave no reading that could be judged." if no_reading else "This run is marked void."]
    return tuple(voiding)


@dataclass(frozen=True, slots=True, eq=False)
class _Bench:
    """What all blocks of a call are judged by."""

    log: pd.DataFrame | None
    limits: tuple[LimitBlock, ...]
    baseline_runs: int
    timezone: tzinfo
    remarks: Remarks
    wanted: frozenset[str] | None

    def judge(self, block: Block, share: Shares) -> dict[str, Judgement]:
        """Everything about one block, worked out for all its runs at once; sentences only for the runs wanted."""
        days = [_day(when, self.timezone) for when in block.acquired]
        against_baseline = tolerance(block, days, self.limits, "baseline")
        against_reference = tolerance(block, days, self.limits, "reference")
        quantities = [quantity for _, quantity, _ in block.scans]
        names = {
            scan: quantity_name(quantity, scan, quantities.count(quantity) > 1) for scan, quantity, _ in block.scans
        }
        digests: dict[date, str] = {}
        judged: dict[str, Judgement] = {}
        for segment in segments(block, restarts(self.log, block.scanner, block.phantom), self.baseline_runs):
            wanted = [
                where
                for where in range(segment.first, segment.last)
                if self.wanted is None or block.runs[where] in self.wanted
            ]
            if not wanted:
                continue
            charts = [
                Charted(
                    lane,
                    smooth(lane.level, share.level_arl) if lane.level is not None else None,
                    smooth(lane.vials, share.vial_arl),
                )
                for lane in lanes(segment, block.scans)
            ]
            weighing = Weighing(
                block, segment, charts, share, against_baseline, against_reference, names, self.baseline_runs
            )
            columns = weighing.columns()
            for where in wanted:
                verdict, reasons = self._verdict(block, where, weighing)
                rows = columns.rows(block, segment.first, where - segment.first)
                run, day = block.runs[where], days[where]
                if day not in digests:
                    digests[day] = _digest(self.limits, block.scanner, day)
                judged[run] = Judgement(run, block.scanner, block.phantom, verdict, reasons, digests[day], rows)
        return judged

    def _verdict(self, block: Block, where: int, weighing: Weighing) -> tuple[Verdict, tuple[str, ...]]:
        remarks = self.remarks.get(block.runs[where], [])
        voided = any(r.get("consequence") == Consequence.VOID and not r.get("subject") for r in remarks)
        readings = bool(np.isfinite(block.value[where]).any())
        if block.void[where] or voided or not readings:
            return Verdict.VOID, _void_reasons(remarks, no_reading=not block.void[where])
        said: Said = [
            (Verdict.WATCH, r["text"]) for r in remarks if r.get("consequence") in (Consequence.WATCH, Consequence.VOID)
        ]
        said += weighing.said(where - weighing.segment.first)
        order = {Verdict.ACT: 0, Verdict.WATCH: 1, Verdict.STEADY: 2, Verdict.VOID: 3}
        said.sort(key=lambda pair: order[pair[0]])
        return worst([verdict for verdict, _ in said]), tuple(text for _, text in said)
