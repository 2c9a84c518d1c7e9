"""Finds what has moved over a whole history, and says when, by how much and why.

Single vials are asked first, over all scanners of their phantom at once; then the common levels, without the vials
that were found to move by themselves, so that one ageing vial is not taken for a drifting scanner.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from datetime import date, timedelta
from typing import TYPE_CHECKING, Any

import numpy as np

from qa.site.limits import LimitBlock
from qa.trend.baseline import Segment, segments
from qa.trend.budget import Promise
from qa.trend.findings import Finding, key
from qa.trend.levels import Lane, lanes
from qa.trend.pooled import Course, courses
from qa.trend.raising import Raising
from qa.trend.seeking import level_findings, vial_findings
from qa.trend.single import limit_findings, restart_findings, run_findings, spread_findings
from qa.trend.streams import Block, blocks, restarts, stamps
from qa.trend.summary import StreamSummary, levels_frame, summaries
from qa.words import Verdict

if TYPE_CHECKING:
    import pandas as pd

_LOOKS_PER_YEAR = 10.0  # weekly looks at a growing history are worth about so many independent ones


@dataclass(frozen=True, slots=True, eq=False)
class Trend:
    """What has moved, how each stream stands, and the common levels to plot."""

    findings: tuple[Finding, ...]  # open ones first, the gravest first
    streams: tuple[StreamSummary, ...]
    levels: pd.DataFrame  # one row per run and scan: see `qa.trend.summary.levels_frame`

    def as_dict(self) -> dict[str, Any]:
        """The document of ``vialbook drift --json`` without its version."""
        return {"findings": [f.as_dict() for f in self.findings], "streams": [s.as_dict() for s in self.streams]}


def find(
    history: pd.DataFrame,
    log: pd.DataFrame | None,
    limits: Sequence[LimitBlock],
    *,
    today: date,
    baseline_runs: int = 8,
    schedule_days: float = 7.0,
    promise: Promise | None = None,
) -> Trend:
    """Name what has moved up to `today`.

    Parameters
    ----------
    history, log : tidy frames; what lies after `today` is not looked at
    limits : the blocks of limits.toml; those in force on `today` grade the findings
    today : date; nothing here reads a clock
    baseline_runs : usable runs that make a baseline
    schedule_days : days between runs
    promise : false alarms per scanner-year

    Returns
    -------
    Trend
        An empty one for an empty history; a history too short to judge gives streams without findings.
    """
    promise = promise or Promise()
    known = history[stamps(history["acquired"]) < np.datetime64(today + timedelta(days=1), "ns")]
    made = blocks(known)
    stretches: dict[tuple[str, str], tuple[Segment, ...]] = {}
    parts: dict[tuple[str, str], tuple[tuple[Lane, ...], ...]] = {}
    every: list[Course] = []
    for block in made:
        place = block.scanner, block.phantom
        stretches[place] = segments(block, restarts(log, *place), baseline_runs)
        parts[place] = tuple(lanes(segment, block.scans) for segment in stretches[place])
        every += courses(block, stretches[place], parts[place])
    raising = Raising(log, tuple(limits), today, schedule_days, *_alphas(promise, made, every))
    findings = vial_findings(every, raising) + level_findings(every, raising)
    for block in made:
        findings += restart_findings(block, stretches[block.scanner, block.phantom], log)
    for course in every:
        if course.current:
            findings += limit_findings(course, raising.limits, today, _explained(course, findings))
            findings += run_findings(course, log)
            findings += spread_findings(course, log)
    findings = _told_apart(findings)
    order = {Verdict.ACT: 0, Verdict.WATCH: 1, Verdict.VOID: 2, Verdict.STEADY: 3}
    findings.sort(key=lambda one: (one.state != "open", order[one.verdict], -abs(one.size_percent), one.finding))
    streams = summaries(made, stretches, parts, raising.limits, today, findings)
    return Trend(tuple(findings), streams, levels_frame(made, stretches, parts, schedule_days, promise))


def _alphas(promise: Promise, made: Sequence[Block], every: Sequence[Course]) -> tuple[float, float]:
    """The chance of a false finding allowed to each search of a level and of a vial: 0.3 of the promise in all."""
    per_look = 0.3 * promise.watch_per_year / _LOOKS_PER_YEAR
    scanners = max(len({block.scanner for block in made}), 1)
    levels = sum(course.current for course in every) / scanners
    vials = sum(len(course.labels) for course in every if course.current) / scanners
    return 0.5 * per_look / max(levels, 1.0), 0.5 * per_look / max(vials, 1.0)


def _explained(course: Course, findings: Sequence[Finding]) -> dict[str, float]:
    """How far open findings have moved each vial of a course, percent."""
    moved: dict[str, float] = {}
    for one in findings:
        here = course.scanner in one.scanners and course.phantom in one.phantoms and one.scan == course.scan
        if one.state == "open" and here:
            for label in one.vials:
                moved[label] = moved.get(label, 0.0) + one.size_percent
    return moved


def _told_apart(findings: Sequence[Finding]) -> list[Finding]:
    """Findings whose keys differ: of several changes of one kind in one place, the later are numbered."""
    seen: dict[str, int] = {}
    apart = []
    for one in sorted(findings, key=lambda one: one.onset):
        number = seen[one.finding] = seen.get(one.finding, 0) + 1
        apart.append(one if number == 1 else replace(one, finding=key(one.finding, number)))
    return apart
