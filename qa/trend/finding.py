"""Finds what has moved over a whole history, and says when, by how much and why.

Single vials are asked first, over all scanners of their phantom at once; then the common levels, without the vials
that were found to move by themselves, so that one ageing vial is not taken for a drifting scanner.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date, timedelta
from typing import TYPE_CHECKING, Any

import numpy as np

from qa.site.limits import LimitBlock, in_force
from qa.trend.attribute import ask, why_level, why_vial
from qa.trend.baseline import Segment, segments
from qa.trend.budget import Promise
from qa.trend.change import Change, find_change
from qa.trend.changes import find_changes
from qa.trend.findings import Cause, Finding, FindingState, day_of, key
from qa.trend.forecast import forecast
from qa.trend.levels import FEWEST_VIALS, lanes
from qa.trend.logbook import near
from qa.trend.pooled import Course, courses
from qa.trend.sentences import quantity_name
from qa.trend.single import limit_findings, restart_findings, run_findings, spread_findings
from qa.trend.streams import Ints, blocks, natural, restarts
from qa.trend.summary import StreamSummary, levels_frame, summaries
from qa.trend.telling import events, sentence, shape
from qa.words import Floats, Quantity, Verdict

if TYPE_CHECKING:
    import pandas as pd

RELEVANT = 0.1  # a change smaller than this part of the watch limit is no finding
_LOOKS_PER_YEAR = 10.0  # weekly looks at a growing history are worth about so many independent ones


@dataclass(frozen=True, slots=True, eq=False)
class Trend:
    """What has moved, how each stream stands, and the common levels to plot."""

    findings: tuple[Finding, ...]  # open ones first, the gravest first
    streams: tuple[StreamSummary, ...]
    levels: (
        pd.DataFrame
    )  # scanner, phantom, scan, quantity, run, acquired, level_percent, u_percent, smoothed_…, limit_…

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
    limits = tuple(limits)
    past = history
    if len(history):
        end = np.datetime64(today + timedelta(days=1), "ns")
        from qa.trend.streams import stamps

        past = history[stamps(history["acquired"]) < end]
    found = _Finder(past, log, limits, today, baseline_runs, schedule_days, promise)
    return found.trend()


class _Finder:
    def __init__(
        self,
        history: pd.DataFrame,
        log: pd.DataFrame | None,
        limits: tuple[LimitBlock, ...],
        today: date,
        baseline_runs: int,
        schedule_days: float,
        promise: Promise,
    ) -> None:
        self.log, self.limits, self.today, self.schedule_days = log, limits, today, schedule_days
        self.blocks = blocks(history)
        self.stretches: dict[tuple[str, str], tuple[Segment, ...]] = {}
        self.courses: list[Course] = []
        self.parts = {}
        for block in self.blocks:
            cut = segments(block, restarts(log, block.scanner, block.phantom), baseline_runs)
            split = tuple(lanes(segment, block.scans) for segment in cut)
            self.stretches[block.scanner, block.phantom] = cut
            self.parts[block.scanner, block.phantom] = split
            self.courses += courses(block, cut, split)
        per_look = 0.3 * promise.watch_per_year / _LOOKS_PER_YEAR
        scanners = max(len({b.scanner for b in self.blocks}), 1)
        self.level_alpha = 0.5 * per_look / max(sum(c.current for c in self.courses) / scanners, 1.0)
        streams = sum(len(c.labels) for c in self.courses if c.current) / scanners
        self.vial_alpha = 0.5 * per_look / max(streams, 1.0)

    def trend(self) -> Trend:
        findings: list[Finding] = self._vials()
        findings += self._levels()
        for block in self.blocks:
            findings += restart_findings(block, self.stretches[block.scanner, block.phantom], self.log)
        for course in self.courses:
            if course.current:
                explained: dict[str, float] = {}
                for one in findings:
                    here = course.scanner in one.scanners and course.phantom in one.phantoms
                    if one.state == "open" and here and one.scan == course.scan:
                        for label in one.vials:
                            explained[label] = explained.get(label, 0.0) + one.size_percent
                findings += limit_findings(course, self.limits, self.today, explained)
                findings += run_findings(course, self.log)
                findings += spread_findings(course, self.log)
        order = {Verdict.ACT: 0, Verdict.WATCH: 1, Verdict.VOID: 2, Verdict.STEADY: 3}
        findings.sort(key=lambda f: (f.state != "open", order[f.verdict], -abs(f.size_percent), f.finding))
        streams = summaries(self.blocks, self.stretches, self.parts, self.limits, self.today, findings)
        return Trend(
            tuple(findings), streams, levels_frame(self.blocks, self.stretches, self.parts, self.schedule_days)
        )

    # Single vials

    def _vials(self) -> list[Finding]:
        findings: list[Finding] = []
        families: dict[tuple[str, str], list[Course]] = {}
        for course in self.courses:
            if len(course.labels) >= 2:
                families.setdefault((course.phantom, course.scan), []).append(course)
        for family in families.values():
            for label in sorted({label for c in family for label in c.labels}, key=natural):
                findings += self._vial(label, [c for c in family if label in c.labels])
        for course in self.courses:
            if course.aged:
                course.relevel()
        return findings

    def _vial(self, label: str, family: list[Course]) -> list[Finding]:
        if max(len(c.labels) for c in family) < FEWEST_VIALS:
            return []
        several = len({c.scanner for c in family}) > 1
        findings: list[Finding] = []
        rest = {id(c): _own(c, label) for c in family}
        shared = _changes(family, rest, self.vial_alpha)
        for change in shared:
            findings += self._vial_change(label, change, shared, family, rest, several)
        if several:  # in one scanner only
            for course in family:
                series = rest[id(course)] - np.sum([c.at(course.days) for c in course.aged.get(label, [])], axis=0)
                own = _changes([course], {id(course): series}, self.vial_alpha)
                for change in own:
                    left = {**rest, id(course): series}
                    findings += self._vial_change(label, change, own, family, left, several, course)
        return findings

    def _vial_change(
        self,
        label: str,
        change: Change,
        changes: Sequence[Change],
        family: list[Course],
        rest: dict[int, Floats],
        several: bool,
        only: Course | None = None,
    ) -> list[Finding]:
        crossing = [c for c in family if c.days[-1] >= change.onset and c.days[0] < change.onset]
        along = [other for other in changes if other is not change]
        answers = [
            ask(change, c, rest[id(c)], np.full(len(c.days), c.sd[c.labels.index(label)]), along)
            for c in crossing
            if c is not only
        ]
        moved = [w.course for w in answers if w.answer == "moved"] + ([only] if only is not None else [])
        still = [w.course for w in answers if w.answer == "still"]
        if not moved:
            moved = crossing[:1] or family[:1]
        if still and only is None:  # its size is that on the scanners where it moved
            change = min(
                _changes(moved, rest, self.vial_alpha), key=lambda one: abs(one.onset - change.onset), default=change
            )
        watch = self._limits(moved[0], (label,))[0]
        if abs(change.size) < RELEVANT * watch:
            return []
        for course in moved:
            course.aged.setdefault(label, []).append(change)
        cause, reasons = why_vial(change, label, moved, still, len(crossing) - len(moved) - len(still), several)
        now = _stands([(c.days, _own(c, label)) for c in moved if c.current], change)
        return [self._finding(change, moved, (label,), cause, reasons, now, f"vial {label}")]

    # Common levels

    def _levels(self) -> list[Finding]:
        found: list[tuple[Change, Course]] = []
        for course in self.courses:
            here = np.isfinite(course.level) & ~course.wild_run
            alpha = self.level_alpha
            least = RELEVANT * self._limits(course, course.labels)[0]
            changes = find_changes(course.days[here], course.level[here], course.level_sd[here], alpha=alpha)
            found += [(change, course) for change in changes if abs(change.size) >= least]
        findings: list[Finding] = []
        taken: set[int] = set()
        found.sort(key=lambda pair: pair[0].chance)
        for number, (change, course) in enumerate(found):
            if number in taken:
                continue
            along = [other for other, where in found if where is course and other is not change]
            cause, reasons, with_it = why_level(change, course, self.courses, along)
            together = [course]
            if cause in ("scanner", "phantom"):
                together += with_it
                taken |= {
                    n
                    for n, (c, other) in enumerate(found)
                    if n > number
                    and other in with_it
                    and c.earliest <= change.latest + 28
                    and change.earliest <= c.latest + 28
                    and np.sign(c.size) == np.sign(change.size)
                }
            now = _stands([(c.days, c.level) for c in together], change)
            subject = f"all vials of {course.phantom}" if cause == "phantom" else "all vials"
            findings.append(self._finding(change, together, course.labels, cause, reasons, now, subject))
        return findings

    # What both share

    def _limits(self, course: Course, labels: Sequence[str]) -> tuple[float, float]:
        """Median watch and act limits against the baseline today; (3, inf) where there is none."""
        watch, act = [], []
        for label in labels:
            held = in_force(self.limits, self.today, Quantity(course.quantity), label, course.scanner)
            block = held.get("baseline") or held.get("reference")
            if block is not None:
                watch.append(block.watch_percent)
                act.append(block.act_percent)
        return (float(np.median(watch)), float(np.median(act))) if watch else (3.0, float("inf"))

    def _finding(
        self,
        change: Change,
        where: Sequence[Course],
        labels: tuple[str, ...],
        cause: Cause,
        reasons: tuple[str, ...],
        stands: tuple[float, float],
        subject: str,
    ) -> Finding:
        course, (now, u_now) = where[0], stands
        scanners = tuple(sorted({c.scanner for c in where}))
        phantoms = tuple(sorted({c.phantom for c in where}))
        watch, act = self._limits(course, labels)
        state = self._state(change, where, now)
        coming = None
        if change.kind == "slope" and state == "open":
            coming = forecast(change, now, u_now, act if np.isfinite(act) else watch, self.today)
        verdict = Verdict.STEADY
        if state == "open":
            certain = coming is not None and coming.latest is not None and coming.latest <= self._next_run(where)
            verdict = Verdict.ACT if max(abs(now), 0.0) > act or certain else Verdict.WATCH
        low, high = change.interval()
        onset = day_of(change.onset)
        interval = (day_of(change.earliest), day_of(change.latest))
        entries = near(self.log, scanners, phantoms, interval)
        names = [q for s, q, _ in course.block.scans]
        name = quantity_name(course.quantity, course.scan, names.count(course.quantity) > 1)
        return Finding(
            key(
                scanners if cause != "vial" else "",
                phantoms if cause in ("vial", "phantom") else "",
                labels if len(labels) == 1 else "all",
                course.scan,
                self._number(course, change),
            ),
            scanners[0] if len(scanners) == 1 else None,
            phantoms[0] if len(phantoms) == 1 else None,
            scanners,
            phantoms,
            labels,
            course.quantity,
            course.scan,
            change.kind,
            verdict,
            onset,
            interval,
            change.size,
            (low, high),
            change.rate if change.kind == "slope" else None,
            change.rate_interval(),
            cause,
            (*reasons, *shape(change), *events(entries)),
            entries,
            coming,
            self._first_raised(change, where, labels),
            state,
            sentence(name, subject, scanners, change, onset, interval),
        )

    def _number(self, course: Course, change: Change) -> int:
        """Which stretch between restarts the change lies in, counted from the first: part of its key."""
        return course.segment.first

    def _state(self, change: Change, where: Sequence[Course], now: float) -> FindingState:
        if not any(c.current for c in where):
            return "past"
        returned = change.kind == "step" and abs(now) < 0.25 * abs(change.size)
        return "returned" if returned else "open"

    def _next_run(self, where: Sequence[Course]) -> date:
        return day_of(max(float(c.days[-1]) for c in where) + self.schedule_days)

    def _first_raised(self, change: Change, where: Sequence[Course], labels: tuple[str, ...]) -> date:
        """The first run with which the same search, on what was known then, would have raised it."""
        course = where[0]
        single = len(labels) == 1
        series = _own(course, labels[0]) if single else course.level
        alpha = self.vial_alpha if single else self.level_alpha
        here = np.isfinite(series) & ~(course.wild_run if not single else np.zeros(len(series), bool))
        t, y = course.days[here], series[here]
        sd = np.full(t.size, course.sd[course.labels.index(labels[0])]) if single else course.level_sd[here]
        for end in range(int(np.searchsorted(t, change.onset)) + 2, t.size + 1):
            seen = find_change(t[:end], y[:end], sd[:end])
            if seen is not None and seen.chance <= alpha and np.sign(seen.size) == np.sign(change.size):
                return day_of(float(t[end - 1]))
        return day_of(float(course.days[-1]))


def _own(course: Course, label: str) -> Floats:
    return course.own[:, course.labels.index(label)]


def _stands(series: Sequence[tuple[Floats, Floats]], change: Change) -> tuple[float, float]:
    """Where series (days, values) stand at their last run, and the standard uncertainty.

    From the median of the last five values, carried along a slope to the last.
    """
    last, variance = [], []
    for days, values in series:
        there = np.isfinite(values)
        along = change.at(days[there]) if change.kind == "slope" else np.zeros(int(there.sum()))
        here = values[there] - along
        if here.size > 2:
            scatter = 1.4826 * float(np.median(np.abs(np.diff(here)))) / np.sqrt(2.0)
            last.append(float(np.median(here[-5:])) + float(along[-1]))
            variance.append(1.57 * scatter**2 / min(here.size, 5))
    if not last:
        return change.size, change.u_size
    return float(np.mean(last)), float(np.sqrt(np.sum(variance))) / len(last)


def _changes(family: Sequence[Course], series: dict[int, Floats], alpha: float) -> tuple[Change, ...]:
    from qa.trend.change import wild

    t, y, sd, group = [], [], [], []
    for number, course in enumerate(family):
        values = series[id(course)]
        noise = np.full(
            len(values),
            1.4826 * np.nanmedian(np.abs(np.diff(values[np.isfinite(values)]))) / np.sqrt(2.0)
            if np.isfinite(values).sum() > 2
            else 1.0,
        )
        here = np.isfinite(values) & ~wild(values, noise)
        if here.sum() >= 3 and noise[0] > 0:
            t.append(course.days[here])
            y.append(values[here])
            sd.append(noise[here])
            group.append(np.full(int(here.sum()), number, dtype=np.intp))
    if not t:
        return ()
    groups: Ints = np.concatenate(group)
    return find_changes(np.concatenate(t), np.concatenate(y), np.concatenate(sd), groups, alpha=alpha)
