"""vialbook migrate: bring an older book up to date."""

from __future__ import annotations

from qa.cli.options import AsJson, Quiet, SiteDir, open_site
from qa.cli.terminal import Terminal


def migrate(site: SiteDir = None, as_json: AsJson = False, quiet: Quiet = False) -> None:
    """Bring an older book up to date, after copying the file."""
    from qa.documents import of_migrate
    from qa.store import migrate as bring_up

    terminal = Terminal(as_json, quiet)
    done = bring_up(open_site(site))
    if done.before != done.after:
        terminal.line(f"Migrated from revision {done.before} to {done.after}.")
    terminal.line(done.advice)
    terminal.result(of_migrate(done))
