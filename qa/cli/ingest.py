"""vialbook ingest: the main job."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from qa.cli.options import AsJson, Quiet, SiteDir, open_site, today_of
from qa.cli.terminal import Terminal, attention
from qa.errors import UsageError

if TYPE_CHECKING:
    from zoneinfo import ZoneInfo

    from qa.pipeline import IngestOutcome, RunOutcome


def ingest(
    paths: Annotated[list[Path], typer.Argument(metavar="PATH...", help="Folders and files of DICOM.")],
    site: SiteDir = None,
    celsius: Annotated[
        float | None, typer.Option("--celsius", help="Temperature of the phantom in these runs, degrees Celsius.")
    ] = None,
    no_report: Annotated[bool, typer.Option("--no-report", help="Do not write the pages.")] = False,
    today: Annotated[str | None, typer.Option("--today", metavar="DATE", help="The day to answer for.")] = None,
    as_json: AsJson = False,
    quiet: Quiet = False,
) -> None:
    """Take in runs: check, find the vials, measure, store, judge, report."""
    from qa.documents import of_ingest
    from qa.pipeline import ingest as take_in
    from qa.site.temperatures import POSSIBLE_C

    terminal = Terminal(as_json, quiet)
    if celsius is not None and not POSSIBLE_C[0] <= celsius <= POSSIBLE_C[1]:
        raise UsageError(f"--celsius {celsius:g} is no room's temperature", remedy="Give it in degrees Celsius.")
    place = open_site(site)
    with terminal.progress() as progress:
        outcome = take_in(
            place, paths, celsius=celsius, progress=progress, report=not no_report, today=today_of(today, place)
        )
    _tell(terminal, outcome, place.timezone)
    terminal.result(of_ingest(outcome))
    if needs_attention(outcome):
        raise typer.Exit(1)


def needs_attention(outcome: IngestOutcome) -> bool:
    """Whether a run of this ingest is not steady, a file is held, or a finding stands against one of its scanners."""
    concerned = {run.scanner for run in outcome.runs}
    standing = any(one.findings for one in outcome.scanners if one.scanner in concerned)
    return bool(outcome.held) or standing or any(run.verdict != "steady" for run in outcome.runs)


def _tell(terminal: Terminal, outcome: IngestOutcome, zone: ZoneInfo) -> None:
    titles = ("acquired", "scanner", "phantom", "°C", "T1", "T2", "vials", "verdict")
    terminal.table(titles, [_row(run, zone) for run in outcome.runs], verdict=7)
    if outcome.runs:
        terminal.line(
            "T1 and T2: median deviation of the vials from their reference values, at the reference temperature."
        )
    counts = f"{outcome.used} used, {outcome.duplicate} known already, {len(outcome.held)} held"
    terminal.line(f"{outcome.seen} files: {counts}.")
    calling = [one for one in outcome.scanners if one.verdict != "steady"]
    if calling or outcome.held:
        terminal.line("\nNeeds attention:")
    for one in calling:
        verdict = one.verdict or "void"
        first = one.reasons[0] if one.reasons else one.sentence
        more = f" ({len(one.reasons) - 1} more on its page)" if len(one.reasons) > 1 else ""
        terminal.line(attention(verdict, f"{one.scanner}: {first}{more}"))
    for held in outcome.held:
        terminal.line(attention("held", f"[{held.code}] {held.path}: {held.reason}"))
    for one in outcome.scanners:
        if one.verdict == "steady":
            terminal.line(f"   steady: {one.scanner}: {one.sentence}")
    if outcome.front_page is not None:
        terminal.line(f"\nFront page: {outcome.front_page}")


def _row(run: RunOutcome, zone: ZoneInfo) -> tuple[str, ...]:
    readings = run.measurement.readings
    counted = sum(1 for reading in readings if reading.value_ms is not None)
    celsius = run.measurement.celsius
    return (
        f"{run.acquired.astimezone(zone):%Y-%m-%d %H:%M}",
        run.scanner,
        run.phantom,
        f"{celsius:.1f}" if celsius is not None else "–",
        _median(run, "T1"),
        _median(run, "T2"),
        f"{counted}/{len(readings)}",
        str(run.verdict),
    )


def _median(run: RunOutcome, quantity: str) -> str:
    from statistics import median

    known = [r.deviation_percent for r in run.measurement.readings if r.quantity == quantity]
    numbers = [value for value in known if value is not None]
    return f"{median(numbers):+.1f} %" if numbers else "–"
