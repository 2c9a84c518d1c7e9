"""Judges runs: limits in force on their day, charts with a promised number of false alarms, remarks of the run.

Causal: a run is judged with what was known at that run, so judging again later gives the same answer.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass, field
from datetime import UTC, date, datetime, tzinfo
from typing import TYPE_CHECKING

import numpy as np

from qa.site.limits import LimitBlock, in_force
from qa.trend.baseline import Segment, segments
from qa.trend.budget import Promise, Shares, Smoothed, beyond_chance, shares, smooth
from qa.trend.levels import Lane, lanes
from qa.trend.sentences import percent, plain, quantity_name, vials
from qa.trend.streams import Block, Bools, blocks, restarts, stamps
from qa.words import Consequence, Floats, Quantity, Verdict, worst

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True, slots=True)
class StreamRow:
    """How one stream stands at one run. Percent; None where there is no number or no limit."""

    vial: str
    quantity: str
    scan: str
    verdict: Verdict
    value_ms: float | None
    from_baseline_percent: float | None
    u_from_baseline_percent: float | None
    from_reference_percent: float | None
    u_from_reference_percent: float | None
    smoothed_percent: float | None  # of what is the vial's own: the common level is taken out
    smoothed_limit_percent: float | None
    watch_percent: float | None  # against the baseline
    act_percent: float | None
    baseline_runs: int  # runs behind the baseline at this run
    baseline_complete: bool


@dataclass(frozen=True, slots=True)
class Judgement:
    """What one run may be told, and why."""

    run: str
    scanner: str
    phantom: str
    verdict: Verdict
    reasons: tuple[str, ...]
    limits_digest: str  # of the limit blocks in force for this scanner on that day
    streams: tuple[StreamRow, ...] = field(default=(), repr=False)


@dataclass(frozen=True, slots=True, eq=False)
class _Tolerance:
    """Limits of one kind for every run and stream of a block, (R, S), NaN where there is none."""

    watch: Floats
    act: Floats


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
        judged.update(_Judge(block, log, limits, baseline_runs, share, timezone, remarks).all())
    for run, scanner, phantom, when in extra:
        if run not in judged:
            digest = _digest(limits, scanner, _day(when, timezone))
            reasons = _void_reasons(remarks.get(run, []), no_reading=True)
            judged[run] = Judgement(run, scanner, phantom, Verdict.VOID, reasons, digest)
    return judged if wanted is None else {run: judged[run] for run in judged if run in wanted}


def _about_runs(
    runs: pd.DataFrame | Collection[str] | None,
) -> tuple[dict[str, list[Mapping[str, str]]], list[tuple[str, str, str, np.datetime64]], set[str] | None]:
    """Remarks by run, runs to answer for though they may have no reading, and which are wanted (None: all)."""
    if runs is None:
        return {}, [], None
    if not hasattr(runs, "columns"):
        return {}, [], {str(run) for run in runs}
    names = [str(run) for run in runs["run"]]
    remarks: dict[str, list[Mapping[str, str]]] = {}
    if "remarks" in runs:
        remarks = {
            name: list(found)
            for name, found in zip(names, runs["remarks"], strict=True)
            if isinstance(found, list | tuple)
        }
    when = stamps(runs["acquired"]) if names else np.array([], dtype="datetime64[ns]")
    extra = list(zip(names, map(str, runs["scanner"]), map(str, runs["phantom"]), when, strict=True))
    return remarks, extra, set(names)


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


class _Judge:
    """Everything about one block, worked out for all its runs at once; sentences only where something is said."""

    def __init__(
        self,
        block: Block,
        log: pd.DataFrame | None,
        limits: tuple[LimitBlock, ...],
        baseline_runs: int,
        share: Shares,
        timezone: tzinfo,
        remarks: Mapping[str, list[Mapping[str, str]]],
    ) -> None:
        self.block, self.limits, self.wanted_runs, self.share = block, limits, baseline_runs, share
        self.remarks = remarks
        self.days = [_day(when, timezone) for when in block.acquired]
        self.segments = segments(block, restarts(log, block.scanner, block.phantom), baseline_runs)
        quantities = [quantity for _, quantity, _ in block.scans]
        self.names = {
            scan: quantity_name(quantity, scan, quantities.count(quantity) > 1) for scan, quantity, _ in block.scans
        }
        self.tolerance = {against: self._tolerances(against) for against in ("baseline", "reference")}

    def _tolerances(self, against: str) -> _Tolerance:
        shape = self.block.value.shape
        watch, act = np.full(shape, np.nan), np.full(shape, np.nan)
        changes = sorted({block.since for block in self.limits})
        epoch = np.searchsorted(
            np.array(changes, dtype="datetime64[D]"), np.array(self.days, dtype="datetime64[D]"), side="right"
        )
        for number in np.unique(epoch):
            if number == 0:
                continue
            rows = epoch == number
            for column, stream in enumerate(self.block.streams):
                quantity = Quantity(stream.quantity)
                held = in_force(self.limits, changes[number - 1], quantity, stream.vial, self.block.scanner)
                found = held.get(against)  # type: ignore[call-overload]
                if found is not None:
                    watch[rows, column], act[rows, column] = found.watch_percent, found.act_percent
        return _Tolerance(watch, act)

    def all(self) -> dict[str, Judgement]:
        judged: dict[str, Judgement] = {}
        for segment in self.segments:
            parts = lanes(segment, self.block.scans)
            charts = [
                (
                    lane,
                    smooth(lane.level, self.share.level_arl) if lane.level else None,
                    smooth(lane.vials, self.share.vial_arl),
                )
                for lane in parts
            ]
            judged.update(_SegmentJudge(self, segment, charts).all())
        return judged


_Charts = Sequence[tuple[Lane, Smoothed | None, Smoothed]]


class _SegmentJudge:
    """One segment: from the first run after a restart to the last before the next."""

    def __init__(self, owner: _Judge, segment: Segment, charts: _Charts) -> None:
        self.owner, self.segment, self.charts = owner, segment, charts
        block, rows = owner.block, slice(segment.first, segment.last)
        shape = segment.percent.shape
        self.deviation, self.u_deviation = block.deviation[rows], block.u_deviation[rows]
        self.sd, self.smoothed, self.limit = np.full(shape, np.nan), np.full(shape, np.nan), np.full(shape, np.nan)
        self.chart_signal = np.zeros(shape, dtype=bool)
        guard = np.full(shape, np.inf)
        for lane, _, chart in charts:
            self.sd[:, lane.columns] = lane.sd_total
            self.smoothed[:, lane.columns], self.limit[:, lane.columns] = chart.percent, chart.limit
            self.chart_signal[:, lane.columns] = chart.signal
            guard[:, lane.columns] = beyond_chance(owner.share.reading, np.asarray(lane.vials.freedom))
        self.percent = np.where(segment.known, segment.percent, np.nan)
        self.baseline = {
            key: value[rows] for key, value in zip(("watch", "act"), _pair(owner.tolerance["baseline"]), strict=True)
        }
        self.reference = {
            key: value[rows] for key, value in zip(("watch", "act"), _pair(owner.tolerance["reference"]), strict=True)
        }
        stated = np.where(np.isfinite(segment.u), segment.u, 0.0)
        self.from_baseline = _standing(self.percent, self.sd, np.fmax(self.sd, stated), guard, self.baseline)
        usual = float(beyond_chance(owner.share.reading, np.array(np.inf)))
        self.from_reference = _standing(
            self.deviation, self.u_deviation, self.u_deviation, np.full(shape, usual), self.reference
        )

    def all(self) -> dict[str, Judgement]:
        block, first = self.owner.block, self.segment.first
        level = np.maximum(self.from_baseline.level, self.from_reference.level)
        level = np.where(self.chart_signal, np.maximum(level, 1), level)
        digests: dict[date, str] = {}
        judged = {}
        done = np.cumsum(self.segment.used, axis=0)
        rows = _Rows(self, level, done)
        for index in range(self.segment.last - first):
            run, day = block.runs[first + index], self.owner.days[first + index]
            if day not in digests:
                digests[day] = _digest(self.owner.limits, block.scanner, day)
            verdict, reasons = self._run(index, run, done)
            judged[run] = Judgement(run, block.scanner, block.phantom, verdict, reasons, digests[day], rows.of(index))
        return judged

    def _run(self, index: int, run: str, done: Floats) -> tuple[Verdict, tuple[str, ...]]:
        block, where = self.owner.block, self.segment.first + index
        remarks = self.owner.remarks.get(run, [])
        here = np.isfinite(block.value[where])
        voided = any(r.get("consequence") == Consequence.VOID and not r.get("subject") for r in remarks)
        if block.void[where] or voided or not here.any():
            return Verdict.VOID, _void_reasons(remarks, no_reading=not block.void[where])
        said: list[tuple[Verdict, str]] = []
        for remark in remarks:
            if remark.get("consequence") in (Consequence.WATCH, Consequence.VOID):
                said.append((Verdict.WATCH, remark["text"]))
        for lane, common, _ in self.charts:
            said += self._scan(index, lane, common)
        said += self._uncertain(index) + self._lost(index, here) + self._learning(index, here, done)
        order = {Verdict.ACT: 0, Verdict.WATCH: 1, Verdict.STEADY: 2, Verdict.VOID: 3}
        said.sort(key=lambda pair: order[pair[0]])
        return worst([verdict for verdict, _ in said]), tuple(text for _, text in said)

    def _scan(self, index: int, lane: Lane, common: Smoothed | None) -> list[tuple[Verdict, str]]:
        name = self.owner.names[lane.scan]
        said: list[tuple[Verdict, str]] = []
        level = lane.level.percent[index] if lane.level is not None else np.nan
        u_level = float(lane.level.sd[index]) if lane.level is not None else np.nan
        explained = np.zeros(lane.columns.size, dtype=bool)
        standing = self.from_baseline
        beyond = standing.level[index, lane.columns]
        side = np.sign(self.percent[index, lane.columns])
        watch, act = (
            np.nanmedian(self.baseline[key][index, lane.columns])
            if np.isfinite(self.baseline[key][index, lane.columns]).any()
            else np.inf
            for key in ("watch", "act")
        )
        together = False
        if np.isfinite(level) and lane.columns.size >= 3:
            with_it = (beyond > 0) & (side == np.sign(level))
            judged = int(np.isfinite(self.percent[index, lane.columns]).sum())
            many = with_it.sum() >= max(3, 0.5 * judged)
            together = bool(abs(level) > watch or many)
            if together:
                own = self.chart_signal[index, lane.columns]
                explained = with_it & ~own
                grade = max(1 + int(abs(level) > act), int(beyond[explained].max(initial=1)))
                limit, word = (act, "action") if abs(level) > act else (watch, "watch")
                text = f"{name} of the whole scanner is {percent(level, u_level)} from its baseline"
                if abs(level) > watch:
                    text += f", beyond the {word} limit of {plain(limit)}"
                counted = _counted(beyond, with_it, judged)
                said.append((_verdict(grade), f"{text}{counted}."))
        if not together and lane.level is not None:
            said += self._level_chart(index, lane, common, name, level, u_level)
        for place in np.flatnonzero(~explained):
            said += self._vial(index, int(lane.columns[place]), name, lane)
        return said

    def _level_chart(
        self, index: int, lane: Lane, common: Smoothed | None, name: str, level: float, u_level: float
    ) -> list[tuple[Verdict, str]]:
        if common is None or lane.level is None or not np.isfinite(level):
            return []
        if common.signal[index]:
            text = (
                f"{name} of the whole scanner has moved: its smoothed level is {common.percent[index]:+.2f} % from its "
                f"baseline, beyond what chance gives ({common.limit[index]:.2f} %)."
            )
            return [(Verdict.WATCH, text)]
        guard = beyond_chance(self.owner.share.run, np.asarray(lane.level.freedom))[index]
        spread = u_level * np.sqrt(1.0 + 1.0 / max(float(lane.level.runs), 1.0))
        if abs(level) > guard * spread:
            text = (
                f"All vials together lie {percent(level, spread)} from their {name} baseline in this run alone: "
                "repeat the run before concluding (temperature, position, recipe)."
            )
            return [(Verdict.WATCH, text)]
        return []

    def _vial(self, index: int, column: int, name: str, lane: Lane) -> list[tuple[Verdict, str]]:
        said = []
        label = self.owner.block.streams[column].vial
        for standing, numbers, u, limits, origin in (
            (self.from_baseline, self.percent, self.sd, self.baseline, "its baseline"),
            (self.from_reference, self.deviation, self.u_deviation, self.reference, "its reference"),
        ):
            grade = int(standing.level[index, column])
            if grade == 0:
                continue
            over_act = abs(numbers[index, column]) > limits["act"][index, column]
            word, limit = ("action", limits["act"]) if over_act else ("watch", limits["watch"])
            text = (
                f"Vial {label} {name} is {percent(numbers[index, column], u[index, column])} from {origin}, "
                f"beyond the {word} limit of {plain(limit[index, column])}"
            )
            if over_act and grade == 1:
                text += ", but too uncertain for an action on this reading alone"
            said.append((_verdict(grade), text + "."))
        if not said and self.chart_signal[index, column]:
            kind = "moves apart from the other vials" if lane.apart else "has moved"
            text = (
                f"Vial {label} {name} {kind}: smoothed {self.smoothed[index, column]:+.1f} %, beyond what chance gives "
                f"({self.limit[index, column]:.1f} %)."
            )
            said.append((Verdict.WATCH, text))
        return said

    def _uncertain(self, index: int) -> list[tuple[Verdict, str]]:
        columns = np.flatnonzero(self.from_baseline.uncertain[index] | self.from_reference.uncertain[index])
        if not columns.size:
            return []
        named: dict[str, list[str]] = {}
        for column in columns:
            stream = self.owner.block.streams[column]
            named.setdefault(self.owner.names[stream.scan], []).append(stream.vial)
        what = "; ".join(f"{name}: {vials(labels)}" for name, labels in named.items())
        text = f"Too uncertain to be judged alone (uncertainty above half the action limit): {what}."
        return [(Verdict.STEADY, text)]

    def _lost(self, index: int, here: Bools) -> list[tuple[Verdict, str]]:
        """Streams that had numbers before and have none now."""
        block = self.owner.block
        lost = self.segment.known[index] & ~here
        known = int(self.segment.known[index].sum())
        if not lost.any():
            return []
        named: dict[str, list[str]] = {}
        for column in np.flatnonzero(lost):
            named.setdefault(self.owner.names[block.streams[column].scan], []).append(block.streams[column].vial)
        many = lost.sum() >= 0.25 * known
        parts = []
        for name, labels in named.items():
            everything = all(
                lost[column] for column, stream in enumerate(block.streams) if self.owner.names[stream.scan] == name
            )
            parts.append(f"{name}: every vial" if everything else f"{name}: {vials(labels)}")
        text = f"No usable reading this time: {'; '.join(parts)}."
        return [(Verdict.WATCH if many else Verdict.STEADY, text)]

    def _learning(self, index: int, here: Bools, done: Floats) -> list[tuple[Verdict, str]]:
        open_streams = here & ~self.segment.known[index]
        if not open_streams.any():
            return []
        count = int(done[index][open_streams].max())
        wanted = self.owner.wanted_runs
        if open_streams.sum() == here.sum():
            text = f"Baseline being learnt ({count} of {wanted} runs)"
            text += "; drift cannot be judged yet." if count < wanted else "; judged against it from the next run on."
        else:
            named = sorted({self.owner.names[self.owner.block.streams[c].scan] for c in np.flatnonzero(open_streams)})
            number = int(open_streams.sum())
            text = f"Baseline being learnt for {number} of {int(here.sum())} readings ({', '.join(named)})."
        return [(Verdict.STEADY, text)]


@dataclass(frozen=True, slots=True, eq=False)
class _Standing:
    level: Floats  # 0 within, 1 watch, 2 act
    uncertain: Bools


def _standing(number: Floats, sd: Floats, u: Floats, guard: Floats, limits: Mapping[str, Floats]) -> _Standing:
    """Where deviations stand against limits, chance allowed for.

    Beyond a limit counts only where an unchanged vial would hardly be so by chance (`guard` sigmas). Where
    the uncertainty exceeds half the action limit the reading cannot alone call for action.
    """
    with np.errstate(invalid="ignore"):
        size = np.abs(number)
        sure = size > guard * sd
        uncertain = np.isfinite(number) & (u > 0.5 * limits["act"])
        over_watch, over_act = size > limits["watch"], size > limits["act"]
    level = np.where(over_watch & sure, 1, 0)
    level = np.where(over_act & ~uncertain, np.where(sure, 2, 1), level)
    return _Standing(level, uncertain)


def _pair(tolerance: _Tolerance) -> tuple[Floats, Floats]:
    return tolerance.watch, tolerance.act


def _verdict(grade: int) -> Verdict:
    return (Verdict.STEADY, Verdict.WATCH, Verdict.ACT)[grade]


def _counted(beyond: Floats, with_it: Bools, judged: int) -> str:
    acting, watching = int(((beyond == 2) & with_it).sum()), int((with_it & (beyond > 0)).sum())
    if acting:
        return f" ({acting} of {judged} vials beyond the action limit)"
    return f" ({watching} of {judged} vials beyond the watch limit)" if watching else f" ({judged} vials together)"


class _Rows:
    """Makes the stream rows of a segment from whole columns, which is far cheaper than one number at a time."""

    def __init__(self, owner: _SegmentJudge, level: Floats, done: Floats) -> None:
        block, segment = owner.owner.block, owner.segment
        rows = slice(segment.first, segment.last)
        self.streams = block.streams
        self.columns = [
            _listed(column)
            for column in (
                block.value[rows],
                owner.percent,
                np.where(np.isfinite(owner.percent), owner.sd, np.nan),
                owner.deviation,
                np.where(np.isfinite(owner.deviation), owner.u_deviation, np.nan),
                owner.smoothed,
                owner.limit,
                owner.baseline["watch"],
                owner.baseline["act"],
            )
        ]
        self.here = np.isfinite(block.value[rows]).tolist()
        self.grades, self.done, self.known = level.tolist(), done.tolist(), segment.known.tolist()
        self.asked = block.asked[rows].tolist()

    def of(self, index: int) -> tuple[StreamRow, ...]:
        here, grades, asked = self.here[index], self.grades[index], self.asked[index]
        numbers = zip(*(column[index] for column in self.columns), strict=True)
        return tuple(
            StreamRow(
                stream.vial,
                stream.quantity,
                stream.scan,
                _verdict(grade) if there else Verdict.VOID,
                *values,
                count,
                complete,
            )
            for stream, there, grade, wanted, values, count, complete in zip(
                self.streams, here, grades, asked, numbers, self.done[index], self.known[index], strict=True
            )
            if wanted
        )


def _listed(column: Floats) -> list[list[float | None]]:
    """Nested lists with None for NaN."""
    boxed = column.astype(object)
    boxed[~np.isfinite(column)] = None
    listed: list[list[float | None]] = boxed.tolist()
    return listed
