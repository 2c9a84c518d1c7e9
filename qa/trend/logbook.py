"""Log entries: those the data show by themselves, and those near an onset."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date, datetime, timedelta
from typing import TYPE_CHECKING, Literal

import numpy as np

from qa.trend.findings import NearEntry
from qa.trend.streams import stamps

if TYPE_CHECKING:
    import pandas as pd

_MARGIN = timedelta(days=3)


@dataclass(frozen=True, slots=True)
class ReadEntry:
    """A change of software or coil, read from the runs themselves."""

    kind: Literal["software", "coil"]
    at: datetime  # of the first run with the new state, UTC
    scanner: str
    text: str
    run: str


def log_entries_from_runs(runs: pd.DataFrame) -> list[ReadEntry]:
    """Software and coil changes between successive runs of each scanner, in order of time.

    Runs that don't say (empty) are passed over; a first run is no change.
    """
    import pandas as pd

    if runs.empty:
        return []
    ordered = runs.assign(_when=stamps(runs["acquired"])).sort_values("_when", kind="stable")
    found: list[ReadEntry] = []
    for scanner, rows in ordered.groupby("scanner", sort=True, observed=True):
        for kind in ("software", "coil"):
            if kind not in rows:
                continue
            before = ""
            for now, when, run in zip(rows[kind], rows["_when"], rows["run"], strict=True):
                if not isinstance(now, str) or not now.strip():
                    continue
                if before and now != before:
                    instant = pd.Timestamp(when).tz_localize("UTC").to_pydatetime()
                    text = f"{kind.capitalize()} changed from {before} to {now} (read from the images)."
                    found.append(ReadEntry(kind, instant, str(scanner), text, str(run)))
                before = now
    return sorted(found, key=lambda entry: (entry.at, entry.scanner, entry.kind))


def near(
    log: pd.DataFrame | None, scanners: Sequence[str], phantoms: Sequence[str], interval: tuple[date, date]
) -> tuple[NearEntry, ...]:
    """Entries about these scanners or phantoms (or about none in particular) within three days of an interval."""
    if log is None or log.empty:
        return ()
    when = stamps(log["at"])
    first = np.datetime64(interval[0] - _MARGIN, "ns")
    last = np.datetime64(interval[1] + _MARGIN + timedelta(days=1), "ns")
    chosen = []
    for place in np.flatnonzero((when >= first) & (when < last)):
        row = log.iloc[int(place)]
        if not (_about(row.get("scanner"), scanners) and _about(row.get("phantom"), phantoms)):
            continue
        instant = when[place].astype("datetime64[us]").item()
        chosen.append(
            (when[place], NearEntry(str(row.get("entry", place)), instant, str(row["kind"]), str(row["text"])))
        )
    return tuple(entry for _, entry in sorted(chosen, key=lambda pair: pair[0]))


def _about(named: object, wanted: Sequence[str]) -> bool:
    return not isinstance(named, str) or not named or named in wanted
