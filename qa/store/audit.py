"""Audit: is the book what the ledger says it is, and are the originals what the book says they are?

What this shows, and what it cannot: any row changed, removed or added behind the ledger's back is found, as is any
entry of the ledger that was changed, taken out or cut off at the end, unless everything was recomputed to fit. Only an
anchor written down elsewhere (in a paper log, in a mail) shows that: `anchor` gives one, `audit` takes it.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from datetime import datetime, timedelta
from typing import TYPE_CHECKING, Any, Protocol

from sqlalchemy import Connection, select

from qa.errors import AlteredError, ArchiveError
from qa.store.covers import COVERS, Cover, digest_of
from qa.store.desk import Desk
from qa.store.ledger import START, Anchor, Head, entry_hash
from qa.store.lenient import rows_of, told
from qa.store.models import FileRow
from qa.store.records import LedgerHeadRow, LedgerRow

if TYPE_CHECKING:
    from pandas import DataFrame

Progress = Callable[[str, int, int], None]  # what is being looked at, how many are done, of how many
CLOCK_SLACK = timedelta(minutes=5)  # clocks of two machines may differ by so much


class Originals(Protocol):
    """What audit needs of an archive."""

    def read(self, sha256: str) -> bytes: ...


@dataclass(frozen=True, slots=True)
class Problem:
    """One thing an auditor should know. `grave`: something is not as it was recorded; else: lawful, but notable."""

    code: str
    text: str
    subject: str
    grave: bool = True


class Audit(Desk):
    """The verbs of the ledger."""

    def ledger(self, subject: str | None = None) -> DataFrame:
        """The ledger in order: seq, at (datetime64[ns, UTC]), kind, subject, payload (dict), previous, hash."""
        from qa.store.tidy import frame, objects

        c = LedgerRow.__table__.c
        columns = [c.seq, c.at, c.kind, c.subject, c.payload, c.previous, c.hash]
        query = select(*columns).order_by(c.seq)
        if subject is not None:
            query = query.where(c.subject == subject)
        with self._read() as connection:
            result = frame(columns, connection.execute(query).all())
        result["payload"] = objects([json.loads(text) for text in result["payload"]])
        return result

    def anchor(self) -> Anchor:
        """The ledger's end, to be written down elsewhere; `audit` takes it later."""
        with self._read() as connection:
            head = _head(connection)
        return Anchor(head.entries, head.hash)

    def audit(
        self, archive: Originals | None = None, progress: Progress | None = None, anchor: Anchor | None = None
    ) -> list[Problem]:
        """Everything that is not as it was recorded, and lawful things an auditor should see.

        Parameters
        ----------
        archive : of original files; each recorded file is read and hashed. None: the originals are not looked at
        progress : told what is being looked at, how many are done and of how many
        anchor : a point of the ledger written down earlier; without it, a ledger rewritten as a whole looks sound
        """
        tell = progress or (lambda what, done, of: None)
        with self._read() as connection:
            problems, promised = _walk(connection, anchor, tell)
            for number, cover in enumerate(COVERS.values()):
                tell("tables", number, len(COVERS))
                problems += _compare(connection, cover, promised.get(cover.name, {}))
            files = {row[0]: row[1] for row in connection.execute(select(FileRow.sha256, FileRow.path).distinct())}
        tell("tables", len(COVERS), len(COVERS))
        if archive is not None:
            for number, (sha256, path) in enumerate(sorted(files.items())):
                tell("files", number, len(files))
                problems += _check_file(archive, sha256, path)
            tell("files", len(files), len(files))
        return problems


@dataclass(frozen=True, slots=True)
class _Promise:
    """What the ledger last said of a row."""

    digest: str
    seq: int


