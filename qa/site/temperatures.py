"""temperatures.csv: what the thermometer read, by scanner and day."""

from __future__ import annotations

import csv
import io
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date, datetime, time
from pathlib import Path
from zoneinfo import ZoneInfo

from qa.errors import SiteError

COLUMNS = ("scanner", "date", "celsius")
FIRST_YEAR = 1970  # before it, a slip of the pen
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
    try:
        text = path.read_bytes().decode("utf-8-sig")
    except UnicodeDecodeError as error:
        raise SiteError("is not UTF-8 text", str(path), "Save it as UTF-8 in your editor.") from error
    except OSError as error:
        raise SiteError(f"cannot be read: {error.strerror}", str(path)) from error
    entries, wrong = [], []
    rows = csv.reader("\n" if line.lstrip().startswith("#") else line for line in io.StringIO(text, newline=""))
    header: list[str] | None = None
    try:
        for row in rows:
            cells = [cell.strip() for cell in row]
            if not any(cells):
                continue
            if header is None:
                header = [cell.lower() for cell in cells]
                if sorted(header) != sorted(COLUMNS):
                    what = f"line {rows.line_num}: the columns must be {','.join(COLUMNS)}, with commas between them"
                    raise SiteError(what, str(path), f"The line reads: {','.join(row)[:80]}")
                continue
            entry = _entry(header, cells, scanners, zone)
            if isinstance(entry, str):
                wrong.append(f"line {rows.line_num}: {entry}")
            else:
                entries.append(entry)
    except csv.Error as error:
        raise SiteError(f"line {rows.line_num}: {error}", str(path), "Is this a CSV file?") from error
    if wrong:
        raise SiteError("\n  ".join(wrong), str(path), "Mend these lines and run the command again.")
    return TemperatureTable(tuple(entries))


def _entry(header: list[str], cells: list[str], scanners: Sequence[str], zone: ZoneInfo) -> TemperatureEntry | str:
    """One line as an entry, or the sentence that says what is wrong with it."""
    if len(cells) != len(header):
        hint = "; write 20.4 with a point, not a comma" if len(cells) == len(header) + 1 else ""
        return f"{len(cells)} values where {len(header)} are needed ({','.join(header)}){hint}"
    row = dict(zip(header, cells, strict=True))
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
    if when.year < FIRST_YEAR:
        return f"'{row['date']}' is too long ago"
    try:
        celsius = float(row["celsius"])
    except ValueError:
        return f"'{row['celsius']}' is not a number of degrees Celsius"
    if not POSSIBLE_C[0] <= celsius <= POSSIBLE_C[1]:
        return (
            f"{row['celsius']} °C is not a temperature of a phantom in use ({POSSIBLE_C[0]:g} to {POSSIBLE_C[1]:g} °C)"
        )
    return TemperatureEntry(row["scanner"], when, exact, celsius)
