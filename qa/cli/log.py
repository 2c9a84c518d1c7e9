"""vialbook log: what happened to a scanner or phantom."""

from __future__ import annotations

import getpass
from datetime import datetime
from typing import TYPE_CHECKING, Annotated

import typer

from qa.cli.options import AsJson, Quiet, SiteDir, known_name, open_site
from qa.cli.terminal import Terminal
from qa.errors import UsageError

if TYPE_CHECKING:
    from qa.site import Site
    from qa.store import Book


def log(
    kind: Annotated[
        str | None,
        typer.Argument(
            metavar="[KIND]", help="service, software, coil, refill, temperature or note; without it, list."
        ),
    ] = None,
    text: Annotated[str | None, typer.Argument(metavar="[TEXT]", help="What happened, in a few words.")] = None,
    scanner: Annotated[str | None, typer.Option("--scanner", help="The scanner it concerns.")] = None,
    phantom: Annotated[str | None, typer.Option("--phantom", help="The phantom it concerns.")] = None,
    at: Annotated[
        str | None, typer.Option("--at", metavar="TIME", help="When, as 2026-03-31 or 2026-03-31T14:30; absent: now.")
    ] = None,
    celsius: Annotated[float | None, typer.Option("--celsius", help="For kind temperature: degrees Celsius.")] = None,
    restart_baseline: Annotated[
        bool, typer.Option("--restart-baseline", help="What it concerns gets a new baseline from then on.")
    ] = False,
    who: Annotated[str | None, typer.Option("--who", help="Who says so (default: your login name).")] = None,
    site: SiteDir = None,
    as_json: AsJson = False,
    quiet: Quiet = False,
) -> None:
    """Write down a service, a software change, a coil, a refill, a temperature; without KIND, list the entries."""
    from qa.documents import document
    from qa.store import open_book

    terminal = Terminal(as_json, quiet)
    place = open_site(site)
    scanner = known_name("scanner", scanner, [one.name for one in place.scanners])
    phantom = known_name("phantom", phantom, [one.name for one in place.phantoms])
    with open_book(place) as book:
        if kind is None:
            _list(terminal, place, book, scanner, phantom)
            return
        when = _moment(at, place)
        said = text or (f"{celsius:g} °C" if celsius is not None else "")
        name = who or getpass.getuser()
        entry = book.add_log_entry(when, scanner, phantom, kind, said, restart_baseline, "person", name, celsius)
        judged_again = []
        if restart_baseline:
            from qa.pipeline import judge_book, keep_findings

            judged_again = sorted(judge_book(book, place, again=(scanner, when)))
            keep_findings(book, place, datetime.now(place.timezone).date())
    about = " / ".join(one for one in (scanner, phantom) if one) or "the whole site"
    terminal.line(f"Entry {entry}: {kind} at {when:%Y-%m-%d %H:%M} for {about}: {said}")
    if restart_baseline:
        terminal.line(f"The baseline restarts there; {len(judged_again)} runs since then were judged again.")
    elif kind == "temperature":
        terminal.say("It counts for runs within 12 hours; one that is in the book already: vialbook remeasure.")
    terminal.result(document(entry=entry, at=when, kind=kind, text=said, judged_again=judged_again))


def _moment(text: str | None, site: Site) -> datetime:
    """A local date (noon) or time of the site, aware."""
    if text is None:
        return datetime.now(site.timezone)
    try:
        moment = datetime.fromisoformat(text)
    except ValueError:
        remedy = "Write it as 2026-03-31 or 2026-03-31T14:30."
        raise UsageError(f"--at '{text}' is neither a date nor a time", remedy=remedy) from None
    if len(text.strip()) <= 10:
        moment = moment.replace(hour=12)
    return moment if moment.tzinfo else moment.replace(tzinfo=site.timezone)


def _list(terminal: Terminal, site: Site, book: Book, scanner: str | None, phantom: str | None) -> None:
    from qa.documents import document

    rows = book.log_entries(scanner=scanner, phantom=phantom).to_dict("records")
    titles = ("entry", "at", "scanner", "phantom", "kind", "what", "by", "baseline")
    told = [
        (
            str(row["entry"]),
            f"{row['at'].astimezone(site.timezone):%Y-%m-%d %H:%M}",
            row["scanner"] or "all",
            row["phantom"] or "all",
            row["kind"],
            row["text"],
            row["who"] or ("the images" if row["source"] == "dicom" else "–"),
            "restarts" if row["restart_baseline"] else "",
        )
        for row in rows
    ]
    terminal.table(titles, told)
    if not rows:
        terminal.line("No log entries.")
    terminal.result(document(entries=rows))
