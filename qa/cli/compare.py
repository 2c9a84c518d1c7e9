"""vialbook compare: do the scanners agree?"""

from __future__ import annotations

from typing import Annotated

import typer

from qa.cli.options import AsJson, Quiet, SiteDir, day_of, open_site
from qa.cli.terminal import Terminal


def compare(
    since: Annotated[str | None, typer.Option("--since", metavar="DATE", help="Only runs from that day on.")] = None,
    until: Annotated[str | None, typer.Option("--until", metavar="DATE", help="Only runs up to that day.")] = None,
    site: SiteDir = None,
    as_json: AsJson = False,
    quiet: Quiet = False,
) -> None:
    """Say how the scanners agree: bias, repeatability, reproducibility. Exit code 1 if one has left the herd."""
    from qa.answers import agreement
    from qa.cli.agreement import tell
    from qa.documents import of_compare
    from qa.store import open_book

    terminal = Terminal(as_json, quiet)
    place = open_site(site)
    with open_book(place, create=False) as book:
        found = agreement(book, since=day_of(since, "--since"), until=day_of(until, "--until"))
    tell(terminal, found)
    terminal.result(of_compare(found))
    if found.departures:
        raise typer.Exit(1)
