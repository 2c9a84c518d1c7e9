"""What every verb of the book stands on: a connection for reading, one for writing, the clock, the ledger's pen."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from datetime import UTC, date, datetime, time
from typing import Any

from sqlalchemy import Connection, Engine, insert

from qa.errors import StoreError, VialbookError
from qa.store.covers import Covers, Row, as_stored
from qa.store.engine import explained, is_sqlite
from qa.store.ledger import Anchor, append, lock_head
from qa.store.models import Base


class Desk:
    """An open database. Each read sees one instant; each write is one transaction, with its ledger entry in it."""

    def __init__(self, engine: Engine, where: str, clock: Callable[[], datetime]) -> None:
        self._engine = engine
        self._where = where
        self._clock = clock
        self._reader = engine if is_sqlite(engine.url) else engine.execution_options(isolation_level="REPEATABLE READ")
        self._writer = engine.execution_options(writes=True)

    @property
    def where(self) -> str:
        """The database's place, without password, for messages."""
        return self._where

    def now(self) -> datetime:
        """The present time by the book's clock, UTC."""
        return self._clock().astimezone(UTC)

    @contextmanager
    def _read(self) -> Iterator[Connection]:
        with explained(self._where), readable(self._where), self._reader.begin() as connection:
            yield connection

    @contextmanager
    def _write(self) -> Iterator[Connection]:
        with explained(self._where), self._writer.begin() as connection:
            lock_head(connection)
            yield connection

    def _witness(
        self, connection: Connection, kind: str, subject: str, payload: Mapping[str, Any], covers: Covers | None = None
    ) -> Anchor:
        return append(connection, self.now(), kind, subject, payload, covers)


@contextmanager
def readable(where: str) -> Iterator[None]:
    """A stored value that is not of its column's kind (somebody wrote it by hand) becomes a StoreError."""
    try:
        yield
    except VialbookError:
        raise
    except ValueError as error:
        remedy = "Somebody or something else wrote it. Run: vialbook audit, which names the rows."
        raise StoreError(f"a stored value cannot be read: {error}", where, remedy) from error


def add_rows(connection: Connection, table: type[Base], rows: Sequence[Mapping[str, Any]]) -> list[Row]:
    """Insert `rows`; gives them as stored, ready to be witnessed."""
    kept = [as_stored(table, row) for row in rows]
    if kept:
        connection.execute(insert(table), kept)
    return kept


def as_instant(when: datetime | date, *, end: bool = False) -> datetime:
    """A moment in UTC; a bare date is its first instant (with `end` its last); a time without zone is taken as UTC."""
    if isinstance(when, datetime):
        return when.replace(tzinfo=UTC) if when.tzinfo is None else when.astimezone(UTC)
    return datetime.combine(when, time.max if end else time.min, UTC)
