"""vialbook simulate: synthetic runs for commissioning, training and tests."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from qa.cli.options import AsJson, Quiet, SiteDir, day_of, open_site
from qa.cli.terminal import Terminal
from qa.errors import UsageError


def simulate(
    out: Annotated[Path, typer.Option("--out", metavar="DIR", help="Where to: runs/, truth/ and temperatures.csv.")],
    weeks: Annotated[
        int | None, typer.Option("--weeks", min=1, max=2600, help="How many weeks (default: the story's, or 52).")
    ] = None,
    start: Annotated[str | None, typer.Option("--start", metavar="DATE", help="The first week's Monday.")] = None,
    seed: Annotated[int | None, typer.Option("--seed", min=0, help="The same seed gives the same bytes.")] = None,
    scanner: Annotated[
        str | None, typer.Option("--scanner", help="One run of this scanner only, on the day --start.")
    ] = None,
    site: SiteDir = None,
    as_json: AsJson = False,
    quiet: Quiet = False,
) -> None:
    """Grow synthetic DICOM runs of a site's schedule, with a known truth.

    What happens is told by story.toml in the site folder; without one, nothing does. Simulated data are for
    commissioning and training, never evidence about a real scanner.
    """
    from qa.documents import document
    from qa.simulate import grow, simulate_one

    terminal = Terminal(as_json, quiet)
    place = open_site(site)
    first = day_of(start, "--start")
    if scanner is not None:
        if first is None:
            raise UsageError("--scanner needs --start", remedy="Name the day of the run, as 2026-03-31.")
        folders = [simulate_one(place.folder, scanner, on=first, out=out, seed=seed)]
    else:
        with terminal.progress() as progress:
            tell = (lambda done, total: progress("simulating runs", done, total)) if progress else None
            folders = grow(place.folder, weeks=weeks, start=first, seed=seed, out=out, progress=tell)
    terminal.line(f"{len(folders)} runs in {out / 'runs'}; what is true in each: {out / 'truth'}")
    terminal.result(document(runs=folders, truth=out / "truth"))
