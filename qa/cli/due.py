"""vialbook due: what the schedule asks for."""

from __future__ import annotations

from typing import Annotated

import typer

from qa.cli.options import AsJson, Quiet, SiteDir, open_site, today_of
from qa.cli.terminal import Terminal


def due(
    site: SiteDir = None,
    today: Annotated[str | None, typer.Option("--today", metavar="DATE", help="The day to answer for.")] = None,
    as_json: AsJson = False,
    quiet: Quiet = False,
) -> None:
    """Say what the schedule asks for today. Exit code 1 if a run is due or overdue."""
    from qa.answers import schedule_on
    from qa.documents import of_due
    from qa.due import DueState

    terminal = Terminal(as_json, quiet)
    place = open_site(site)
    day = today_of(today, place)
    rows = schedule_on(place, day)
    if not place.schedules:
        terminal.say("site.toml has no [[schedule]]: nothing is ever due.")
    told = [
        (
            row.scanner,
            row.phantom,
            row.recipe,
            row.last.isoformat() if row.last else "never",
            row.next_due.isoformat() if row.next_due else "–",
            _in_words(row.days, str(row.state)),
        )
        for row in rows
    ]
    terminal.table(("scanner", "phantom", "recipe", "last run", "next due", f"on {day}"), told)
    terminal.result(of_due(rows, day))
    if any(row.state is not DueState.DONE for row in rows):
        raise typer.Exit(1)


def _in_words(days: int, state: str) -> str:
    if state == "done":
        return f"done; next in {days} day{'s' if days != 1 else ''}"
    if state == "never run":
        return state
    return f"{state}, {-days} day{'s' if days != -1 else ''} past" if days else f"{state} today"
