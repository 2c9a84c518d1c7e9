"""Readings cut to what is compared: one slab per scan, scanner and phantom, all in percent from one origin."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from qa.trend.streams import Block, Bools
from qa.words import Floats

Key = tuple[str, str]  # (phantom, vial): one level


@dataclass(frozen=True, slots=True, eq=False)
class Slab:
    """One scan of one phantom on one scanner. Shapes: runs r, vials v; NaN where there is no usable number.

    `percent` is from the reference where the vial has one for this scanner's field, else from the mean over scanners.
    """

    scanner: str
    phantom: str
    labels: tuple[str, ...]
    days: Floats  # (r,) since the epoch
    percent: Floats  # (r, v)
    u: Floats  # (r, v) stated standard uncertainty of one reading, percent
    value_ms: Floats  # (r, v) at the reference temperature
    reference_ms: Floats  # (v,) the latest; NaN: none
    u_reference_ms: Floats  # (v,)
    from_reference: Bools  # (v,)

    @property
    def keys(self) -> tuple[Key, ...]:
        """The level of each column."""
        return tuple((self.phantom, label) for label in self.labels)

    @property
    def whole(self) -> Floats:
        """(r,) days of runs with at least one reading."""
        return self.days[np.isfinite(self.percent).any(axis=1)]

    @property
    def means(self) -> Floats:
        """(v,) mean deviation of each vial over runs, percent."""
        count = np.isfinite(self.percent).sum(axis=0)
        total = np.nansum(self.percent, axis=0)
        return np.where(count > 0, total / np.maximum(count, 1), np.nan)


def slabs(blocks: Sequence[Block]) -> Iterator[tuple[str, str, list[Slab]]]:
    """(scan, quantity, slabs) for every scan that any scanner has, sorted by quantity and scan."""
    parts: dict[tuple[str, str], list[Block]] = {}
    for block in blocks:
        for scan, quantity, _ in block.scans:
            parts.setdefault((quantity, scan), []).append(block)
    for (quantity, scan), having in sorted(parts.items()):
        yield scan, quantity, _with_origin([_slab(block, scan, quantity) for block in having])


def _slab(block: Block, scan: str, quantity: str) -> Slab:
    columns = np.array([i for i, s in enumerate(block.streams) if (s.scan, s.quantity) == (scan, quantity)])
    deviation, value = block.deviation[:, columns], block.value[:, columns]
    has = np.isfinite(deviation).sum(axis=0) * 2 >= np.isfinite(value).sum(axis=0)
    has &= np.isfinite(deviation).any(axis=0)
    return Slab(
        block.scanner,
        block.phantom,
        tuple(block.streams[c].vial for c in columns),
        block.days,
        np.where(has, deviation, np.nan),
        block.u[:, columns],
        np.where(np.isfinite(deviation) | ~has, value, np.nan),
        _latest(block.reference_ms[:, columns]),
        _latest(block.u_reference_ms[:, columns]),
        has,
    )


def _latest(column: Floats) -> Floats:
    """(r, v) -> (v,): the last finite number of each column, NaN where there is none."""
    there = np.isfinite(column)
    last = len(column) - 1 - there[::-1].argmax(axis=0)
    return np.where(there.any(axis=0), column[last, np.arange(column.shape[1])], np.nan)


def _with_origin(made: list[Slab]) -> list[Slab]:
    """Levels without a reference on any scanner get the mean of the scanners' mean values as their origin.

    Where some scanners have a reference and others none (another field), the others have no part in that level.
    """
    values: dict[Key, list[float]] = {}
    referred: set[Key] = set()
    for slab in made:
        for column, key in enumerate(slab.keys):
            if slab.from_reference[column]:
                referred.add(key)
            elif np.isfinite(slab.value_ms[:, column]).any():
                values.setdefault(key, []).append(float(np.nanmean(slab.value_ms[:, column])))
    finished = []
    for slab in made:
        percent, value = slab.percent.copy(), slab.value_ms.copy()
        for column, key in enumerate(slab.keys):
            if slab.from_reference[column]:
                continue
            if key in referred or key not in values:
                value[:, column] = np.nan
            else:
                percent[:, column] = 100.0 * (value[:, column] / float(np.mean(values[key])) - 1.0)
        finished.append(
            Slab(
                slab.scanner,
                slab.phantom,
                slab.labels,
                slab.days,
                percent,
                slab.u,
                value,
                slab.reference_ms,
                slab.u_reference_ms,
                slab.from_reference,
            )
        )
    return finished


@dataclass(frozen=True, slots=True)
class Scatter:
    """How one scanner's single readings scatter about the means of their vials, percent squared."""

    total: float  # variance of one reading
    freedom: float  # effective degrees of freedom of `total`
    run: float  # variance of run means over vials: what a run's vials share, and their own scatter averaged
    shared: float  # variance of what a run's vials share, at least 0
    runs: int
    vials: float  # readings in a run, harmonic mean


def scatter(percent: Floats) -> Scatter | None:
    """Scatter between the runs of one scanner and phantom, (r, v) -> None where no vial was read twice.

    The vials of a run move together (temperature, set-up), so readings are fewer independent ones than their number:
    degrees of freedom are combined from the scatter of run means and that of vials within runs.
    """
    count = np.isfinite(percent).sum(axis=0)
    columns = percent[:, count > 1]
    if not columns.size:
        return None
    rest = columns - np.nanmean(columns, axis=0)
    there = np.isfinite(rest)
    per_run = there.sum(axis=1)
    rows = per_run > 0
    runs = int(rows.sum())
    total = float(np.nansum(rest**2) / np.sum(count[count > 1] - 1.0))
    means = np.nansum(rest[rows], axis=1) / per_run[rows]
    of_runs = float(np.sum(means**2) / (runs - 1.0))
    vials = float(1.0 / np.mean(1.0 / per_run[rows]))
    if vials <= 1.0:
        return Scatter(total, runs - 1.0, of_runs, 0.0, runs, vials)
    own = max((total - of_runs) * vials / (vials - 1.0), 0.0)
    within = own * (vials - 1.0) / vials
    below = of_runs**2 / (runs - 1.0) + within**2 / ((runs - 1.0) * (vials - 1.0))
    freedom = (of_runs + within) ** 2 / below if below > 0 else runs - 1.0
    return Scatter(total, freedom, of_runs, max(of_runs - own / vials, 0.0), runs, vials)
