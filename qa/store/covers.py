"""Digests of rows, so that the ledger can tell a changed, removed or smuggled-in row from what was recorded.

A digest covers the values of one row, or of a group of rows that share a key, without those that are absent: a later
migration may add columns and every old digest still holds.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field
from typing import Any

from qa.store.columns import canonical_row, stored_value
from qa.store.models import Base, EvidenceRow, FileRow, MeasurementRow, ReadingRow, RunRow
from qa.store.records import FindingRow, HeldRow, LimitsRow, LimitsSetRow, LogEntryRow, RulingRow

Row = dict[str, Any]
_VERDICT = ("verdict", "reasons", "limits_digest", "judged_at")


@dataclass(frozen=True, slots=True)
class Cover:
    """How the rows of one table are witnessed: which columns name a row, and which values count."""

    name: str
    table: type[Base]
    key: tuple[str, ...]
    leave_out: tuple[str, ...] = ()  # columns that change without being witnessed, or under another cover
    only: tuple[str, ...] = ()  # if given, these columns alone count
    present: Callable[[Mapping[Any, Any]], bool] = field(default=lambda row: True)

    def key_of(self, row: Mapping[Any, Any]) -> str:
        """The row's name in the ledger; a slash inside a part is escaped."""
        return "/".join(str(row[part]).replace("%", "%25").replace("/", "%2F") for part in self.key)

    def text_of(self, row: Mapping[Any, Any]) -> str:
        """The row's values that count, as one text."""
        values = {}
        for name, value in row.items():
            if value is None or name in self.leave_out or (self.only and name not in self.only):
                continue
            values[name] = hashlib.sha256(value).hexdigest() if isinstance(value, bytes) else value
        return canonical_row(values)


COVERS = {
    cover.name: cover
    for cover in (
        Cover("run", RunRow, ("run",)),
        Cover("file", FileRow, ("run", "generation")),
        Cover("measurement", MeasurementRow, ("run", "generation"), leave_out=_VERDICT),
        Cover(
            "verdict", MeasurementRow, ("run", "generation"), only=_VERDICT, present=lambda r: r["verdict"] is not None
        ),
        Cover("reading", ReadingRow, ("run", "generation", "scan", "vial")),
        Cover("evidence", EvidenceRow, ("run", "generation")),
        Cover("held", HeldRow, ("held",), leave_out=("last_seen",)),
        Cover("limits", LimitsRow, ("digest",)),
        Cover("limits_set", LimitsSetRow, ("digest",)),
        Cover("log_entry", LogEntryRow, ("entry",)),
        Cover("finding", FindingRow, ("finding",)),
        Cover("ruling", RulingRow, ("ruling",)),
    )
}


def as_stored(table: type[Base], values: Mapping[Any, Any]) -> Row:
    """One row of `table` as the database will give it back; columns not named are NULL."""
    return {column.name: stored_value(column.type, values.get(column.name)) for column in table.__table__.columns}


def digest_of(texts: Iterable[str]) -> str:
    """One digest for the rows of a key, whatever their order: 128 bits of SHA-256, 32 hex digits."""
    return hashlib.sha256("\n".join(sorted(texts)).encode("ascii")).hexdigest()[:32]


@dataclass(slots=True)
class Covers:
    """What one ledger entry witnesses: cover name -> key -> digest."""

    digests: dict[str, dict[str, str]] = field(default_factory=dict)

    def add(self, name: str, rows: Iterable[Mapping[Any, Any]]) -> Covers:
        """Witness `rows` (as stored); rows that share a key are taken together. Gives itself."""
        for key, texts in grouped(COVERS[name], rows).items():
            self.digests.setdefault(name, {})[key] = digest_of(texts)
        return self


def grouped(cover: Cover, rows: Iterable[Mapping[Any, Any]]) -> dict[str, list[str]]:
    """The texts of `rows` by key."""
    groups: dict[str, list[str]] = {}
    for row in rows:
        if cover.present(row):
            groups.setdefault(cover.key_of(row), []).append(cover.text_of(row))
    return groups
