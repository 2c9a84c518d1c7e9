"""vialbook audit: is the book what the ledger says it is?"""

from __future__ import annotations

from typing import Annotated

import typer

from qa.cli.options import AsJson, Quiet, SiteDir, open_site
from qa.cli.terminal import Terminal
from qa.errors import UsageError


def audit(
    anchor: Annotated[
        str | None, typer.Option("--anchor", metavar="N:HASH", help="An anchor that an earlier audit printed.")
    ] = None,
    no_originals: Annotated[
        bool, typer.Option("--no-originals", help="Do not read and hash the original files.")
    ] = False,
    site: SiteDir = None,
    as_json: AsJson = False,
    quiet: Quiet = False,
) -> None:
    """Verify the ledger, the stored numbers and the archive. Exit code 1 if anything is not as it was recorded."""
    from qa.documents import of_audit
    from qa.intake import Archive
    from qa.store import Anchor, open_book

    terminal = Terminal(as_json, quiet)
    place = open_site(site)
    given = None
    if anchor is not None:
        try:
            given = Anchor.read(anchor)
        except ValueError:
            remedy = "Copy the whole of what an audit printed after 'Anchor:'."
            raise UsageError(f"'{anchor}' is not an anchor", remedy=remedy) from None
    with open_book(place, create=False) as book, terminal.progress() as progress:
        problems = book.audit(None if no_originals else Archive(place.archive), progress, given)
        now = book.anchor()
        ledger = book.ledger()
        originals = 0 if no_originals else int(book.runs()["files"].sum())
        rulings = book.rulings().to_dict("records")
    for problem in problems:
        terminal.line(f"{'!!' if problem.grave else '! '} {problem.code}: {problem.text}")
    if not any(problem.grave for problem in problems):
        looked = "the originals were not looked at" if no_originals else f"{originals} originals are as they came"
        terminal.line(
            f"Sound: {len(ledger)} ledger entries follow from one another, every row is as recorded; {looked}."
        )
    for ruling in rulings:
        when = f"{ruling['at'].astimezone(place.timezone):%Y-%m-%d}"
        terminal.line(f"   {when} {ruling['who']} on {ruling['finding']}: {ruling['decision']}: {ruling['reason']}")
    terminal.line(f"Anchor: {now}")
    terminal.say("Keep the anchor outside this computer: only with it can a ledger rewritten as a whole be told.")
    terminal.result(of_audit(problems, now, len(ledger), originals))
    if any(problem.grave for problem in problems):
        raise typer.Exit(1)
