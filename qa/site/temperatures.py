"""temperatures.csv: what the thermometer read, by scanner and day."""

from __future__ import annotations

import csv
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date, datetime, time
from pathlib import Path
from zoneinfo import ZoneInfo

from qa.errors import SiteError

COLUMNS = ("scanner", "date", "celsius")
POSSIBLE_C = (0.0, 50.0)  # outside it, a slip of the pen (or Fahrenheit)


@dataclass(frozen=True, slots=True)
class TemperatureEntry:
    """One line of the file; `exact` where it gives a time of day too."""

    scanner: str
    when: datetime
    exact: bool
    celsius: float


@dataclass(frozen=True, slots=True)
class TemperatureTable:
    """All lines of temperatures.csv."""

    entries: tuple[TemperatureEntry, ...] = ()

    def celsius(self, scanner: str, when: datetime, zone: ZoneInfo) -> float | None:
        """The entry of that scanner on the same day (in the site's time zone) nearest to `when`; None without one."""
        day = when.astimezone(zone).date()
        same = [e for e in self.entries if e.scanner == scanner and e.when.astimezone(zone).date() == day]
        nearest = min(same, key=lambda e: abs((e.when - when).total_seconds()) if e.exact else 43_200.0, default=None)
        return nearest.celsius if nearest else None


def read_temperatures(path: Path, scanners: Sequence[str], zone: ZoneInfo) -> TemperatureTable:
    """Read the file; absent means no temperatures.

    Raises
    ------
    SiteError
        With every bad line: columns, scanner names that site.toml does not have, dates, numbers.
    """
    if not path.exists():
        return TemperatureTable()
    entries, wrong = [], []
    with path.open(newline="", encoding="utf-8-sig") as file:
        rows = csv.reader(line if not line.lstrip().startswith("#") else "\n" for line in file)
        header: list[str] | None = None
        for row in rows:
            if not any(cell.strip() for cell in row):
                continue
            cells = [cell.strip() for cell in row]
            if header is None:
                header = [cell.lower() for cell in cells]
                if sorted(header) != sorted(COLUMNS):
                    raise SiteError(f"line {rows.line_num}: the columns must be {','.join(COLUMNS)}", str(path))
                continue
            entry = _entry(dict(zip(header, cells, strict=False)), scanners, zone)
            if isinstance(entry, str):
                wrong.append(f"line {rows.line_num}: {entry}")
            else:
                entries.append(entry)
    if wrong:
        raise SiteError("\n  ".join(wrong), str(path), "Mend these lines and run the command again.")
    return TemperatureTable(tuple(entries))


def _entry(row: dict[str, str], scanners: Sequence[str], zone: ZoneInfo) -> TemperatureEntry | str:
    """One line as an entry, or the sentence that says what is wrong with it."""
    if set(row) != set(COLUMNS):
        return f"{len(row)} values where {len(COLUMNS)} are needed ({','.join(COLUMNS)})"
    if row["scanner"] not in scanners:
        return f"site.toml has no scanner '{row['scanner']}'; it has: {', '.join(scanners)}"
    try:
        exact = len(row["date"]) > 10
        if exact:
            when = datetime.fromisoformat(row["date"])
        else:
            when = datetime.combine(date.fromisoformat(row["date"]), time(12))
    except ValueError:
        return f"'{row['date']}' is not a date: write it like 2026-03-02 or 2026-03-02T07:31"
    if when.tzinfo is None:
        when = when.replace(tzinfo=zone)
    try:
        celsius = float(row["celsius"])
    except ValueError:
        return f"'{row['celsius']}' is not a number of degrees Celsius"
    if not POSSIBLE_C[0] <= celsius <= POSSIBLE_C[1]:
        return (
            f"{row['celsius']} °C is not a temperature of a phantom in use ({POSSIBLE_C[0]:g} to {POSSIBLE_C[1]:g} °C)"
        )
    return TemperatureEntry(row["scanner"], when, exact, celsius)
