"""The ledger: what happened, in order, each entry hashed together with the hash before it.

Whoever changes an entry, or takes one out, must recompute every later hash; whoever wrote down the last hash
elsewhere (an anchor) then sees it. Against someone who rewrites the whole chain and whose reader has no anchor,
no record inside the same database can help: hence `audit` prints one.
"""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime
from typing import Any, NamedTuple

from sqlalchemy import Connection, insert, select, update

from qa.errors import StoreError
from qa.store.columns import canonical, clean, in_utc
from qa.store.covers import Covers
from qa.store.records import LedgerHeadRow, LedgerRow

START = "0" * 64  # what the first entry takes as the hash before it


class Head(NamedTuple):
    """How long the ledger is, and its last hash."""

    entries: int
    hash: str


@dataclass(frozen=True, slots=True)
class Anchor:
    """A point of the ledger to write down elsewhere: whatever lies before it cannot then change unseen."""

    seq: int
    hash: str

    def __str__(self) -> str:
        return f"{self.seq}:{self.hash}"

    @classmethod
    def read(cls, text: str) -> Anchor:
        """The anchor written as ``seq:hash``.

        Raises
        ------
        ValueError
            If `text` is not of that form.
        """
        seq, _, digest = text.strip().partition(":")
        if not seq.isdecimal() or len(digest) != 64 or set(digest) - set("0123456789abcdef"):
            raise ValueError(f"'{text}' is not an anchor: it should read NUMBER:64 hex digits, as audit prints it")
        return cls(int(seq), digest)


def entry_hash(seq: int, at: datetime, kind: str, subject: str, payload: str, covers: str, previous: str) -> str:
    """SHA-256 over everything an entry says and the hash before it, as canonical JSON."""
    text = canonical([seq, in_utc(at), kind, subject, payload, covers, previous])
    return hashlib.sha256(text.encode("ascii")).hexdigest()


def lock_head(connection: Connection) -> Head:
    """The ledger's end, locked for this transaction: writers queue here (on SQLite they have queued already)."""
    columns = select(LedgerHeadRow.entries, LedgerHeadRow.hash).where(LedgerHeadRow.id == 1)
    row = connection.execute(columns.with_for_update()).first()
    if row is None:
        remedy = "Somebody took it out. Nothing more is written; see what vialbook audit says, and restore a copy."
        raise StoreError("the ledger has lost its end", remedy=remedy)
    return Head(int(row[0]), str(row[1]))


def append(
    connection: Connection,
    at: datetime,
    kind: str,
    subject: str,
    payload: Mapping[str, Any],
    covers: Covers | None = None,
) -> Anchor:
    """Add one entry in the transaction that also makes the change it witnesses.

    Parameters
    ----------
    at : aware
    kind : what happened, one word: "measured", "judged", "held", "released", "limits", "logged", "raised", "ruled"…
    subject : whom it concerns: a run, a finding, a scanner
    payload : what an auditor reads; plain values
    covers : digests of the rows as they are after the change
    """
    head = lock_head(connection)
    seq = head.entries + 1
    row: dict[str, Any] = {
        "seq": seq,
        "at": in_utc(at),
        "kind": kind,
        "subject": clean(subject),
        "payload": canonical(payload),
        "covers": canonical(covers.digests if covers else {}),
        "previous": head.hash,
    }
    row["hash"] = entry_hash(**row)
    connection.execute(insert(LedgerRow), row)
    connection.execute(update(LedgerHeadRow).where(LedgerHeadRow.id == 1).values(entries=seq, hash=row["hash"]))
    return Anchor(seq, row["hash"])
