"""Puts a comparison together from the tidy frame of readings."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import date, timedelta
from typing import TYPE_CHECKING

import numpy as np

from qa.compare.agreement import Agreement, Comparison, Departure
from qa.compare.herd import departures
from qa.compare.slabs import Slab, slabs
from qa.compare.tables import day_of, levels, pairs, scanner_rows
from qa.compare.variances import smallest_change, variances
from qa.trend.streams import blocks, stamps

if TYPE_CHECKING:
    from pandas import DataFrame


def agree(history: DataFrame, *, since: date | None = None, until: date | None = None) -> Agreement:
    """How scanners agree: bias, linearity, repeatability, reproducibility, pairs, and who has left the others.

    Parameters
    ----------
    history : tidy frame of readings; those in a state that carries a number, of runs that are not void, count
    since, until : days (UTC), both inclusive; None: no bound

    Returns
    -------
    Agreement
        Deviations are temperature-corrected and in percent from the reference where a vial has one, else from the
        mean over scanners. What cannot be given is None, with the reason in `not_given` or `remarks`.

    Notes
    -----
    Repeatability here is what one scanner gives from run to run (new set-up each time), not within one session; drift
    within the chosen days counts as scatter. Narrow the days to leave a known change out.
    """
    chosen = _between(history, since, until)
    made = list(slabs(blocks(chosen)))
    whole = [(scan, quantity, [slab for slab in part if slab.whole.size]) for scan, quantity, part in made]
    whole = [entry for entry in whole if entry[2]]
    scanners = tuple(sorted({slab.scanner for _, _, part in whole for slab in part}))
    comparisons, apart, back = [], [], []
    remarks: list[str] = []
    if not whole:
        remarks.append("No reading in these days can be compared." if len(history) else "There is no reading yet.")
    elif len(scanners) == 1:
        remarks.append(f"Only {scanners[0]} was measured: there is no other scanner to agree with.")
    for scan, quantity, part in whole:
        still, returned, unasked = departures(scan, quantity, part, len(whole))
        apart += still
        back += returned
        remarks += unasked if len(scanners) > 1 else []
        found = variances(part)
        comparisons.append(
            Comparison(
                quantity,
                scan,
                levels(part),
                scanner_rows(part),
                found,
                smallest_change(found),
                pairs(part),
                _remarks(part),
            )
        )
    days = np.concatenate([slab.whole for _, _, part in whole for slab in part]) if whole else np.zeros(0)
    return Agreement(
        since,
        until,
        day_of(float(days.min())) if days.size else None,
        day_of(float(days.max())) if days.size else None,
        _runs(whole),
        scanners,
        tuple(comparisons),
        _largest_first(apart),
        _largest_first(back),
        tuple(remarks),
    )


def _between(history: DataFrame, since: date | None, until: date | None) -> DataFrame:
    if not len(history) or (since is None and until is None):
        return history
    when = stamps(history["acquired"])
    here = np.ones(len(history), dtype=bool)
    if since is not None:
        here &= when >= np.datetime64(since, "ns")
    if until is not None:
        here &= when < np.datetime64(until + timedelta(days=1), "ns")
    return history[here]


def _runs(made: Sequence[tuple[str, str, list[Slab]]]) -> int:
    return len({(slab.scanner, slab.phantom, day) for _, _, part in made for slab in part for day in slab.whole})


def _largest_first(found: Sequence[Departure]) -> tuple[Departure, ...]:
    return tuple(sorted(found, key=lambda one: (-abs(one.now_percent), one.scanner, one.scan)))


def _remarks(part: Sequence[Slab]) -> tuple[str, ...]:
    """What a reader of the tables should know."""
    said = []
    for slab in part:
        missing = [v for c, v in enumerate(slab.labels) if not np.isfinite(slab.percent[:, c]).any()]
        if missing:
            said.append(
                f"{slab.phantom} on {slab.scanner}: nothing to compare for {len(missing)} of {len(slab.labels)} vials "
                f"({', '.join(missing)})."
            )
    shared = {slab.phantom: {other.scanner for other in part if other.phantom == slab.phantom} for slab in part}
    if len({slab.scanner for slab in part}) > 1:
        said += [
            f"{phantom} was measured on {next(iter(scanners))} only."
            for phantom, scanners in sorted(shared.items())
            if len(scanners) == 1
        ]
    return tuple(said)
