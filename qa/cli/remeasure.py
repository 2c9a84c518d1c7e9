"""vialbook remeasure: stored runs again, with today's methods."""

from __future__ import annotations

from typing import TYPE_CHECKING, Annotated

import typer

from qa.cli.options import AsJson, Quiet, SiteDir, open_site
from qa.cli.terminal import Terminal
from qa.errors import UsageError

if TYPE_CHECKING:
    from qa.remeasure import Change


def remeasure(
    runs: Annotated[list[str] | None, typer.Argument(metavar="[RUN]...", help="Run ids; or use --all.")] = None,
    every: Annotated[bool, typer.Option("--all", help="All runs of the book.")] = False,
    reason: Annotated[str, typer.Option("--reason", help="Why, for the ledger.")] = "asked for",
    no_report: Annotated[bool, typer.Option("--no-report", help="Do not write the pages.")] = False,
    site: SiteDir = None,
    as_json: AsJson = False,
    quiet: Quiet = False,
) -> None:
    """Measure stored runs again from the archive: a new generation, never an overwrite.

    Today's methods, recipes, plates, references and temperatures are used. Exit code 1 if originals are missing.
    """
    from qa.documents import of_remeasure
    from qa.pipeline import write_report
    from qa.remeasure import remeasure as measure_again

    terminal = Terminal(as_json, quiet)
    if bool(runs) == every:
        raise UsageError("name runs, or say --all", remedy="'vialbook export --what runs' lists the runs.")
    place = open_site(site)
    with terminal.progress() as progress:
        changes, held = measure_again(place, runs or None, reason=reason, progress=progress)
    if not no_report:
        write_report(place, runs=[change.run for change in changes])
    _tell(terminal, changes)
    for one in held:
        terminal.line(f"?  held [{one.code}] {one.path}: {one.reason}")
    terminal.result(of_remeasure(changes, held))
    if held:
        raise typer.Exit(1)


def _tell(terminal: Terminal, changes: tuple[Change, ...]) -> None:
    rows = []
    for change in changes:
        moved = [abs(row.difference_percent) for row in change.rows if row.difference_percent is not None]
        other = sum((row.old_ms is None) != (row.new_ms is None) for row in change.rows)
        rows.append(
            (
                change.run,
                f"{change.acquired:%Y-%m-%d}",
                change.scanner,
                change.phantom,
                f"{change.old_generation} to {change.new_generation}",
                f"{max(moved):.2f} %" if moved else "–",
                str(other),
            )
        )
    titles = ("run", "acquired", "scanner", "phantom", "generation", "largest change", "readings come or gone")
    terminal.table(titles, rows)
