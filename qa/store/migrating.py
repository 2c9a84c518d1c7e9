"""Making and renewing the tables: the only module that loads Alembic, driven from code."""

from __future__ import annotations

import sqlite3
from contextlib import closing
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from alembic import command
from alembic.config import Config
from sqlalchemy import Connection

from qa.errors import StoreError
from qa.places import shipped
from qa.store.engine import book_url, explained, is_sqlite, make_engine, shown, sqlite_file
from qa.store.ledger import append
from qa.store.models import Base
from qa.store.opening import stored_revision
from qa.store.revision import HEAD, VERSION_TABLE, check_revision, is_older


@dataclass(frozen=True, slots=True)
class Migration:
    """What `migrate` did. `copy` is None on a server, and where nothing was to be done."""

    before: str
    after: str
    copy: Path | None
    advice: str


def configuration(connection: Connection) -> Config:
    """Alembic's configuration, without a file: the scripts that ship with this version, and one connection."""
    config = Config()
    config.set_main_option("script_location", str(shipped("migrations")).replace("%", "%%"))
    config.set_main_option("path_separator", "os")
    config.attributes["connection"] = connection
    config.attributes["metadata"] = Base.metadata
    config.attributes["version_table"] = VERSION_TABLE
    return config


def upgrade(connection: Connection) -> None:
    """Bring the tables to this version's revision, inside the transaction that is open on `connection`."""
    command.upgrade(configuration(connection), "head")


def migrate(site_or_url: Any, *, now: datetime | None = None) -> Migration:
    """Bring an older book to this version; an SQLite file is first copied beside itself, with the date in its name.

    Raises
    ------
    OldBookError
        If the book is newer than this version.
    StoreError
        If there is no book, or it cannot be copied or migrated; then it is as it was.
    """
    url = book_url(site_or_url)
    where = shown(url)
    file = sqlite_file(url)
    moment = now or datetime.now(UTC)
    if file is not None and not file.exists():
        raise StoreError("there is no book to migrate", where)
    engine = make_engine(url, foreign_keys=False)  # rebuilding a table must not empty those that point to it
    try:
        with explained(where):
            with engine.connect() as connection:
                before = stored_revision(connection)
            if before is None:
                raise StoreError("this database is not a book; nothing was changed", where)
            if before == HEAD:
                return Migration(before, HEAD, None, "The book is up to date; nothing was done.")
            if not is_older(before):
                check_revision(before, where)
            copy = copy_aside(file, before, moment) if file is not None else None
            told = {"before": before, "after": HEAD, "copy": copy.name if copy is not None else None}
            with engine.execution_options(writes=True).begin() as connection:
                upgrade(connection)
                _check_references(connection, where)
                append(connection, moment, "migrated", "book", told)
    finally:
        engine.dispose()
    if copy is None:
        advice = "A dump of a PostgreSQL database is its operator's duty (pg_dump); Vialbook made none."
    else:
        advice = f"The book as it was is kept in {copy}."
    return Migration(before, HEAD, copy, advice)


def copy_aside(file: Path, revision: str, now: datetime) -> Path:
    """A whole, checked copy of an SQLite database beside it, made while others may use it.

    Raises
    ------
    StoreError
        If the copy cannot be written or does not read back whole.
    """
    stem = f"{file.stem}-{now.astimezone(UTC):%Y-%m-%dT%H%M%S}-{revision}"
    target = file.with_name(f"{stem}{file.suffix}")
    if target.exists():
        raise StoreError("the copy's name is taken", str(target), "Move that file away, then migrate again.")
    try:
        with closing(sqlite3.connect(file)) as source, closing(sqlite3.connect(target)) as copy:
            source.backup(copy)
            verdict = copy.execute("PRAGMA integrity_check").fetchone()[0]
    except sqlite3.Error as error:
        raise StoreError(f"the book could not be copied: {error}", str(target), "Nothing was migrated.") from error
    if verdict != "ok":
        raise StoreError(f"the copy is not whole: {verdict}", str(target), "Nothing was migrated.")
    return target


def _check_references(connection: Connection, where: str) -> None:
    if is_sqlite(connection.engine.url) and connection.exec_driver_sql("PRAGMA foreign_key_check").first():
        raise StoreError("the migration would leave rows that point nowhere; it was undone", where)
