"""Who left the others, and when: changes of a scanner's level that the median of the others did not make."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.special import stdtrit

from qa.compare.agreement import Departure
from qa.compare.slabs import Slab
from qa.compare.tables import day_of
from qa.trend.baseline import nanmedian
from qa.trend.change import Change, measure, wild
from qa.trend.changes import find_changes
from qa.trend.levels import common_level
from qa.words import Floats, Ints

LEAST_PERCENT = 0.5  # a smaller change is no departure
CHANCE = 0.01  # that any scanner of a steady herd is said to have left, over all scans together


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
    percent = percent - nanmedian(percent)
    step = np.diff(percent, axis=0) / np.sqrt(2.0)
    sd = np.nan_to_num(1.4826 * nanmedian(np.abs(step)))
    floor = float(np.nanmedian(sd[sd > 0])) if (sd > 0).any() else 1e-6
    level = common_level(percent, np.where(sd > 0.2 * floor, sd, floor))
    here = np.isfinite(level)
    noise = 1.4826 * float(np.median(np.abs(np.diff(level[here])))) / np.sqrt(2.0) if here.sum() > 2 else floor
    noise = max(noise, 1e-6)
    here &= ~wild(level, np.full(level.shape, noise))
    if here.sum() < 4:
        return None
    return _Series(slab.scanner, slab.phantom, slab.days[here], level[here], noise)


def _of_scanner(name: str, scan: str, quantity: str, series: Sequence[_Series], alpha: float) -> list[Departure]:
    mine = [one for one in series if one.scanner == name]
    phantoms = {one.phantom for one in mine}
    rest = [one for one in series if one.scanner != name]
    same = [one for one in rest if one.phantom in phantoms]
    others = same or rest
    number: Ints = np.repeat(np.arange(len(mine)), [one.days.size for one in mine])
    days, level = np.concatenate([one.days for one in mine]), np.concatenate([one.level for one in mine])
    sd = np.repeat([one.sd for one in mine], [one.days.size for one in mine])
    changes = find_changes(days, level, sd, number, alpha=alpha)
    told = []
    for place, change in enumerate(changes):
        along = [other for other in changes if other is not change]
        apart = _apart(change, others, along)
        if apart is None or abs(apart.size) < LEAST_PERCENT:
            continue
        now = _now(change, mine) - _now(change, others)
        undone = _undone(change, changes[place + 1 :])
        reasons = _reasons(mine, apart.others, change, not same)
        told.append(_departure(name, scan, quantity, apart, now if np.isfinite(now) else apart.size, undone, reasons))
    return [one for one in told if not _only_a_return(one, told)]


@dataclass(frozen=True, slots=True, eq=False)
class _Apart:
    """A change of one scanner less what the others did at that time; u are standard uncertainties."""

    change: Change
    size: float
    u_size: float
    rate: float  # NaN for a step
    u_rate: float
    others: tuple[str, ...]  # that could tell


def _apart(change: Change, others: Sequence[_Series], along: Sequence[Change]) -> _Apart | None:
    """None where no other scanner can tell, or where the others moved alike."""
    own, u_own = (change.size, change.u_size) if change.kind == "step" else (change.rate, change.u_rate)
    theirs, spread, names = [], [], []
    for one in others:
        moved, u = measure(change, one.days, one.level, np.full(one.days.size, one.sd), along=along)
        if np.isfinite(moved):
            theirs.append(moved)
            spread.append(u)
            names.append(one.scanner)
    if not theirs:
        return None
    alike = float(np.median(theirs))
    left = own - alike
    u = float(np.sqrt(u_own**2 + 1.57 * np.mean(np.square(spread)) / len(spread)))
    if left / own < 0.5 or abs(left) < 2.0 * u:
        return None
    span = change.size / own
    slope = change.kind == "slope"
    return _Apart(
        change,
        left * span,
        u * abs(span),
        left if slope else float("nan"),
        u if slope else float("nan"),
        tuple(sorted(set(names))),
    )


def _now(change: Change, series: Sequence[_Series]) -> float:
    """Median over series of where each stands in its last five runs against before the change; NaN if none can tell."""
    stands = []
    for one in series:
        before = one.level[one.days < change.onset]
        if before.size and before.size < one.level.size:
            stands.append(float(np.median(one.level[-5:]) - np.median(before)))
    return float(np.median(stands)) if stands else float("nan")


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
    name: str, scan: str, quantity: str, apart: _Apart, now: float, undone: float | None, reasons: tuple[str, ...]
) -> Departure:
    change = apart.change
    reach = float(stdtrit(change.freedom, 0.975))
    low, high = apart.size - reach * apart.u_size, apart.size + reach * apart.u_size
    onset, returned = day_of(change.onset), day_of(undone) if undone is not None else None
    between = (day_of(change.earliest), day_of(change.latest))
    slope = change.kind == "slope"
    if slope:
        least, most = apart.rate - reach * apart.u_rate, apart.rate + reach * apart.u_rate
        sentence = (
            f"{quantity} ({scan}) on {name} has drifted away from the others by {apart.rate:+.1f} % a year "
            f"({least:+.1f} to {most:+.1f}) since about {onset} (between {between[0]} and {between[1]})"
        )
    else:
        sentence = (
            f"{quantity} ({scan}) on {name} left the others by {apart.size:+.1f} % ({low:+.1f} to {high:+.1f}) "
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
        apart.size,
        (low, high),
        apart.rate if slope else None,
        now,
        returned,
        apart.others,
        reasons,
        sentence,
    )
