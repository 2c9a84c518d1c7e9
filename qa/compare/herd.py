"""Who left the others, and when: each scanner's level against the median of the other scanners' levels."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from qa.compare.agreement import Departure
from qa.compare.slabs import Slab
from qa.compare.tables import day_of
from qa.trend.change import Change, measure, wild
from qa.trend.changes import find_changes
from qa.trend.levels import common_level
from qa.words import Floats, Ints

LEAST_PERCENT = 0.5  # a smaller change is no departure
CHANCE = 0.01  # that any scanner of a steady herd is said to have left, over all scans together
_NEAREST = 5  # runs of another scanner that tell where it stands at a time
_APART_DAYS = 90.0  # runs farther away in time tell nothing


@dataclass(frozen=True, slots=True, eq=False)
class _Series:
    """The level common to the vials of one slab, about its own median; (r,) each, wild runs left out."""

    scanner: str
    phantom: str
    days: Floats
    level: Floats
    sd: float  # scatter of one run


def departures(
    scan: str, quantity: str, made: Sequence[Slab], scans: int
) -> tuple[list[Departure], list[Departure], list[str]]:
    """Scanners now apart, scanners that were apart for a while, and why some could not be asked.

    Parameters
    ----------
    made : the slabs of one scan
    scans : how many scans are asked in all, to share out the chance of a false alarm
    """
    series = [one for one in (_series(slab) for slab in made) if one is not None]
    scanners = sorted({one.scanner for one in series})
    short = sorted({slab.scanner for slab in made} - set(scanners))
    remarks = []
    if short:
        remarks.append(f"{quantity} ({scan}): too few runs of {_joined(short)} to say whether any has left the others.")
    if len(scanners) < 2:
        return [], [], remarks
    alpha = CHANCE / max(len(scanners) * scans, 1)
    still: list[Departure] = []
    back: list[Departure] = []
    for name in scanners:
        for departure in _of_scanner(name, scan, quantity, series, alpha):
            (still if departure.returned is None else back).append(departure)
    return still, back, remarks


def _series(slab: Slab) -> _Series | None:
    percent = slab.percent
    columns = np.isfinite(percent).sum(axis=0) >= 4
    if not columns.any():
        return None
    percent = percent[:, columns]
    percent = percent - np.nanmedian(percent, axis=0)
    step = np.diff(percent, axis=0) / np.sqrt(2.0)
    sd = 1.4826 * np.nanmedian(np.abs(step), axis=0)
    floor = float(np.nanmedian(sd[sd > 0])) if (sd > 0).any() else 1e-6
    level = common_level(percent, np.where(sd > 0.2 * floor, sd, floor))
    here = np.isfinite(level)
    noise = 1.4826 * float(np.median(np.abs(np.diff(level[here])))) / np.sqrt(2.0) if here.sum() > 2 else floor
    noise = max(noise, 1e-6)
    here &= ~wild(level, np.full(level.shape, noise))
    if here.sum() < 4:
        return None
    return _Series(slab.scanner, slab.phantom, slab.days[here], level[here], noise)


def _against(one: _Series, others: Sequence[_Series]) -> tuple[Floats, Floats, Floats]:
    """(days, difference from the median of the others, its relative standard uncertainty) where the others tell."""
    stands = np.full((len(others), one.days.size), np.nan)
    spread = np.full((len(others), one.days.size), np.nan)
    for row, other in enumerate(others):
        around = np.searchsorted(other.days, one.days)[:, None] + np.arange(-_NEAREST, _NEAREST)
        outside = (around < 0) | (around >= other.days.size)
        around = np.clip(around, 0, other.days.size - 1)
        apart = np.where(outside, np.inf, np.abs(other.days[around] - one.days[:, None]))
        nearest = np.argsort(apart, axis=1, kind="stable")[:, :_NEAREST]
        told_by = np.take_along_axis(around, nearest, axis=1)
        near = np.where(np.take_along_axis(apart, nearest, axis=1) <= _APART_DAYS, other.level[told_by], np.nan)
        count = np.isfinite(near).sum(axis=1)
        told = count > 0
        stands[row, told] = np.nanmedian(near[told], axis=1)
        spread[row, told] = other.sd * np.sqrt(1.57 / count[told])
    told = np.isfinite(stands).any(axis=0)
    number = np.isfinite(stands[:, told]).sum(axis=0)
    herd = np.nanmedian(stands[:, told], axis=0)
    u_herd = np.sqrt(np.nanmean(spread[:, told] ** 2, axis=0) / number)
    return one.days[told], one.level[told] - herd, np.hypot(one.sd, u_herd)


def _of_scanner(name: str, scan: str, quantity: str, series: Sequence[_Series], alpha: float) -> list[Departure]:
    mine = [one for one in series if one.scanner == name]
    rest = [one for one in series if one.scanner != name]
    t, y, sd, group, used = [], [], [], [], set()
    own_phantom = False
    for number, one in enumerate(mine):
        same = [other for other in rest if other.phantom == one.phantom]
        own_phantom = own_phantom or not same
        others = same or rest
        days, apart, u = _against(one, others)
        t.append(days)
        y.append(apart)
        sd.append(u)
        group.append(np.full(days.size, number, dtype=np.intp))
        used |= {other.scanner for other in others}
    days, apart, u = np.concatenate(t), np.concatenate(y), np.concatenate(sd)
    groups: Ints = np.concatenate(group)
    changes = find_changes(days, apart, u, groups, alpha=alpha)
    told = []
    for number, change in enumerate(changes):
        if abs(change.size) < LEAST_PERCENT or not _moved_itself(change, mine, changes):
            continue
        undone = _undone(change, changes[number + 1 :])
        told.append(
            _departure(
                name,
                scan,
                quantity,
                change,
                _now(change, days, apart, groups),
                undone,
                tuple(sorted(used)),
                _reasons(mine, sorted(used), change, own_phantom),
            )
        )
    return [one for one in told if not _only_a_return(one, told)]


def _moved_itself(change: Change, mine: Sequence[_Series], changes: Sequence[Change]) -> bool:
    """Whether the scanner's own level changed with the difference: else one of the others moved, not it."""
    expected = change.size if change.kind == "step" else change.rate
    sizes, weights = [], []
    along = [other for other in changes if other is not change]
    for one in mine:
        size, u = measure(change, one.days, one.level, np.full(one.days.size, one.sd), along=along)
        if np.isfinite(size) and u > 0:
            sizes.append(size)
            weights.append(1.0 / u**2)
    return bool(sizes) and float(np.average(sizes, weights=weights)) / expected > 0.5


