"""Where deviations stand against the limits of the day, chance and uncertainty allowed for."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date

import numpy as np

from qa.site.limits import Against, LimitBlock, in_force
from qa.trend.baseline import nanmedian
from qa.trend.streams import Block, Bools, Ints
from qa.words import Floats, Quantity

RELEVANT = 0.1  # a shift smaller than this part of the watch limit is neither a finding nor a reason to watch


@dataclass(frozen=True, slots=True, eq=False)
class Tolerance:
    """Limits of one kind for every run and stream, (R, S), percent; NaN where there is none."""

    watch: Floats
    act: Floats

    def rows(self, chosen: slice) -> Tolerance:
        """Only those runs."""
        return Tolerance(self.watch[chosen], self.act[chosen])

    def usual(self, columns: Ints) -> tuple[Floats, Floats]:
        """(R,) median watch and act limits of some streams; infinite where none has any."""
        watch, act = (nanmedian(limits[:, columns].T) for limits in (self.watch, self.act))
        return np.where(np.isnan(watch), np.inf, watch), np.where(np.isnan(act), np.inf, act)


def tolerance(block: Block, days: Sequence[date], limits: tuple[LimitBlock, ...], against: Against) -> Tolerance:
    """The limits against baseline or reference that were in force on the day of each run."""
    shape = block.value.shape
    watch, act = np.full(shape, np.nan), np.full(shape, np.nan)
    changes = sorted({one.since for one in limits})
    epoch = np.searchsorted(np.array(changes, dtype="datetime64[D]"), np.array(days, dtype="datetime64[D]"), "right")
    for number in np.unique(epoch[epoch > 0]):
        rows = epoch == number
        for column, stream in enumerate(block.streams):
            held = in_force(limits, changes[number - 1], Quantity(stream.quantity), stream.vial, block.scanner)
            if against in held:
                watch[rows, column] = held[against].watch_percent
                act[rows, column] = held[against].act_percent
    return Tolerance(watch, act)


@dataclass(frozen=True, slots=True, eq=False)
class Standing:
    """How far each reading is beyond its limits, (r, S): 0 within, 1 watch, 2 act; and which are too uncertain."""

    level: Ints
    uncertain: Bools


def standing(number: Floats, sd: Floats, u: Floats, guard: Floats, limits: Tolerance) -> Standing:
    """Grade deviations by simple acceptance: the number itself against the limit.

    Beyond a limit counts only where an unchanged vial would hardly be so by chance: `number` beyond `guard` times
    `sd`. Where the standard uncertainty `u` exceeds half the action limit, the reading alone cannot call for action.

    Parameters
    ----------
    number, sd, u, guard : (r, S) float64; percent, but `guard` in sigmas

    References
    ----------
    JCGM 106:2012, 8.2 (simple acceptance).
    """
    with np.errstate(invalid="ignore"):
        size = np.abs(number)
        sure = size > guard * sd
        uncertain = np.isfinite(number) & (u > 0.5 * limits.act)
        over_watch, over_act = size > limits.watch, size > limits.act
    level = np.where(over_watch & sure, 1, 0)
    level = np.where(over_act & ~uncertain, np.where(sure, 2, 1), level)
    return Standing(level, uncertain)
