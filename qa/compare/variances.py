"""Variance components of one scan, and the smallest change they let anyone see."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from qa.compare.agreement import SmallestChange, Variances
from qa.compare.intervals import Interval, sum_interval
from qa.compare.precision import SMALLEST_CHANGE
from qa.compare.reml import Components, reml
from qa.compare.slabs import Key, Slab

_NO_REPEAT = "no vial was measured twice on one scanner"
_ONE_SCANNER = "only one scanner was measured"


def components(made: Sequence[Slab]) -> Components | None:
    """Variance components over all levels that tell scanners apart: from a reference, or shared by two scanners."""
    shared: dict[Key, set[str]] = {}
    referred: set[Key] = set()
    for slab in made:
        for column, key in enumerate(slab.keys):
            if np.isfinite(slab.percent[:, column]).any():
                shared.setdefault(key, set()).add(slab.scanner)
                referred |= {key} if slab.from_reference[column] else set()
    common = {key for key, scanners in shared.items() if len(scanners) > 1 or key in referred} or set(shared)
    names = sorted({slab.scanner for slab in made})
    keys = sorted(common)
    values, scanner, vial, run = [], [], [], []
    runs = 0
    for slab in made:
        for column, key in enumerate(slab.keys):
            if key not in common:
                continue
            here = np.flatnonzero(np.isfinite(slab.percent[:, column]))
            values.append(slab.percent[here, column])
            scanner.append(np.full(here.size, names.index(slab.scanner)))
            vial.append(np.full(here.size, keys.index(key)))
            run.append(here + runs)
        runs += len(slab.days)
    if not values or not sum(len(part) for part in values):
        return None
    return reml(np.concatenate(values), np.concatenate(scanner), np.concatenate(vial), np.concatenate(run))


def variances(made: Sequence[Slab]) -> Variances:
    """Standard deviations of the parts, s_r and s_R over all vials, with intervals."""
    repeated = any((np.isfinite(slab.percent).sum(axis=0) > 1).any() for slab in made)
    found = components(made) if repeated else None
    if found is None:
        return Variances(*(None,) * 11, not_given=dict.fromkeys(_FIELDS, _NO_REPEAT))
    not_given: dict[str, str] = {}
    if found.scanner is None:
        not_given |= dict.fromkeys(("scanner_percent", "s_R_percent", "between_cv_percent"), _ONE_SCANNER)
    if found.scanner_vial is None:
        not_given["scanner_vial_percent"] = _ONE_SCANNER if found.scanner is None else "scanners share too few vials"
    if found.vial is None:
        not_given["vial_percent"] = "only one vial was measured"
    if found.run is None:
        not_given["run_percent"] = "it takes several vials in several runs of one scanner"
    within, between = _within(found), _between(found)
    both = [*between, *within]
    return Variances(
        _root(found.scanner),
        _root(found.scanner_vial),
        _root(found.vial),
        _root(found.run),
        _root(found.rest),
        _root_sum(within),
        sum_interval(within),
        _root_sum(both) if between else None,
        sum_interval(both) if between else None,
        _root_sum(between) if between else None,
        sum_interval(between) if between else None,
        not_given,
    )


_FIELDS = (
    *("scanner_percent", "scanner_vial_percent", "vial_percent", "run_percent", "rest_percent"),
    *("s_r_percent", "s_R_percent", "between_cv_percent"),
)


def _root_sum(parts: Sequence[tuple[float, float]]) -> float:
    return float(np.sqrt(sum(part for part, _ in parts)))


def _root(variance: float | None) -> float | None:
    return float(np.sqrt(variance)) if variance is not None else None


def _within(found: Components) -> list[tuple[float, float]]:
    """The variance of a reading within a scanner, as mean squares with their degrees of freedom."""
    runs = float(found.runs - found.scanners)
    if found.run is None:
        return [
            (found.rest, float(max(found.readings - found.scanners * found.vials, found.readings - found.vials - 1)))
        ]
    vials = max(found.readings / found.runs, 1.0 + 1e-9)
    return [
        (found.run + found.rest / vials, runs),
        (found.rest * (vials - 1.0) / vials, max(runs * (vials - 1.0), 1.0)),
    ]


def _between(found: Components) -> list[tuple[float, float]]:
    """The variance between scanners, as mean squares with their degrees of freedom; empty for one scanner."""
    if found.scanner is None:
        return []
    freedom = found.scanners - 1.0
    if found.scanner_vial is None:
        return [(found.scanner, freedom)]
    vials = max(found.vials, 2)
    return [
        (found.scanner + found.scanner_vial / vials, freedom),
        (found.scanner_vial * (vials - 1.0) / vials, freedom * (vials - 1.0)),
    ]


def smallest_change(found: Variances) -> SmallestChange:
    """2.77 times s_r and s_R: what two readings of one object must differ by to differ with 95 % confidence.

    References
    ----------
    ISO 5725-6:1994, 4.1 (repeatability and reproducibility limits).
    """
    not_given = {}
    for ours, theirs in (("single_scanner_percent", "s_r_percent"), ("any_two_percent", "s_R_percent")):
        if theirs in found.not_given:
            not_given[ours] = found.not_given[theirs]
    return SmallestChange(
        _times(found.s_r_percent),
        _times_both(found.s_r_interval),
        _times(found.s_R_percent),
        _times_both(found.s_R_interval),
        not_given,
    )


def _times(s: float | None) -> float | None:
    return SMALLEST_CHANGE * s if s is not None else None


def _times_both(interval: Interval | None) -> Interval | None:
    return (SMALLEST_CHANGE * interval[0], SMALLEST_CHANGE * interval[1]) if interval is not None else None
