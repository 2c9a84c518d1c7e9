"""Turns the tidy frame of readings into one block of matrices per scanner and phantom: runs x streams."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from qa.words import Floats, State

if TYPE_CHECKING:
    import pandas as pd

Bools = NDArray[np.bool_]
Ints = NDArray[np.intp]
Stamps = NDArray[np.datetime64]


@dataclass(frozen=True, slots=True, order=True)
class Stream:
    """One vial in one scan; the scan fixes quantity and method."""

    scan: str
    vial: str
    quantity: str


@dataclass(frozen=True, slots=True, eq=False)
class Block:
    """All readings of one phantom on one scanner, in order of time. NaN where there is no usable number.

    Shapes: runs R, streams S. `value` in ms at the reference temperature where that is known; `u` is its standard
    uncertainty in percent of the value; `deviation` is percent from the reference, `u_deviation` its standard
    uncertainty with the reference's own; `reference_ms` and `u_reference_ms` are what `deviation` is from.
    """

    scanner: str
    phantom: str
    runs: tuple[str, ...]
    acquired: Stamps  # (R,) datetime64[ns], UTC
    void: Bools  # (R,)
    celsius: Floats  # (R,)
    streams: tuple[Stream, ...]
    value: Floats  # (R, S)
    u: Floats  # (R, S)
    deviation: Floats  # (R, S)
    u_deviation: Floats  # (R, S)
    reference_ms: Floats  # (R, S)
    u_reference_ms: Floats  # (R, S)
    asked: Bools  # (R, S): the run has a row for this stream, with or without a number

    @property
    def days(self) -> Floats:
        """Days since the epoch, (R,)."""
        return self.acquired.astype("datetime64[ns]").astype(np.int64) / 86_400e9

    @property
    def scans(self) -> tuple[tuple[str, str, NDArray[np.intp]], ...]:
        """(scan, quantity, indices of its streams), in order."""
        names: dict[tuple[str, str], list[int]] = {}
        for index, stream in enumerate(self.streams):
            names.setdefault((stream.scan, stream.quantity), []).append(index)
        return tuple((scan, quantity, np.array(where)) for (scan, quantity), where in names.items())


def stamps(column: pd.Series) -> Stamps:
    """A column of instants as datetime64[ns] in UTC; without a time zone they are taken as UTC."""
    import pandas as pd

    utc = pd.to_datetime(column, utc=True, format="ISO8601" if column.dtype == object else None)
    return np.asarray(utc.dt.tz_convert(None), dtype="datetime64[ns]")


def natural(label: str) -> tuple[int, float, str]:
    """Sort key that puts vial 10 after vial 9."""
    return (0, float(label), label) if label.replace(".", "", 1).isdecimal() else (1, 0.0, label)


def _column(frame: pd.DataFrame, name: str) -> Floats:
    import pandas as pd

    if name not in frame.columns:
        return np.full(len(frame), np.nan)
    return np.asarray(pd.to_numeric(frame[name], errors="coerce"), dtype=np.float64)


def blocks(history: pd.DataFrame) -> tuple[Block, ...]:
    """One block per scanner and phantom, sorted by name. `history` is the tidy frame of readings.

    A reading counts when its state carries a number, its run is not void and its value is positive and finite.
    Where a run holds a stream twice, the later row counts.
    """
    if history.empty:
        return ()
    made = []
    for (scanner, phantom), rows in history.groupby(["scanner", "phantom"], sort=True, observed=True):
        made.append(_block(str(scanner), str(phantom), rows))
    return tuple(made)


def _block(scanner: str, phantom: str, rows: pd.DataFrame) -> Block:
    import pandas as pd

    when = stamps(rows["acquired"])
    run_codes, run_index = pd.factorize(rows["run"])
    run_names = [str(name) for name in run_index]
    first = np.full(len(run_names), np.iinfo(np.int64).max)
    np.minimum.at(first, run_codes, when.astype(np.int64))
    order = np.lexsort((np.asarray(run_names), first))
    place = np.empty_like(order)
    place[order] = np.arange(order.size)
    r = place[run_codes]

    stream_codes, streams = _streams(rows)
    by_name = sorted(
        range(len(streams)), key=lambda i: (streams[i].quantity, streams[i].scan, natural(streams[i].vial))
    )
    rank = np.empty(len(streams), dtype=np.intp)
    rank[by_name] = np.arange(len(streams))
    s = rank[stream_codes]

    shape = (order.size, len(streams))
    void_row = (
        np.asarray(rows["run_void"].fillna(False), dtype=bool) if "run_void" in rows else np.zeros(len(rows), bool)
    )
    as_measured = _column(rows, "value_ms")
    corrected = _column(rows, "value_at_reference_ms")
    value = np.where(np.isfinite(corrected), corrected, as_measured)
    u_ms = np.where(np.isfinite(corrected), _column(rows, "u_at_reference_ms"), _column(rows, "u_ms"))
    u_ms = np.where(np.isfinite(u_ms), u_ms, _column(rows, "u_ms"))
    usable = np.isfinite(value) & (value > 0) & ~void_row
    if "state" in rows:
        usable &= np.asarray(rows["state"].isin([State.GOOD.value, State.MARKED.value]), dtype=bool)
    value = np.where(usable, value, np.nan)
    u = 100.0 * u_ms / value
    u = np.where(usable & ~(u > 0), _typical(u), u)
    deviation = np.where(usable, _column(rows, "deviation_percent"), np.nan)
    u_reference = 100.0 * _column(rows, "u_reference_ms") / _column(rows, "reference_ms")
    u_deviation = _column(rows, "u_deviation_percent")
    u_deviation = np.hypot(np.where(np.isfinite(u_deviation), u_deviation, u), np.nan_to_num(u_reference))

    def matrix(column: Floats) -> Floats:
        filled = np.full(shape, np.nan)
        filled[r, s] = column
        return filled

    void, celsius, asked = np.zeros(shape[0], bool), np.full(shape[0], np.nan), np.zeros(shape, bool)
    np.logical_or.at(void, r, void_row)
    celsius[r] = _column(rows, "celsius")
    asked[r, s] = True
    return Block(
        scanner,
        phantom,
        tuple(run_names[i] for i in order),
        first[order].view("datetime64[ns]"),
        void,
        celsius,
        tuple(streams[i] for i in by_name),
        matrix(value),
        matrix(u),
        matrix(deviation),
        matrix(u_deviation),
        matrix(_column(rows, "reference_ms")),
        matrix(_column(rows, "u_reference_ms")),
        asked,
    )


def _streams(rows: pd.DataFrame) -> tuple[Ints, list[Stream]]:
    """The stream of each row as a code, and what the codes mean."""
    import pandas as pd

    parts = [pd.factorize(rows[name]) for name in ("scan", "vial", "quantity")]
    code = np.zeros(len(rows), dtype=np.intp)
    for codes, found in parts:
        code = code * len(found) + codes
    kinds, first, stream_codes = np.unique(code, return_index=True, return_inverse=True)
    names = [[str(found[codes[row]]) for codes, found in parts] for row in first[: kinds.size]]
    return stream_codes, [Stream(scan, vial, quantity) for scan, vial, quantity in names]


def _typical(u: Floats) -> float:
    """What a reading without a stated uncertainty is taken to have: the median of the others, or 1 %."""
    known = u[np.isfinite(u) & (u > 0)]
    return float(np.median(known)) if known.size else 1.0


def restarts(log: pd.DataFrame | None, scanner: str, phantom: str) -> Stamps:
    """When baselines restart for one scanner and phantom, sorted. An entry that names neither speaks of all."""
    if log is None or log.empty:
        return np.array([], dtype="datetime64[ns]")
    asked = log[np.asarray(log["restart_baseline"].fillna(False), dtype=bool)]
    chosen = [_speaks_of(row_scanner, row_phantom, scanner, phantom) for row_scanner, row_phantom in _places(asked)]
    return np.unique(stamps(asked["at"][chosen])) if any(chosen) else np.array([], dtype="datetime64[ns]")


def _places(log: pd.DataFrame) -> Iterable[tuple[object, object]]:
    blank = [None] * len(log)
    return zip(log.get("scanner", blank), log.get("phantom", blank), strict=True)


def _speaks_of(row_scanner: object, row_phantom: object, scanner: str, phantom: str) -> bool:
    def agrees(named: object, wanted: str) -> bool:
        return not isinstance(named, str) or not named or named == wanted

    return agrees(row_scanner, scanner) and agrees(row_phantom, phantom)
