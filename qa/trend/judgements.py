"""What a judgement is: the verdict of one run, its reasons, and how each stream stands."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, field

from qa.trend.streams import Block, Bools, Ints
from qa.words import Floats, Verdict


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


def graded(grade: int) -> Verdict:
    """The verdict of a grade: 0 steady, 1 watch, 2 act."""
    return (Verdict.STEADY, Verdict.WATCH, Verdict.ACT)[grade]


@dataclass(frozen=True, slots=True, eq=False)
class StreamColumns:
    """Everything that stream rows are made of, for the runs of one segment; all (r, S), percent; NaN: no number."""

    from_baseline: Floats
    u_from_baseline: Floats
    from_reference: Floats
    u_from_reference: Floats
    smoothed: Floats
    smoothed_limit: Floats
    watch: Floats
    act: Floats
    grade: Ints
    baseline_runs: Ints
    baseline_complete: Bools

    def rows(self, block: Block, first: int, index: int) -> tuple[StreamRow, ...]:
        """The rows of run `index` of the segment that begins at run `first` of `block`."""
        return tuple(self._rows(block, block.value[first + index], block.asked[first + index], index))

    def _rows(self, block: Block, value: Floats, asked: Bools, index: int) -> Iterator[StreamRow]:
        numbers = zip(
            *(
                _listed(column)
                for column in (
                    value,
                    self.from_baseline[index],
                    self.u_from_baseline[index],
                    self.from_reference[index],
                    self.u_from_reference[index],
                    self.smoothed[index],
                    self.smoothed_limit[index],
                    self.watch[index],
                    self.act[index],
                )
            ),
            strict=True,
        )
        runs, complete = self.baseline_runs[index].tolist(), self.baseline_complete[index].tolist()
        grades = self.grade[index].tolist()
        for stream, wanted, grade, count, done, (ms, base, u_base, ref, u_ref, level, limit, watch, act) in zip(
            block.streams, asked.tolist(), grades, runs, complete, numbers, strict=True
        ):
            if wanted:
                yield StreamRow(
                    vial=stream.vial,
                    quantity=stream.quantity,
                    scan=stream.scan,
                    verdict=graded(grade) if ms is not None else Verdict.VOID,
                    value_ms=ms,
                    from_baseline_percent=base,
                    u_from_baseline_percent=u_base if base is not None else None,
                    from_reference_percent=ref,
                    u_from_reference_percent=u_ref if ref is not None else None,
                    smoothed_percent=level,
                    smoothed_limit_percent=limit,
                    watch_percent=watch,
                    act_percent=act,
                    baseline_runs=count,
                    baseline_complete=done,
                )


def _listed(numbers: Floats) -> list[float | None]:
    """Plain numbers, None for NaN and infinity."""
    return [number if math.isfinite(number) else None for number in numbers.tolist()]
