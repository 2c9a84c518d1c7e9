"""Baselines: the first usable runs of each stream since the last restart, explicit and dated."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from qa.trend.streams import Block, Bools, Stamps
from qa.words import Floats

# The Hodges-Lehmann mean keeps 95 % of the efficiency of the plain mean, and is hardly moved by one bad set-up.
LOSS = 1.0 / 0.955


@dataclass(frozen=True, slots=True, eq=False)
class Segment:
    """The runs between two restarts, each reading in percent from its stream's baseline.

    Shapes: runs of the segment r, streams S. `known` is True where the baseline was complete before that run, so
    that the run can be judged without looking ahead.
    """

    first: int  # index of the first run in the block
    last: int  # one past the last
    since: np.datetime64 | None  # the restart that opened it; None: the beginning
    mean_ms: Floats  # (S,) NaN while nothing is known
    count: Floats  # (S,) runs behind the mean
    used: Bools  # (r, S) readings behind the mean
    known: Bools  # (r, S)
    percent: Floats  # (r, S)
    u: Floats  # (r, S) stated, percent
    u_typical: Floats  # (S,) stated, median over the baseline


def hodges_lehmann(values: Floats) -> Floats:
    """Median of all pairwise means down the first axis: (n, S) -> (S,); NaN is left out.

    References
    ----------
    Hodges and Lehmann (1963), Annals of Mathematical Statistics 34(2), 598-611.
    """
    if not len(values):
        return np.full(values.shape[1:], np.nan)
    i, j = np.triu_indices(len(values))
    return nanmedian(0.5 * (values[i] + values[j]))


def nanmedian(values: Floats) -> Floats:
    """Median down the first axis, NaN left out; a column without any value gives NaN."""
    count = np.asarray((~np.isnan(values)).sum(axis=0))
    if not len(values):
        return np.full(values.shape[1:], np.nan)
    ordered = np.sort(values, axis=0)  # NaN goes last
    low, high = np.maximum(count - 1, 0) // 2, np.minimum(count // 2, len(values) - 1)
    middle = np.take_along_axis(ordered, np.stack([low, high]), axis=0)
    return np.where(count > 0, middle.mean(axis=0), np.nan)


def robust_mean(values: Floats, used: Bools) -> Floats:
    """Hodges-Lehmann mean of the used values of each column: (r, S), (r, S) -> (S,); NaN where none is used.

    A value farther than five robust sigmas from the median has no part in it.
    """
    order = np.cumsum(used, axis=0)
    packed = np.full((int(order.max(initial=0)), values.shape[1]), np.nan)  # only the used ones, moved to the top
    rows, columns = np.nonzero(used)
    packed[order[rows, columns] - 1, columns] = values[rows, columns]
    middle = nanmedian(packed)
    distance = np.abs(packed - middle)
    bound = 5.0 * 1.4826 * nanmedian(distance) + 1e-9 * np.abs(middle)
    return hodges_lehmann(np.where(distance <= bound, packed, np.nan))


def segments(block: Block, restarted: Stamps, baseline_runs: int) -> tuple[Segment, ...]:
    """Cuts a block at its restarts and sets each stream's baseline in each part."""
    part = np.searchsorted(restarted, block.acquired, side="right")
    made = []
    for number in np.unique(part):
        where = np.flatnonzero(part == number)
        since = restarted[number - 1] if number > 0 else None
        made.append(_segment(block, int(where[0]), int(where[-1]) + 1, since, baseline_runs))
    return tuple(made)


def _segment(block: Block, first: int, last: int, since: np.datetime64 | None, baseline_runs: int) -> Segment:
    value, u = block.value[first:last], block.u[first:last]
    usable = np.isfinite(value)
    order = np.cumsum(usable, axis=0)
    used = usable & (order <= baseline_runs)
    depth = int(np.flatnonzero(used.any(axis=1)).max(initial=-1)) + 1
    learnt = np.where(used, value, np.nan)[:depth]
    mean = robust_mean(value, used)
    known = (order - usable) >= baseline_runs
    return Segment(
        first,
        last,
        since,
        mean,
        used.sum(axis=0).astype(np.float64),
        used,
        known,
        100.0 * (value / mean - 1.0),
        u,
        nanmedian(np.where(used[:depth], u[:depth], np.nan)) if len(learnt) else np.full(value.shape[1], np.nan),
    )
