"""The connection to the database: the only module that knows the two apart."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from sqlalchemy import Connection, Engine, create_engine, event, exc
from sqlalchemy.engine import URL, make_url
from sqlalchemy.pool import StaticPool

from qa.errors import StoreError

BUSY_SECONDS = 30.0
_LONG_NAMES = {"postgres": "postgresql+psycopg", "postgresql": "postgresql+psycopg", "sqlite": "sqlite"}


def book_url(site_or_url: Any) -> URL:
    """The database URL of a site (anything with `database_url`), of a URL, or of the path of an SQLite file.

    Raises
    ------
    StoreError
        If it is no URL, or names a kind of database that Vialbook does not know.
    """
    text = getattr(site_or_url, "database_url", site_or_url)
    if isinstance(text, Path):
        return URL.create("sqlite", database=str(text))
    try:
        url = make_url(str(text))
    except exc.ArgumentError as error:
        remedy = "Write sqlite:///book.sqlite or postgresql+psycopg://user@host/name."
        raise StoreError("this is not a database URL", str(text), remedy) from error
    url = url.set(drivername=_LONG_NAMES.get(url.drivername, url.drivername))
    if url.drivername not in ("sqlite", "sqlite+pysqlite", "postgresql+psycopg"):
        remedy = "Use sqlite:/// or postgresql+psycopg://."
        raise StoreError(f"'{url.drivername}' databases are not supported", shown(url), remedy)
    return url


def shown(url: URL) -> str:
    """The URL as it may be shown: a file's path, or the address without its password."""
    return url.database or "memory" if is_sqlite(url) else url.render_as_string(hide_password=True)


def is_sqlite(url: URL) -> bool:
    return url.get_backend_name() == "sqlite"


def sqlite_file(url: URL) -> Path | None:
    """The file of an SQLite database; None for one in memory or on a server."""
    if not is_sqlite(url) or not url.database or url.database == ":memory:":
        return None
    return Path(url.database)


def make_engine(url: URL, *, foreign_keys: bool = True) -> Engine:
    """An engine whose transactions behave alike on both databases: readers see one instant, writers queue.

    On SQLite, Python's driver is told to leave transactions alone; a connection with the execution option
    ``writes=True`` begins by taking the write lock, so that two writers wait instead of failing half-way.
    """
    if is_sqlite(url):
        engine = create_engine(
            url,
            connect_args={"timeout": BUSY_SECONDS},
            **({} if sqlite_file(url) else {"poolclass": StaticPool}),
        )
        _manage_sqlite(engine, foreign_keys)
        return engine
    try:
        return create_engine(url, pool_pre_ping=True, connect_args={"connect_timeout": int(BUSY_SECONDS)})
    except ModuleNotFoundError as error:
        remedy = "Install it: pip install 'vialbook[postgres]'."
        raise StoreError("the PostgreSQL driver psycopg is not installed", shown(url), remedy) from error


def _manage_sqlite(engine: Engine, foreign_keys: bool) -> None:
    @event.listens_for(engine, "connect")
    def configure(connection: Any, _: object) -> None:
        connection.isolation_level = None  # transactions are begun below, by name
        connection.execute(f"PRAGMA foreign_keys = {'ON' if foreign_keys else 'OFF'}")
        connection.execute("PRAGMA synchronous = FULL")  # a committed run survives a power cut

    @event.listens_for(engine, "begin")
    def begin(connection: Connection) -> None:
        writes = connection.get_execution_options().get("writes", False)
        connection.exec_driver_sql("BEGIN IMMEDIATE" if writes else "BEGIN")


def use_wal(engine: Engine) -> None:
    """Switch an SQLite file to write-ahead logging (it stays so): readers never wait for a writer."""
    connection = engine.raw_connection()
    try:
        connection.cursor().execute("PRAGMA journal_mode = WAL")
    finally:
        connection.close()


@contextmanager
def explained(where: str) -> Iterator[None]:
    """Turn what the database layer raises into a StoreError that says where and what to do.

    Raises
    ------
    StoreError
    """
    try:
        yield
    except exc.IntegrityError as error:
        raise StoreError(f"the database refused a row: {_brief(error)}", where) from error
    except exc.DBAPIError as error:
        raise StoreError(_brief(error), where, _remedy(_brief(error))) from error
    except exc.SQLAlchemyError as error:
        raise StoreError(str(error), where) from error


def _brief(error: exc.DBAPIError) -> str:
    lines = str(error.orig).strip().splitlines()
    return lines[0] if lines else type(error.orig).__name__


def _remedy(text: str) -> str:
    for sign, remedy in {
        "locked": "Another process is writing for longer than usual; try again when it has finished.",
        "unable to open": "Check that the folder exists and may be written to.",
        "readonly": "Check the permissions of the file and of its folder.",
        "not a database": "This file is something else: check `database` in site.toml.",
        "malformed": "The file is damaged: restore the last copy, then ingest again; nothing is counted twice.",
        "full": "Make room on the disk and try again; nothing half-written remains.",
        "connection": "Check that the server runs and that address, name and password in the URL are right.",
    }.items():
        if sign in text:
            return remedy
    return ""