def _walk(
    connection: Connection, anchor: Anchor | None, tell: Progress
) -> tuple[list[Problem], dict[str, dict[str, _Promise]]]:
    """Follow the chain from its start; gives what is wrong with it, and what it promises of the tables."""
    head = _head(connection)
    problems: list[Problem] = []
    promised: dict[str, dict[str, _Promise]] = {}
    seq, last, latest = 0, START, None
    anchored = anchor is None
    for row in rows_of(connection, LedgerRow, "seq"):
        if row["seq"] % 1000 == 0:
            tell("ledger", row["seq"], head.entries)
        name = f"ledger entry {row['seq']}"
        if row["seq"] != seq + 1:
            problems.append(
                _chain(f"ledger entries {seq + 1} to {row['seq'] - 1} are missing", f"ledger entry {seq + 1}")
            )
        elif row["previous"] != last:
            problems.append(_chain(f"{name} does not follow from the entry before it", name))
        parts = {key: row[key] for key in ("seq", "at", "kind", "subject", "payload", "covers", "previous")}
        dated = isinstance(row["at"], datetime)
        sound = dated and entry_hash(**parts) == row["hash"]
        if not sound:
            problems.append(_chain(f"{name} ({row['kind']}) is not as it was written", name))
        if dated and latest is not None and row["at"] < latest - CLOCK_SLACK:
            text = f"{name} is dated {row['at']:%Y-%m-%d %H:%M} UTC, before the entry before it"
            problems.append(Problem("clock-went-back", text, name, grave=False))
        if sound and row["kind"] == "limits-altered-backwards":
            problems.append(_altered(row))
        if anchor is not None and row["seq"] == anchor.seq:
            anchored = row["hash"] == anchor.hash
        seq, last, latest = row["seq"], row["hash"], row["at"] if dated else latest
        for table, keys in told(row["covers"]).items():
            if isinstance(keys, dict):
                promised.setdefault(table, {}).update({key: _Promise(digest, seq) for key, digest in keys.items()})
    if (seq, last) != tuple(head):
        text = (
            f"the ledger ends at entry {seq}, but {head.entries} entries were written: its end was cut off or changed"
        )
        problems.append(_chain(text, "ledger"))
    if not anchored and anchor is not None:
        text = f"the ledger does not pass through the anchor {anchor}: its history was rewritten"
        problems.append(Problem("anchor-missed", text, f"ledger entry {anchor.seq}"))
    return problems, promised


def _compare(connection: Connection, cover: Cover, promised: dict[str, _Promise]) -> Iterator[Problem]:
    """The rows of one table against what the ledger promises."""
    groups: dict[str, list[str]] = {}
    for row in rows_of(connection, cover.table):
        if cover.present(row):
            groups.setdefault(cover.key_of(row), []).append(cover.text_of(row))
    name = cover.name.replace("_", " ")
    for key, texts in groups.items():
        promise = promised.get(key)
        if promise is None:
            yield Problem("row-unwitnessed", f"{name} {key} is in the book, but the ledger knows nothing of it", key)
        elif digest_of(texts) != promise.digest:
            text = f"{name} {key} is not as recorded in ledger entry {promise.seq}"
            yield Problem("row-altered", text + _as_it_was(connection, cover, key, promise.seq, texts), key)
    for key, promise in promised.items():
        if key not in groups:
            text = f"{name} {key}, recorded in ledger entry {promise.seq}, is missing"
            yield Problem("row-missing", text, key)


def _as_it_was(connection: Connection, cover: Cover, key: str, seq: int, texts: list[str]) -> str:
    """For a reading: its value now, and the one that the ledger tells of."""
    if cover.name != "reading":
        return ""
    now = json.loads(texts[0])
    payload = connection.execute(select(LedgerRow.payload).where(LedgerRow.seq == seq)).scalar()
    for entry in told(payload).get("readings", []):
        if entry[:2] == [now["scan"], now["vial"]]:
            return (
                f": value {now.get('value_ms')} ms, u {now.get('u_ms')} ms in the book;"
                f" value {entry[3]} ms, u {entry[4]} ms in the ledger"
            )
    return ""


def _check_file(archive: Originals, sha256: str, path: str) -> Iterator[Problem]:
    try:
        content = archive.read(sha256)
    except AlteredError:
        yield Problem("original-altered", f"the original of {path} is not what was taken in", sha256)
        return
    except (ArchiveError, OSError) as error:
        yield Problem("original-missing", f"the original of {path} cannot be read: {error}", sha256)
        return
    if hashlib.sha256(content).hexdigest() != sha256:
        yield Problem("original-altered", f"the original of {path} is not what was taken in", sha256)


def _altered(row: Any) -> Problem:
    changes = [one for one in told(row["payload"]).get("changes", []) if one["judged_runs"]]
    what = "; ".join(f"{one['change']} {json.dumps(one['block'], ensure_ascii=False)}" for one in changes)
    text = f"limits were altered for a time already judged, on {row['at']:%Y-%m-%d %H:%M} UTC: {what}"
    return Problem("limits-altered-backwards", text, f"ledger entry {row['seq']}", grave=False)


def _head(connection: Connection) -> Head:
    row = connection.execute(select(LedgerHeadRow.entries, LedgerHeadRow.hash)).first()
    if row is None or not isinstance(row[0], int):  # taken out, or overwritten with something else
        return Head(0, START)
    return Head(row[0], str(row[1]))


def _chain(text: str, subject: str) -> Problem:
    return Problem("chain-broken", text, subject)
