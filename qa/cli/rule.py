"""vialbook rule: a named person decides on a finding."""

from __future__ import annotations

from typing import Annotated

import typer

from qa.cli.options import AsJson, Quiet, SiteDir, open_site
from qa.cli.terminal import Terminal


def rule(
    finding: Annotated[str, typer.Argument(metavar="FINDING", help="As 'vialbook drift' names it.")],
    decision: Annotated[str, typer.Argument(metavar="DECISION", help="accept, dismiss, repair or rescan.")],
    who: Annotated[str, typer.Option("--who", help="Who decides: a person's name.")],
    reason: Annotated[str, typer.Option("--reason", help="Why, for whoever reads it later.")],
    site: SiteDir = None,
    as_json: AsJson = False,
    quiet: Quiet = False,
) -> None:
    """Put down a named person's decision on a finding, with the reason.

    accept: the change is real and accepted, a new baseline starts where it began. dismiss: no change of scanner or
    phantom (set-up, temperature, chance). repair: service is ordered. rescan: scan again before concluding.
    After repair and rescan the finding stands; after accept and dismiss it no longer speaks against the scanner.
    """
    from qa.documents import document
    from qa.ruling import enter_ruling

    terminal = Terminal(as_json, quiet)
    place = open_site(site)
    done = enter_ruling(place, finding, decision, who, reason)
    terminal.line(f"Ruling {done.ruling} on {finding}: {decision}, by {who}.")
    if done.log_entries:
        terminal.line(f"New baseline from {done.restarts:%Y-%m-%d}; {done.judged_again} runs were judged again.")
    terminal.say("The pages show it after the next ingest, or now with: vialbook report")
    terminal.result(document(ruling=done.ruling, finding=finding, decision=decision, log_entries=done.log_entries))
