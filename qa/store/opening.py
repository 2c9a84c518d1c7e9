"""Opening a book: nothing there, ours, an older one, a newer one, or somebody else's."""

from __future__ import annotations

from collections.abc import Callable
from datetime import UTC, datetime
from typing import Any

from sqlalchemy import Connection, Engine, inspect, text

from qa import __version__
from qa.errors import NoBookError, StoreError
from qa.store.book import Book
from qa.store.engine import book_url, explained, is_sqlite, make_engine, shown, sqlite_file, use_wal
from qa.store.ledger import append
from qa.store.revision import HEAD, VERSION_TABLE, check_revision

CREATION_LOCK = 0x5669616C  # any number that all Vialbooks agree on


def utc_now() -> datetime:
    """The present instant."""
    return datetime.now(UTC)


def open_book(site_or_url: Any, *, create: bool = True, clock: Callable[[], datetime] = utc_now) -> Book:
    """Open the book of a site; use it in a ``with`` statement.

    Parameters
    ----------
    site_or_url : a Site (anything with `database_url`), a database URL, or the path of an SQLite file
    create : make the database if there is none yet
    clock : gives the present time, aware; what is recorded is dated by it

    Raises
    ------
    OldBookError
        If an older version of Vialbook made the database (`vialbook migrate` mends that), or a newer one.
    StoreError
        If it cannot be reached, is not a book, or is absent and `create` is false.
    """
    url = book_url(site_or_url)
    where = shown(url)
    file = sqlite_file(url)
    if file is not None and not file.exists() and not create:
        raise NoBookError("there is no book yet", where, "Take in a first run: vialbook ingest FOLDER.")
    if file is not None and not file.parent.is_dir():
        raise StoreError("the folder of the database does not exist", where, "Make it, or correct `database`.")
    engine = make_engine(url)
    try:
        with explained(where):
            _make_ready(engine, where, create, clock)
    except BaseException:
        engine.dispose()
        raise
    return Book(engine, where, clock)


def stored_revision(connection: Connection) -> str | None:
    """The schema revision of the database; None if it is no book (empty, or somebody else's)."""
    if not inspect(connection).has_table(VERSION_TABLE):
        return None
    row = connection.execute(text(f"SELECT version_num FROM {VERSION_TABLE}")).first()
    return str(row[0]) if row else None


def _make_ready(engine: Engine, where: str, create: bool, clock: Callable[[], datetime]) -> None:
    with engine.connect() as connection:
        stored = stored_revision(connection)
        empty = stored is None and not inspect(connection).get_table_names()
    if stored is None and empty and create:
        stored = _create(engine, clock())
    if stored is None:
        if empty:
            raise NoBookError("there is no book yet", where, "Take in a first run: vialbook ingest FOLDER.")
        what = "this database belongs to another program: it has tables, but none of Vialbook's"
        raise StoreError(what, where, "Nothing was changed. Give Vialbook a database of its own in site.toml.")
    check_revision(stored, where)


def _create(engine: Engine, now: datetime) -> str | None:
    """Make the tables, unless another process was faster; gives the revision then stored."""
    from qa.store.migrating import upgrade

    if is_sqlite(engine.url):
        use_wal(engine)
    with engine.execution_options(writes=True).begin() as connection:
        if not is_sqlite(engine.url):
            connection.execute(text("SELECT pg_advisory_xact_lock(:key)"), {"key": CREATION_LOCK})
        if stored_revision(connection) is None:
            upgrade(connection)
            append(connection, now, "made", "book", {"revision": HEAD, "vialbook_version": __version__})
        return stored_revision(connection)
