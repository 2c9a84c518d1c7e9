"""The log: what happened to scanners and phantoms, entered by people or read from DICOM."""

from __future__ import annotations

from datetime import datetime, timedelta
from typing import TYPE_CHECKING, Any, Literal

from sqlalchemy import insert, select

from qa.errors import StoreError, UsageError
from qa.store.covers import Covers, as_stored
from qa.store.desk import Desk, as_instant
from qa.store.records import LogEntryRow

if TYPE_CHECKING:
    from pandas import DataFrame

KINDS = ("service", "software", "coil", "refill", "temperature", "note")
NEAR = timedelta(hours=12)  # how far from a run a logged temperature may be to count for it


class Logbook(Desk):
    """The verbs of the log."""

    def add_log_entry(
        self,
        at: datetime,
        scanner: str | None,
        phantom: str | None,
        kind: str,
        text: str,
        restart_baseline: bool = False,
        source: Literal["person", "dicom"] = "person",
        who: str = "",
        celsius: float | None = None,
    ) -> int:
        """Enter something that happened; gives the entry's number.

        An entry with source "dicom" that is there already (same scanner, phantom, kind, text, time) is not made again.

        Parameters
        ----------
        at : when it happened, aware
        scanner, phantom : whom it concerns; None: not one in particular
        kind : one of KINDS; a temperature entry needs `celsius`
        restart_baseline : whether streams it concerns start a new baseline here

        Raises
        ------
        UsageError
            If the kind is unknown, the text is empty, or a temperature entry has no temperature.
        """
        if kind not in KINDS:
            raise UsageError(f"'{kind}' is no kind of log entry", remedy=f"Use one of: {', '.join(KINDS)}.")
        if not text.strip():
            raise UsageError("a log entry needs a text", remedy="Say in a few words what happened.")
        if kind == "temperature" and celsius is None:
            raise UsageError("a temperature entry needs the temperature", remedy="Give it in degrees Celsius.")
        row = as_stored(
            LogEntryRow,
            {
                "at": at,
                "scanner": scanner or None,
                "phantom": phantom or None,
                "kind": kind,
                "text": text,
                "celsius": celsius,
                "restart_baseline": restart_baseline,
                "source": source,
                "who": who,
                "entered_at": self.now(),
            },
        )
        del row["entry"]
        with self._write() as connection:
            if source == "dicom":
                same = [
                    column.is_(None) if row[column.key] is None else column == row[column.key]
                    for column in LogEntryRow.__table__.columns
                    if column.key in ("at", "scanner", "phantom", "kind", "text", "source")
                ]
                known = connection.execute(select(LogEntryRow.entry).where(*same)).scalar()
                if known is not None:
                    return int(known)
            made = connection.execute(insert(LogEntryRow).values(**row)).inserted_primary_key
            if made is None:
                raise StoreError("the database gave the log entry no number", self._where)
            row["entry"] = int(made[0])
            told = {name: value for name, value in row.items() if value is not None and name != "entered_at"}
            subject = " / ".join(name for name in (row["scanner"], row["phantom"]) if name) or "all"
            self._witness(connection, "logged", subject, told, Covers().add("log_entry", [row]))
        return int(row["entry"])

    def log_entries(self, *, scanner: str | None = None, phantom: str | None = None) -> DataFrame:
        """Log entries in the order of `at`: entry, at (datetime64[ns, UTC]), scanner, phantom (None where an entry
        concerns no one in particular), kind, text, restart_baseline, source, who, celsius, entered_at.

        Parameters
        ----------
        scanner, phantom : only entries about that one, or about none in particular
        """
        from qa.store.tidy import frame

        c = LogEntryRow.__table__.c
        columns = [c.entry, c.at, c.scanner, c.phantom, c.kind, c.text, c.restart_baseline, c.source, c.who]
        columns += [c.celsius, c.entered_at]
        query = select(*columns).order_by(c.at, c.entry)
        if scanner is not None:
            query = query.where((c.scanner == scanner) | c.scanner.is_(None))
        if phantom is not None:
            query = query.where((c.phantom == phantom) | c.phantom.is_(None))
        with self._read() as connection:
            return frame(columns, connection.execute(query).all())

    def temperature_logged(self, scanner: str, when: datetime) -> float | None:
        """The temperature in degrees Celsius that was logged for a scanner nearest to `when`, within 12 hours.

        Of entries equally near the one entered last counts. None if there is none.
        """
        moment = as_instant(when)
        c = LogEntryRow.__table__.c
        query = select(c.at, c.entry, c.celsius).where(
            c.kind == "temperature", c.scanner == scanner, c.at >= moment - NEAR, c.at <= moment + NEAR
        )
        with self._read() as connection:
            found: list[Any] = list(connection.execute(query))
        best = min(found, key=lambda row: (abs(row.at - moment), -row.entry), default=None)
        return None if best is None else float(best.celsius)
