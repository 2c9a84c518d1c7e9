"""The tables of a book, second half: what was noted, decided and witnessed."""

from __future__ import annotations

from datetime import date, datetime
from typing import Any

from sqlalchemy import CheckConstraint, Date, ForeignKey, Integer, String
from sqlalchemy.orm import Mapped, mapped_column

from qa.store.models import Base


class HeldRow(Base):
    """A file that could not be used: one row per place and content."""

    __tablename__ = "held"

    held: Mapped[str] = mapped_column(String(32), primary_key=True)  # digest of path and content hash
    path: Mapped[str]
    sha256: Mapped[str | None] = mapped_column(String(64), index=True)  # NULL: could not be read at all
    code: Mapped[str]
    reason: Mapped[str]
    first_seen: Mapped[datetime]
    last_seen: Mapped[datetime]
    resolved: Mapped[datetime | None]  # since when it is no longer in the way


class LimitsRow(Base):
    """One block of limits.toml, as it was when first seen. A changed block is a block gone and another come."""

    __tablename__ = "limits"

    digest: Mapped[str] = mapped_column(String(64), primary_key=True)
    since: Mapped[date] = mapped_column(Date)
    block: Mapped[dict[str, Any]]  # as written
    first_seen: Mapped[datetime]
    withdrawn: Mapped[datetime | None]  # since when it is no longer in the file


class LimitsSetRow(Base):
    """All blocks of limits.toml at one time, in file order: what a verdict's digest points to."""

    __tablename__ = "limits_set"

    digest: Mapped[str] = mapped_column(String(64), primary_key=True)
    blocks: Mapped[list[Any]]  # digests of the blocks
    first_seen: Mapped[datetime]


class LogEntryRow(Base):
    """Something that happened to a scanner or phantom."""

    __tablename__ = "log_entry"
    __table_args__ = (CheckConstraint("source IN ('person', 'dicom')", name="source"),)

    entry: Mapped[int] = mapped_column(Integer, primary_key=True)
    at: Mapped[datetime] = mapped_column(index=True)
    scanner: Mapped[str | None] = mapped_column(index=True)
    phantom: Mapped[str | None]
    kind: Mapped[str]
    text: Mapped[str]
    celsius: Mapped[float | None]
    restart_baseline: Mapped[bool]
    source: Mapped[str] = mapped_column(String(6))
    who: Mapped[str]
    entered_at: Mapped[datetime]


class FindingRow(Base):
    """Something the trend analysis raised. One finding grows; it is not raised anew."""

    __tablename__ = "finding"
    __table_args__ = (CheckConstraint("state IN ('open', 'ruled', 'faded')", name="state"),)

    finding: Mapped[str] = mapped_column(primary_key=True)
    content: Mapped[dict[str, Any]]
    first_raised: Mapped[datetime]
    updated: Mapped[datetime]
    state: Mapped[str] = mapped_column(String(6))


class RulingRow(Base):
    """A named person's decision on a finding as it then was, with a reason."""

    __tablename__ = "ruling"

    ruling: Mapped[int] = mapped_column(Integer, primary_key=True)
    finding: Mapped[str] = mapped_column(ForeignKey("finding.finding"), index=True)
    who: Mapped[str]
    decision: Mapped[str]
    reason: Mapped[str]
    at: Mapped[datetime]
    content: Mapped[dict[str, Any]]  # the finding when it was ruled on


class LedgerRow(Base):
    """One witnessed event. Append-only; each entry's hash covers the one before."""

    __tablename__ = "ledger"

    seq: Mapped[int] = mapped_column(Integer, primary_key=True, autoincrement=False)
    at: Mapped[datetime]
    kind: Mapped[str]
    subject: Mapped[str]
    payload: Mapped[str]  # canonical JSON: what happened, for people
    covers: Mapped[str]  # canonical JSON: table -> key -> digest of the rows as written
    previous: Mapped[str] = mapped_column(String(64))
    hash: Mapped[str] = mapped_column(String(64))


class LedgerHeadRow(Base):
    """One row: how long the ledger is and its last hash. Whoever writes locks it first."""

    __tablename__ = "ledger_head"
    __table_args__ = (CheckConstraint("id = 1", name="single"),)

    id: Mapped[int] = mapped_column(Integer, primary_key=True, autoincrement=False)
    entries: Mapped[int]
    hash: Mapped[str] = mapped_column(String(64))
