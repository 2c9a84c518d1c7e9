"""vialbook report: write the pages."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from qa.cli.options import AsJson, Quiet, SiteDir, open_site, today_of
from qa.cli.terminal import Terminal


def report(
    out: Annotated[
        Path | None, typer.Option("--out", metavar="DIR", help="Where to (default: pages in the site folder).")
    ] = None,
    single_file: Annotated[
        bool, typer.Option("--single-file", help="Each page whole in itself, to be mailed.")
    ] = False,
    today: Annotated[str | None, typer.Option("--today", metavar="DATE", help="The day to answer for.")] = None,
    site: SiteDir = None,
    as_json: AsJson = False,
    quiet: Quiet = False,
) -> None:
    """Write all pages again; print the front page's path."""
    from qa.documents import document
    from qa.pipeline import write_report

    terminal = Terminal(as_json, quiet)
    place = open_site(site)
    front = write_report(place, out=out, single_file=single_file, today=today_of(today, place))
    terminal.line(str(front))
    terminal.result(document(front_page=front))
