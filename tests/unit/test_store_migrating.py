"""Opening what is there: an older book, a newer one, somebody else's database; and bringing an older one up to date."""

import os
import shutil
import sqlite3
import tempfile
from contextlib import closing, contextmanager
from pathlib import Path

import pytest
from alembic.autogenerate import compare_metadata
from alembic.migration import MigrationContext
from book_factory import fill
from sqlalchemy import create_engine
from store_next_version import NEXT, become_next_version

from qa.errors import NoBookError, OldBookError, StoreError
from qa.intake.series import Held
from qa.store import migrate, open_book
from qa.store.models import Base
from qa.store.revision import HEAD, VERSION_TABLE


def set_revision(path, name):
    with closing(sqlite3.connect(path)) as connection:
        connection.execute(f"UPDATE {VERSION_TABLE} SET version_num = ?", (name,))
        connection.commit()


def test_migrating_an_empty_database_gives_the_tables_of_the_models(tmp_path):
    open_book(tmp_path / "book.sqlite").close()
    engine = create_engine(f"sqlite:///{tmp_path / 'book.sqlite'}")
    with engine.connect() as connection:
        context = MigrationContext.configure(connection, opts={"compare_type": True, "version_table": VERSION_TABLE})
        assert compare_metadata(context, Base.metadata) == []
    engine.dispose()


def test_no_book_is_not_made_by_looking(tmp_path):
    with pytest.raises(NoBookError, match="ingest"):
        open_book(tmp_path / "book.sqlite", create=False)
    assert list(tmp_path.iterdir()) == []


def test_an_older_book_is_refused_and_the_way_is_told(tmp_path):
    path = tmp_path / "book.sqlite"
    open_book(path).close()
    set_revision(path, "0000_before")
    with pytest.raises(OldBookError, match="vialbook migrate") as caught:
        open_book(path)
    assert caught.value.exit_code == 2


def test_a_newer_book_is_left_alone(tmp_path):
    path = tmp_path / "book.sqlite"
    open_book(path).close()
    set_revision(path, "9000_later")
    for act in (open_book, migrate):
        with pytest.raises(OldBookError, match="newer version"):
            act(path)


def test_migrating_what_is_up_to_date_does_nothing(tmp_path):
    path = tmp_path / "book.sqlite"
    open_book(path).close()
    done = migrate(path)
    assert (done.before, done.after, done.copy) == (HEAD, HEAD, None)
    assert [found.name for found in tmp_path.iterdir() if found.suffix == ".sqlite"] == ["book.sqlite"]


def test_migrating_copies_the_book_first_and_keeps_every_row(tmp_path, monkeypatch):
    path = tmp_path / "book.sqlite"
    with open_book(path) as book:
        fill(book, weeks=2)
        before = book.readings()
    become_next_version(monkeypatch, tmp_path)
    with pytest.raises(OldBookError, match="older version"):
        open_book(path)
    done = migrate(path)
    assert (done.before, done.after) == (HEAD, NEXT)
    assert done.copy is not None
    assert str(done.copy) in done.advice
    with open_book(path) as book:
        assert book.readings().equals(before)
        assert book.audit() == []
        assert "migrated" in list(book.ledger()["kind"])
    with closing(sqlite3.connect(done.copy)) as copy:
        assert copy.execute("SELECT count(*) FROM reading").fetchone()[0] == len(before)
        assert copy.execute(f"SELECT version_num FROM {VERSION_TABLE}").fetchone()[0] == HEAD


def test_somebody_elses_database_is_not_touched(tmp_path):
    path = tmp_path / "book.sqlite"
    with closing(sqlite3.connect(path)) as connection:
        connection.execute("CREATE TABLE recipes (dish TEXT)")
        connection.commit()
    content = path.read_bytes()
    with pytest.raises(StoreError, match="another program"):
        open_book(path)
    assert path.read_bytes() == content


@pytest.mark.parametrize("make", [lambda p: p.mkdir(), lambda p: p.write_bytes(b"not a database" * 200)])
def test_what_is_no_database_gives_a_clear_error(tmp_path, make):
    make(tmp_path / "book.sqlite")
    with pytest.raises(StoreError) as caught:
        open_book(tmp_path / "book.sqlite")
    assert "book.sqlite" in str(caught.value)


def test_a_database_that_somebody_locks_for_long_says_so(tmp_path, monkeypatch):
    monkeypatch.setattr("qa.store.engine.BUSY_SECONDS", 0.1)
    path = tmp_path / "book.sqlite"
    with open_book(path) as book, closing(sqlite3.connect(path, isolation_level=None)) as other:
        other.execute("BEGIN IMMEDIATE")
        with pytest.raises(StoreError):
            fill(book, weeks=1)
        other.execute("ROLLBACK")
        fill(book, weeks=1)
        assert book.audit() == []


def test_an_unknown_kind_of_database_is_named():
    for url in ("mysql://a@b/c", "nonsense"):
        with pytest.raises(StoreError, match=r"sqlite:///"):
            open_book(url)


@contextmanager
def not_as_root():
    """Root may write everywhere: files are then used as the system's least user (any number but 0)."""
    root = os.geteuid() == 0
    if root:
        os.seteuid(65534)
    try:
        yield
    finally:
        if root:
            os.seteuid(0)


@pytest.fixture
def public():
    """A folder that every user of the machine can reach; pytest's own belong to one user."""
    folder = Path(tempfile.mkdtemp(prefix="book"))
    folder.chmod(0o755)
    yield folder
    folder.chmod(0o755)
    shutil.rmtree(folder)


def test_a_read_only_book_can_be_read_and_is_not_written(public):
    path = public / "book.sqlite"
    with open_book(path) as book:
        fill(book, weeks=1)
        kept = len(book.readings())
        assert book.audit() == []
    path.chmod(0o444)
    public.chmod(0o777)  # the log beside the file may be made
    with not_as_root(), open_book(path, create=False) as book:
        assert len(book.readings()) == kept
        with pytest.raises(StoreError, match=r"readonly(.|\n)*Check the permissions"):
            book.hold([Held("a.dcm", "truncated", "cut short", "a" * 64)])
        assert book.audit() == []


def test_a_book_in_a_read_only_folder_says_so(public):
    path = public / "book.sqlite"
    with open_book(path) as book:
        fill(book, weeks=1)
    content = path.read_bytes()
    path.chmod(0o444)
    public.chmod(0o555)
    with not_as_root(), pytest.raises(StoreError, match=r"book\.sqlite(.|\n)*Check the permissions"):
        open_book(path)
    assert path.read_bytes() == content
