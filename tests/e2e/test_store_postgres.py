"""The book's contracts and the main job on a real PostgreSQL server, started for these tests."""

import getpass
import os
import shutil
import subprocess
import sys
import tempfile
import uuid
from pathlib import Path

import psycopg
import pytest
from alembic.autogenerate import compare_metadata
from alembic.migration import MigrationContext
from book_factory import fill
from command import ROOT, TODAY, vialbook
from sqlalchemy import create_engine
from store_contract import MeasuringContract
from store_decisions import DecidingContract
from store_mishaps import MishapContract
from store_next_version import NEXT, become_next_version

from qa.errors import OldBookError
from qa.store import migrate, open_book
from qa.store.models import Base
from qa.store.revision import HEAD, VERSION_TABLE

pytestmark = pytest.mark.postgres
USER = "vialbook"


def _as_server(*command):
    """Servers do not run as root: then it is Debian's user for them that runs it."""
    ahead = ("runuser", "-u", "postgres", "--") if getpass.getuser() == "root" else ()
    return [*ahead, *map(str, command)]


@pytest.fixture(scope="session")
def server():
    binaries = sorted(Path("/usr/lib/postgresql").glob("*/bin"))[-1]
    place = Path(tempfile.mkdtemp(prefix="pg", dir="/tmp"))  # short: a socket's path may have 107 characters
    place.chmod(0o777)
    data = place / "data"
    quiet = {"check": True, "capture_output": True, "cwd": "/"}
    make = (binaries / "initdb", "-D", data, "-U", USER, "-A", "trust", "-E", "UTF8", "--no-sync")
    subprocess.run(_as_server(*make), **quiet)
    options = f"-c listen_addresses= -c unix_socket_directories={place} -c fsync=off"
    start = _as_server(binaries / "pg_ctl", "-D", data, "-w", "-o", options, "-l", place / "log", "start")
    subprocess.run(start, check=True, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL, cwd="/")
    yield place
    subprocess.run(_as_server(binaries / "pg_ctl", "-D", data, "-m", "immediate", "stop"), **quiet)
    shutil.rmtree(place, ignore_errors=True)


def empty_database(server):
    name = f"book_{uuid.uuid4().hex[:10]}"
    with psycopg.connect(f"host={server} user={USER} dbname=postgres", autocommit=True) as connection:
        connection.execute(f"CREATE DATABASE {name}")
    return f"postgresql+psycopg://{USER}@/{name}?host={server}"


@pytest.fixture
def url(server):
    return empty_database(server)


class TestMeasuring(MeasuringContract):
    pass


class TestDeciding(DecidingContract):
    pass


class TestMishaps(MishapContract):
    kills = 4

    @pytest.fixture
    def another_url(self, server):
        return empty_database(server)


def test_migrating_an_empty_server_gives_the_tables_of_the_models(url):
    open_book(url).close()
    engine = create_engine(url)
    with engine.connect() as connection:
        context = MigrationContext.configure(connection, opts={"compare_type": True, "version_table": VERSION_TABLE})
        assert compare_metadata(context, Base.metadata) == []
    engine.dispose()


def test_an_older_book_is_refused_then_migrated_in_place(url, monkeypatch, tmp_path):
    with open_book(url) as book:
        fill(book, weeks=1, vials=4)
        before = book.readings()
    become_next_version(monkeypatch, tmp_path)
    with pytest.raises(OldBookError, match=r"pg_dump(.|\n)*vialbook migrate"):
        open_book(url)
    done = migrate(url)
    assert (done.before, done.after, done.copy) == (HEAD, NEXT, None)
    assert "pg_dump" in done.advice
    with open_book(url) as book:
        assert book.readings().equals(before)
        assert list(book.ledger()["kind"])[-1] == "migrated"
        assert book.audit() == []


def test_the_main_job_and_two_ingests_at_once(fresh_site, url):
    incoming = ROOT / "sample_site" / "incoming"
    parts = ["2026-09-29-quay-east-tideline-a", "2026-09-29-quay-west-tideline-a"]
    words = [sys.executable, "-c", "from qa.cli import main; main()", "ingest", "--no-report", "--json", "--quiet"]
    environment = os.environ | {"VIALBOOK_DATABASE": url}
    children = [
        subprocess.Popen(
            [*words, "--site", fresh_site, "--today", TODAY, incoming / part],
            env=environment,
            stdout=subprocess.DEVNULL,
            stderr=subprocess.PIPE,
        )
        for part in parts
    ]
    said = [child.communicate(timeout=300)[1] for child in children]
    assert all(child.returncode in (0, 1) for child in children), said
    with open_book(url, create=False) as book:
        assert set(book.runs()["scanner"]) == {"Quay east", "Quay west"}
        assert len(book.readings()) == 48
        assert book.audit() == []
    assert not (fresh_site / "book.sqlite").exists()


def test_a_server_that_is_not_there_is_named(fresh_site):
    environment = {"VIALBOOK_DATABASE": "postgresql+psycopg://nobody@localhost:1/none"}
    done = vialbook("drift", site=fresh_site, codes=(3,), environment=environment)
    assert "localhost:1" in done.err
    assert "Traceback" not in done.err