def _undone(change: Change, later: Sequence[Change]) -> float | None:
    """When a later step took the scanner back to at most a quarter of the change; None if it is still apart."""
    left = change.size
    for other in later:
        left += other.size
        if abs(left) < 0.25 * abs(change.size):
            return other.onset
    return None


def _only_a_return(one: Departure, told: Sequence[Departure]) -> bool:
    """The step back of a scanner that had been apart is no departure of its own."""
    return any(other.returned == one.onset for other in told if other is not one)


def _now(change: Change, days: Floats, apart: Floats, groups: Ints) -> float:
    """Where the scanner stands now against where it stood before the change."""
    before = days < change.onset
    stands = []
    for number in np.unique(groups):
        here = groups == number
        order = np.argsort(days[here], kind="stable")
        last = apart[here][order][-5:]
        old = apart[here & before]
        if old.size:
            stands.append(float(np.median(last) - np.median(old)))
    return float(np.mean(stands)) if stands else change.size


def _reasons(mine: Sequence[_Series], others: Sequence[str], change: Change, own_phantom: bool) -> tuple[str, ...]:
    reasons = [f"Compared with the median of {_joined(others)}." if len(others) > 1 else f"Compared with {others[0]}."]
    if len(others) == 1:
        reasons.append("Its own level changed with the difference; the other's did not.")
    if own_phantom:
        phantoms = _joined(sorted({one.phantom for one in mine}))
        reasons.append(f"No other scanner measures {phantoms}, so a change of the phantom cannot be ruled out.")
    other = "slope" if change.kind == "step" else "step"
    if np.isfinite(change.favour) and change.favour < 1.5:
        reasons.append(f"A {other} would fit nearly as well.")
    return tuple(reasons)


def _joined(names: Sequence[str]) -> str:
    return names[0] if len(names) == 1 else f"{', '.join(names[:-1])} and {names[-1]}"


def _departure(
    name: str,
    scan: str,
    quantity: str,
    change: Change,
    now: float,
    undone: float | None,
    others: tuple[str, ...],
    reasons: tuple[str, ...],
) -> Departure:
    low, high = sorted(change.interval(0.95))
    onset, returned = day_of(change.onset), day_of(undone) if undone is not None else None
    between = (day_of(change.earliest), day_of(change.latest))
    if change.kind == "slope":
        rate = change.rate_interval() or (float("nan"), float("nan"))
        how = f"has drifted away from the others by {change.rate:+.1f} % a year ({rate[0]:+.1f} to {rate[1]:+.1f})"
        sentence = f"{quantity} ({scan}) on {name} {how} since about {onset} (between {between[0]} and {between[1]})"
    else:
        sentence = (
            f"{quantity} ({scan}) on {name} left the others by {change.size:+.1f} % ({low:+.1f} to {high:+.1f}) "
            f"by {onset} (between {between[0]} and {between[1]})"
        )
    sentence += (
        f", and was back by {returned}." if returned is not None else f"; it now stands {now:+.1f} % from before."
    )
    return Departure(
        name,
        quantity,
        scan,
        change.kind,
        onset,
        between,
        change.size,
        (low, high),
        change.rate if change.kind == "slope" else None,
        now,
        returned,
        others,
        reasons,
        sentence,
    )
