"""Whatever is changed behind the ledger's back, the audit names it."""

import sqlite3
from contextlib import closing
from datetime import date

import pytest
from book_factory import START, fill

from qa.errors import StoreError
from qa.intake.series import Held
from qa.site.limits import LimitBlock
from qa.store import Anchor, open_book
from qa.store.covers import COVERS
from qa.store.ledger import START as CHAIN_START
from qa.store.ledger import entry_hash

FINDING = {"finding": "F-1", "verdict": "watch", "sentence": "T1 moved.", "cause": "scanner"}


@pytest.fixture
def path(tmp_path):
    """A book in which every table has rows."""
    target = tmp_path / "book.sqlite"
    with open_book(target) as book:
        book.note_limits([LimitBlock(since=date(2025, 1, 1), watch_percent=3, act_percent=5)])
        fill(book, weeks=2, vials=4, evidence=True)
        book.add_log_entry(START, None, None, "note", "something happened")
        book.hold([Held("in/a.dcm", "truncated", "cut short", "f" * 64)])
        book.save_findings([FINDING])
        book.rule("F-1", "A. Person", "dismiss", "coil was loose")
        assert book.audit() == []
    return target


def change(path, statement):
    with closing(sqlite3.connect(path)) as connection:
        assert connection.execute(statement).rowcount > 0
        connection.commit()


def codes(path, anchor=None):
    with open_book(path) as book:
        return {problem.code for problem in book.audit(anchor=anchor) if problem.grave}


TABLES = (
    *("reading", "measurement", "run", "evidence", "file", "held", "limits", "limits_set"),
    *("log_entry", "finding", "ruling"),
)


def test_no_table_is_forgotten_here():
    assert {cover.table.__tablename__ for cover in COVERS.values()} == set(TABLES)


@pytest.mark.parametrize("table", TABLES)
def test_a_row_that_is_gone_is_missed(path, table):
    change(path, f"DELETE FROM {table} WHERE rowid = (SELECT max(rowid) FROM {table})")
    assert codes(path) & {"row-missing", "row-altered"}


@pytest.mark.parametrize(
    ("table", "setting"),
    [
        ("reading", "value_ms = value_ms + 1e-9"),
        ("reading", "state = 'good', notes = '[\"fine\"]'"),
        ("measurement", "verdict = 'steady', reasons = '[\"all is well\"]'"),
        ("measurement", "acquired = '2020-01-01 00:00:00.000000'"),
        ("measurement", "celsius = NULL"),
        ("run", "scanner = 'Another'"),
        ("evidence", "content = x'00'"),
        ("file", "path = 'elsewhere'"),
        ("held", "reason = 'none'"),
        ("limits", "block = '{}'"),
        ("limits", "withdrawn = '2020-01-01 00:00:00.000000'"),
        ("limits_set", "blocks = '[]'"),
        ("log_entry", "text = 'nothing happened'"),
        ("finding", "state = 'faded'"),
        ("ruling", "who = 'B. Person'"),
    ],
)
def test_a_changed_value_is_named(path, table, setting):
    change(path, f"UPDATE {table} SET {setting} WHERE rowid = (SELECT max(rowid) FROM {table})")
    assert "row-altered" in codes(path) or "row-missing" in codes(path)


@pytest.mark.parametrize(
    ("table", "setting"),
    [
        ("reading", "notes = 'fine'"),
        ("reading", "value_ms = 'fine'"),
        ("reading", "value_ms = x'00'"),
        ("measurement", "acquired = 'yesterday'"),
        ("measurement", "seen = x'ff'"),
        ("limits", "since = 7"),
        ("log_entry", "text = x'00'"),
    ],
)
def test_a_value_of_another_kind_is_named_by_audit_and_breaks_nothing(path, table, setting):
    change(path, f"UPDATE {table} SET {setting} WHERE rowid = (SELECT max(rowid) FROM {table})")
    assert codes(path) == {"row-altered"}


def test_reading_a_value_that_cannot_be_read_names_the_audit(path):
    change(path, "UPDATE measurement SET acquired = 'yesterday'")
    with open_book(path) as book, pytest.raises(StoreError, match="vialbook audit"):
        book.readings()


def test_a_ledger_without_its_end_takes_nothing_more(path):
    change(path, "DELETE FROM ledger_head")
    with open_book(path) as book, pytest.raises(StoreError, match="ledger has lost its end"):
        fill(book, weeks=1)


def test_a_row_that_nobody_wrote_is_named(path):
    change(
        path,
        "INSERT INTO log_entry SELECT entry + 100, at, scanner, phantom, kind, text, celsius, restart_baseline, "
        "source, who, entered_at FROM log_entry LIMIT 1",
    )
    assert "row-unwitnessed" in codes(path)


@pytest.mark.parametrize(
    "statement",
    [
        "UPDATE ledger SET payload = '{}' WHERE seq = 3",
        "UPDATE ledger SET payload = 'none' WHERE seq = 3",
        "UPDATE ledger SET covers = 'none' WHERE seq = 3",
        "UPDATE ledger SET covers = '{\"reading\": 1}' WHERE seq = 3",
        "UPDATE ledger SET kind = 'limits-altered-backwards' WHERE seq = 3",
        "UPDATE ledger SET at = '2020-01-01 00:00:00.000000' WHERE seq = 3",
        "UPDATE ledger SET at = 'yesterday' WHERE seq = 3",
        "UPDATE ledger SET seq = 1000 WHERE seq = 3",
        "UPDATE ledger_head SET hash = 'ab'",
        "UPDATE ledger_head SET entries = 'many'",
        "DELETE FROM ledger_head",
        "DELETE FROM ledger WHERE seq = 3",
        "DELETE FROM ledger WHERE seq = (SELECT max(seq) FROM ledger)",
        "DELETE FROM ledger",
    ],
)
def test_a_broken_chain_is_named(path, statement):
    change(path, statement)
    assert "chain-broken" in codes(path)


def test_a_ledger_rewritten_as_a_whole_is_told_by_an_anchor_only(path):
    with open_book(path) as book:
        anchor = book.anchor()
        assert Anchor.read(str(anchor)) == anchor
        rows = book.ledger()
    with closing(sqlite3.connect(path)) as connection:
        connection.execute("UPDATE ledger SET subject = 'nobody' WHERE seq = 2")
        last = CHAIN_START
        for seq in rows["seq"]:
            row = connection.execute(
                "SELECT kind, subject, payload, covers FROM ledger WHERE seq = ?", (int(seq),)
            ).fetchone()
            at = rows.loc[rows["seq"] == seq, "at"].iloc[0].to_pydatetime()
            made = entry_hash(int(seq), at, *row, last)
            connection.execute("UPDATE ledger SET previous = ?, hash = ? WHERE seq = ?", (last, made, int(seq)))
            last = made
        connection.execute("UPDATE ledger_head SET hash = ?", (last,))
        connection.commit()
    assert codes(path) == set()
    assert codes(path, anchor) == {"anchor-missed"}
