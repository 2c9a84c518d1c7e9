"""The series that findings are sought in: common levels and vials' own parts, over whole stretches (not causal)."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from qa.trend.baseline import Segment, nanmedian
from qa.trend.change import Change, wild
from qa.trend.levels import FEWEST_VIALS, Lane, common_level
from qa.trend.streams import Block, Bools
from qa.words import Floats

FEWEST_RUNS = 7


@dataclass(slots=True, eq=False)
class Course:
    """One scan of one phantom on one scanner between two restarts.

    Shapes: runs r, vials S. `level` is what the vials share, `own` what each adds to it; percent from the baseline.
    """

    block: Block
    segment: Segment
    scan: str
    quantity: str
    labels: tuple[str, ...]
    days: Floats  # (r,)
    celsius: Floats  # (r,)
    percent: Floats  # (r, S)
    sd: Floats  # (S,) scatter of one vial
    level: Floats  # (r,)
    level_sd: Floats  # (r,) relative uncertainty of the level
    own: Floats  # (r, S)
    wild_run: Bools  # (r,) runs that lie apart as a whole
    current: bool  # the last stretch of its block
    aged: dict[str, list[Change]] = field(default_factory=dict)  # changes found in single vials

    @property
    def scanner(self) -> str:
        return self.block.scanner

    @property
    def phantom(self) -> str:
        return self.block.phantom

    def own_of(self, label: str) -> Floats:
        """(r,) what one vial adds to the level."""
        return self.own[:, self.labels.index(label)]

    def relevel(self) -> None:
        """Works the level out again without the vials that were found to move by themselves."""
        percent = self.percent.copy()
        for label, changes in self.aged.items():
            column = self.labels.index(label)
            percent[:, column] = percent[:, column] - np.sum([c.at(self.days) for c in changes], axis=0)
        self.level = common_level(percent, self.sd)
        self.level = self.level - _start(self.level, self.segment)
        if len(self.labels) >= FEWEST_VIALS:
            self.own = self.percent - self.level[:, None]


def _start(level: Floats, segment: Segment) -> float:
    window = segment.used.any(axis=1) & np.isfinite(level)
    return float(np.median(level[window])) if window.any() else 0.0


def _level_sd(percent: Floats, sd: Floats, stated: Floats, typical: Floats) -> Floats:
    """(r,) relative uncertainty of the level: runs with few vials or wide statements count less."""
    there = np.isfinite(percent)
    own = np.sqrt(1.0 / np.maximum((there / sd**2).sum(axis=1), 1e-12))
    usual = float(np.median(own[there.any(axis=1)])) if there.any() else 1.0
    excess = np.nan_to_num(nanmedian((stated**2 - typical**2).T))
    wide = np.where(excess > 0.1 * float(np.nan_to_num(nanmedian(typical[:, None])[0])) ** 2, excess, 0.0)
    u: Floats = np.sqrt(np.maximum(own, usual) ** 2 + np.clip(wide, 0.0, None))
    return u


def courses(block: Block, stretches: tuple[Segment, ...], parts: tuple[tuple[Lane, ...], ...]) -> list[Course]:
    """Every course of a block that has enough runs to be asked for a change."""
    made = []
    for number, (segment, split) in enumerate(zip(stretches, parts, strict=True)):
        rows = slice(segment.first, segment.last)
        for lane in split:
            percent = segment.percent[:, lane.columns]
            sd = nanmedian(lane.vials.sd[-8:]) if len(percent) else np.ones(lane.columns.size)
            sd = np.where(np.isfinite(sd), sd, np.nanmedian(sd) if np.isfinite(sd).any() else 1.0)
            level = common_level(percent, sd)
            if np.isfinite(level).sum() < FEWEST_RUNS:
                continue
            level = level - _start(level, segment)
            apart = len(sd) >= FEWEST_VIALS
            typical = np.full(len(level), 1.0 / np.sqrt((1.0 / sd**2).sum()))
            made.append(
                Course(
                    block,
                    segment,
                    lane.scan,
                    lane.quantity,
                    tuple(block.streams[c].vial for c in lane.columns),
                    block.days[rows],
                    block.celsius[rows],
                    percent,
                    sd,
                    level,
                    _level_sd(percent, sd, segment.u[:, lane.columns], segment.u_typical[lane.columns]),
                    percent - level[:, None] if apart else percent,
                    wild(level, typical),
                    number == len(stretches) - 1,
                )
            )
    return made
