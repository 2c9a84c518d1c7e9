"""Weighs one segment's runs: what is said of each, and how grave it is."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from qa.trend.baseline import Segment
from qa.trend.budget import Shares, Smoothed, beyond_chance
from qa.trend.charts import last_zero
from qa.trend.judgements import StreamColumns, graded
from qa.trend.levels import Lane
from qa.trend.sentences import counted, percent, plain, vials
from qa.trend.standing import RELEVANT, Tolerance, standing
from qa.trend.streams import Block, Bools, Ints
from qa.words import Floats, Verdict

SLACK = 0.5  # sigmas: half the shift that is worth dating
Said = list[tuple[Verdict, str]]


@dataclass(frozen=True, slots=True, eq=False)
class Charted:
    """One scan of the segment with its charts; `common` is None where vials are too few to share a level."""

    lane: Lane
    common: Smoothed | None
    vials: Smoothed


class Weighing:
    """One segment: from the first run after a restart to the last before the next."""

    def __init__(
        self,
        block: Block,
        segment: Segment,
        charts: Sequence[Charted],
        share: Shares,
        against_baseline: Tolerance,
        against_reference: Tolerance,
        names: Mapping[str, str],
        wanted_runs: int,
    ) -> None:
        """`against_…` and `block` speak of all runs, `segment` and `charts` of this segment's; `names` by scan."""
        self.block, self.segment, self.charts, self.share = block, segment, charts, share
        self.names, self.wanted_runs = names, wanted_runs
        rows = slice(segment.first, segment.last)
        shape = segment.percent.shape
        self.baseline, self.reference = against_baseline.rows(rows), against_reference.rows(rows)
        self.percent = np.where(segment.known, segment.percent, np.nan)
        self.deviation, self.u_deviation = block.deviation[rows], block.u_deviation[rows]
        self.sd, self.smoothed, self.limit, self.z = (np.full(shape, np.nan) for _ in range(4))
        self.chart_signal = np.zeros(shape, dtype=bool)
        guard = np.full(shape, np.inf)
        for one in charts:
            columns = one.lane.columns
            self.sd[:, columns] = one.lane.sd_total
            self.smoothed[:, columns], self.limit[:, columns] = one.vials.percent, one.vials.limit
            self.z[:, columns] = one.vials.z
            relevant = ~(np.abs(one.vials.percent) < RELEVANT * self.baseline.watch[:, columns])
            self.chart_signal[:, columns] = one.vials.signal & relevant
            guard[:, columns] = beyond_chance(share.reading, np.asarray(one.lane.vials.freedom))
        stated = np.where(np.isfinite(segment.u), segment.u, 0.0)
        self.from_baseline = standing(self.percent, self.sd, np.fmax(self.sd, stated), guard, self.baseline)
        usual = np.full(shape, float(beyond_chance(share.reading, np.array(np.inf))))
        self.from_reference = standing(self.deviation, self.u_deviation, self.u_deviation, usual, self.reference)
        grade = np.maximum(self.from_baseline.level, self.from_reference.level)
        self.grade: Ints = np.where(self.chart_signal, np.maximum(grade, 1), grade)
        self.done: Ints = np.cumsum(segment.used, axis=0)
        self.usual = [self.baseline.usual(one.lane.columns) for one in charts]
        self.run_limit = [_run_limit(one.lane, share) for one in charts]

    def columns(self) -> StreamColumns:
        """What the stream rows are made of."""
        return StreamColumns(
            self.percent,
            self.sd,
            self.deviation,
            self.u_deviation,
            self.smoothed,
            self.limit,
            self.baseline.watch,
            self.baseline.act,
            self.grade,
            self.done,
            self.segment.known,
        )

    def said(self, index: int) -> Said:
        """All that is to be said of run `index` of the segment, which has at least one usable reading."""
        said: Said = []
        for number in range(len(self.charts)):
            said += self._scan(index, number)
        here = np.isfinite(self.block.value[self.segment.first + index])
        return (
            said
            + self._within_chance(index)
            + self._uncertain(index)
            + self._lost(index, here)
            + self._learning(index, here)
        )

    def _scan(self, index: int, number: int) -> Said:
        lane = self.charts[number].lane
        together = self._together(index, number)
        said = [together[0]] if together else self._level_chart(index, number)
        speaks = self.grade[index, lane.columns] > 0
        if together:
            speaks &= ~together[1]
        for place in np.flatnonzero(speaks):
            said += self._vial(index, int(lane.columns[place]), lane)
        return said

    def _together(self, index: int, number: int) -> tuple[tuple[Verdict, str], Bools] | None:
        """What is said once for all vials where they are beyond a limit as one, and which vials that explains."""
        lane = self.charts[number].lane
        if lane.level is None or lane.columns.size < 3 or not np.isfinite(lane.level.percent[index]):
            return None
        level, u = float(lane.level.percent[index]), float(lane.level.sd[index])
        beyond = self.from_baseline.level[index, lane.columns]
        watch, act = (float(limit[index]) for limit in self.usual[number])
        percents = self.percent[index, lane.columns]
        with_it = (beyond > 0) & (np.sign(percents) == np.sign(level))
        judged = int(np.isfinite(percents).sum())
        beyond_watch = abs(level) > max(watch, float(self.run_limit[number][index]))
        if not (beyond_watch or with_it.sum() >= max(3, 0.5 * judged)):
            return None
        explained = with_it & ~self.chart_signal[index, lane.columns]
        over_act = beyond_watch and abs(level) > act
        grade = max(1 + int(over_act), int(beyond[explained].max(initial=1)))
        limit, word = (act, "action") if over_act else (watch, "watch")
        text = f"{self.names[lane.scan]} of the whole scanner is {percent(level, u)} from its baseline"
        if beyond_watch:
            text += f", beyond the {word} limit of {plain(limit)}"
        acting, watching = int(((beyond == 2) & with_it).sum()), int(with_it.sum())
        return (graded(grade), f"{text} ({counted(acting, watching, judged)})."), explained

    def _level_chart(self, index: int, number: int) -> Said:
        one = self.charts[number]
        level_of, common, name = one.lane.level, one.common, self.names[one.lane.scan]
        if common is None or level_of is None or not np.isfinite(level_of.percent[index]):
            return []
        level, u = float(level_of.percent[index]), float(level_of.sd[index])
        watch = float(self.usual[number][0][index])
        if common.signal[index] and not (np.isfinite(watch) and abs(common.percent[index]) < RELEVANT * watch):
            text = (
                f"{name} of the whole scanner has moved since about {self._since(common.z[: index + 1])}: its smoothed "
                f"level is {common.percent[index]:+.2f} % from its baseline, beyond what chance gives "
                f"({common.limit[index]:.2f} %)."
            )
            return [(Verdict.WATCH, text)]
        if abs(level) > self.run_limit[number][index]:
            text = (
                f"All vials together lie {percent(level, u)} from their {name} baseline in this run, further than "
                "single runs scatter: repeat the run before concluding (temperature, position, recipe)."
            )
            return [(Verdict.WATCH, text)]
        return []

    def _vial(self, index: int, column: int, lane: Lane) -> Said:
        said: Said = []
        name = f"Vial {self.block.streams[column].vial} {self.names[lane.scan]}"
        for judged, numbers, u, limits, origin in (
            (self.from_baseline, self.percent, self.sd, self.baseline, "its baseline"),
            (self.from_reference, self.deviation, self.u_deviation, self.reference, "its reference"),
        ):
            grade = int(judged.level[index, column])
            if grade == 0:
                continue
            over_act = abs(numbers[index, column]) > limits.act[index, column]
            word, limit = ("action", limits.act) if over_act else ("watch", limits.watch)
            text = (
                f"{name} is {percent(numbers[index, column], u[index, column])} from {origin}, "
                f"beyond the {word} limit of {plain(limit[index, column])}"
            )
            if over_act and grade == 1:
                text += ", but too uncertain for an action on this reading alone"
            said.append((graded(grade), text + "."))
        if not said and self.chart_signal[index, column]:
            kind = "moves apart from the other vials" if lane.apart else "has moved"
            since = self._since(self.z[: index + 1, column])
            text = (
                f"{name} {kind} since about {since}: smoothed {self.smoothed[index, column]:+.1f} %, "
                f"beyond what chance gives ({self.limit[index, column]:.1f} %)."
            )
            said.append((Verdict.WATCH, text))
        return said

    def _since(self, z: Floats) -> str:
        """The day of the run at which a shift that now signals began."""
        start = last_zero(z, slack=SLACK)
        return str(self.block.acquired[self.segment.first + start].astype("datetime64[D]"))

    def _within_chance(self, index: int) -> Said:
        """Readings beyond a watch limit that an unchanged vial's scatter explains: said, but no reason to watch."""
        grade = np.maximum(self.from_baseline.level[index], self.from_reference.level[index])
        with np.errstate(invalid="ignore"):
            over = np.abs(self.percent[index]) > self.baseline.watch[index]
        columns = np.flatnonzero(over & (grade == 0) & ~self.from_baseline.uncertain[index])
        if not columns.size:
            return []
        text = f"Beyond the watch limit, but within the usual scatter of single readings: {self._listed(columns)}."
        return [(Verdict.STEADY, text)]

    def _uncertain(self, index: int) -> Said:
        columns = np.flatnonzero(self.from_baseline.uncertain[index] | self.from_reference.uncertain[index])
        if not columns.size:
            return []
        text = f"Too uncertain to be judged alone (uncertainty above half the action limit): {self._listed(columns)}."
        return [(Verdict.STEADY, text)]

    def _lost(self, index: int, here: Bools) -> Said:
        """Streams that had numbers before and have none now."""
        lost = self.segment.known[index] & ~here
        if not lost.any():
            return []
        many = lost.sum() >= 0.25 * self.segment.known[index].sum()
        text = f"No usable reading this time: {self._listed(np.flatnonzero(lost))}."
        return [(Verdict.WATCH if many else Verdict.STEADY, text)]

    def _learning(self, index: int, here: Bools) -> Said:
        learning = here & ~self.segment.known[index]
        if not learning.any():
            return []
        count = int(self.done[index][learning].max())
        if learning.sum() == here.sum():
            text = f"Baseline being learnt ({count} of {self.wanted_runs} runs)"
            text += "; drift cannot be judged yet." if count < self.wanted_runs else "; judged from the next run on."
        else:
            scans = sorted({self.names[self.block.streams[c].scan] for c in np.flatnonzero(learning)})
            text = (
                f"Baseline being learnt for {int(learning.sum())} of {int(here.sum())} readings ({', '.join(scans)})."
            )
        return [(Verdict.STEADY, text)]

    def _listed(self, columns: Ints) -> str:
        """'T1: vials 2 and 7; T2: every vial'."""
        named: dict[str, list[str]] = {}
        for column in columns:
            stream = self.block.streams[column]
            named.setdefault(stream.scan, []).append(stream.vial)
        parts = []
        for scan, labels in named.items():
            everything = len(labels) > 1 and len(labels) == sum(stream.scan == scan for stream in self.block.streams)
            parts.append(f"{self.names[scan]}: {'every vial' if everything else vials(labels)}")
        return "; ".join(parts)


def _run_limit(lane: Lane, share: Shares) -> Floats:
    """(r,) how far chance takes the level of a single run from the baseline, percent; infinite without a level."""
    level = lane.level
    if level is None:
        return np.full(len(lane.vials.percent), np.inf)
    guard = beyond_chance(share.run, np.asarray(level.freedom))
    return np.asarray(guard * level.sd * np.sqrt(1.0 + 1.0 / np.maximum(level.runs, 1.0)), dtype=np.float64)
