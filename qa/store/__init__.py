"""Store room: the book, one database per site.

Enters: sessions and measurements, held files, limits, log entries, findings, rulings.
Leaves: tidy pandas frames, measurements and evidence as they were recorded, problems that an audit finds.
Knows nothing of DICOM, fitting, charts or HTML.

`open_book` gives a `Book`; its verbs lie each in a module: recording, holding, frames (reading back), logbook,
tolerances (limits), decisions (findings and rulings), audit (and the ledger), export. Below them: `desk` (one
transaction, one clock), `ledger` and `covers` (what is witnessed, and how), `lenient` (reads what was tampered with),
`models` and `records` (the tables), `columns` (types alike in SQLite and PostgreSQL), `engine` (the only module that
knows the two apart), `opening`, `migrating` (the only one that loads Alembic) and `tidy` (the only one that needs
pandas at once).

Rows are added, never overwritten: a remeasured run gets a new generation. What may change (a verdict, a held file's
fate, a finding) is witnessed by the ledger each time, in the transaction that changes it.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from qa.store.audit import Problem
from qa.store.book import Book
from qa.store.export import TABLES
from qa.store.ledger import Anchor
from qa.store.logbook import KINDS
from qa.store.opening import open_book
from qa.store.tolerances import LimitsChange, LimitsNoted, block_digest, limits_digest

if TYPE_CHECKING:
    from qa.store.migrating import Migration, migrate

__all__ = [
    "KINDS",
    "TABLES",
    "Anchor",
    "Book",
    "LimitsChange",
    "LimitsNoted",
    "Migration",
    "Problem",
    "block_digest",
    "limits_digest",
    "migrate",
    "open_book",
]


def __getattr__(name: str) -> object:
    """`migrate` and `Migration` load Alembic, so they are fetched when asked for."""
    if name in ("migrate", "Migration"):
        from qa.store import migrating

        return getattr(migrating, name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
