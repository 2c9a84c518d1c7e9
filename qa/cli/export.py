"""vialbook export: the book's tables for other programs."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from qa.cli.options import AsJson, Quiet, SiteDir, open_site
from qa.cli.terminal import Terminal
from qa.errors import UsageError

FORMS = ("csv", "json", "parquet")


def export(
    out: Annotated[
        Path, typer.Option("--out", metavar="DIR", help="Folder for the files (default: export in the current folder).")
    ] = Path("export"),
    form: Annotated[str, typer.Option("--form", help="csv, json or parquet.")] = "csv",
    what: Annotated[
        str | None,
        typer.Option("--what", help="One table: readings, runs, log, held, findings, rulings, limits or ledger."),
    ] = None,
    site: SiteDir = None,
    as_json: AsJson = False,
    quiet: Quiet = False,
) -> None:
    """Write readings, runs and all other tables as CSV, JSON or Parquet; every generation is included."""
    from qa.documents import document
    from qa.store import TABLES, open_book

    if form not in FORMS:
        raise UsageError(f"--form '{form}' is unknown", remedy=f"Use one of: {', '.join(FORMS)}.")
    if what is not None and what not in TABLES:
        raise UsageError(f"--what '{what}' is unknown", remedy=f"Use one of: {', '.join(TABLES)}.")
    terminal = Terminal(as_json, quiet)
    with open_book(open_site(site), create=False) as book:
        tables = (what,) if what else TABLES
        files = book.export(out, form=form, tables=tables)  # type: ignore[arg-type]  # checked above
    for file in files:
        terminal.line(str(file))
    terminal.result(document(files=[file.resolve() for file in files]))
