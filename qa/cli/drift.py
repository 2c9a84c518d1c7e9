"""vialbook drift: what has moved."""

from __future__ import annotations

from typing import TYPE_CHECKING, Annotated, Any

import typer

from qa.cli.options import AsJson, Quiet, SiteDir, day_of, known_name, open_site, today_of
from qa.cli.terminal import Terminal, attention

if TYPE_CHECKING:
    from qa.trend import Trend


def drift(
    scanner: Annotated[str | None, typer.Option("--scanner", help="Only what concerns this scanner.")] = None,
    since: Annotated[
        str | None, typer.Option("--since", metavar="DATE", help="Only what began on that day or later.")
    ] = None,
    as_of: Annotated[
        str | None,
        typer.Option("--as-of", metavar="DATE", help="What the book knew then: only what was measured by that day."),
    ] = None,
    today: Annotated[str | None, typer.Option("--today", metavar="DATE", help="The day to answer for.")] = None,
    site: SiteDir = None,
    as_json: AsJson = False,
    quiet: Quiet = False,
) -> None:
    """Say what has moved, since when, by how much, and the likely cause. Exit code 1 if anything stands open."""
    from qa.answers import SETTLES
    from qa.answers import drift as look
    from qa.documents import of_drift
    from qa.pipeline import keep_findings
    from qa.store import open_book

    terminal = Terminal(as_json, quiet)
    place = open_site(site)
    then = day_of(as_of, "--as-of")
    day = then or today_of(today, place)
    wanted = known_name("scanner", scanner, [one.name for one in place.scanners])
    first = day_of(since, "--since")
    with open_book(place, create=False) as book:
        now = then is None and today is None
        trend = keep_findings(book, place, day) if now else look(book, place, day, as_of=then)
        told = of_drift(trend, book, day)
    told["findings"] = [
        one
        for one in told["findings"]
        if wanted in (None, *one["scanners"]) and (first is None or one["onset"] >= first.isoformat())
    ]
    told["streams"] = [one for one in told["streams"] if wanted in (None, one["scanner"])]
    open_ones = [one for one in told["findings"] if not _settled(one, SETTLES)]
    _tell(terminal, told, trend, wanted)
    terminal.result(told)
    if open_ones:
        raise typer.Exit(1)


def _settled(one: dict[str, Any], settles: tuple[str, ...]) -> bool:
    if one["state"] == "ruled":
        return bool(one["rulings"]) and one["rulings"][-1]["decision"] in settles
    return bool(one["state"] != "open")


def _tell(terminal: Terminal, told: dict[str, Any], trend: Trend, scanner: str | None) -> None:
    from qa.cli.sparks import spark

    levels = trend.levels
    shown = levels if scanner is None or levels.empty else levels[levels["scanner"] == scanner]
    rows = (
        [
            (
                str(name),
                str(phantom),
                str(scan),
                str(quantity),
                spark(group["level_percent"].to_numpy()),
                f"{group['level_percent'].iloc[-1]:+.2f} ± {group['u_percent'].iloc[-1]:.2f} %",
            )
            for (name, phantom, scan, quantity), group in shown.groupby(
                ["scanner", "phantom", "scan", "quantity"], sort=True
            )
        ]
        if len(shown)
        else []
    )
    terminal.table(("scanner", "phantom", "scan", "of", "level, oldest to newest", "last (k = 1)"), rows)
    if rows:
        terminal.line("Level: common to all vials of the plate, from the baseline, in percent.\n")
    if not told["findings"]:
        terminal.line("No findings: nothing has moved beyond what chance explains.")
    for one in told["findings"]:
        terminal.line(attention(one["verdict"] if one["state"] == "open" else one["state"], one["sentence"]))
        low, high = one["onset_interval"]
        terminal.line(
            f"     {one['finding']}: began {one['onset']} (90 % between {low} and {high}); cause: {one['cause']}"
        )
        for reason in one["cause_reasons"]:
            terminal.line(f"     - {reason}")
        for entry in one["log_entries"]:
            terminal.line(f"     - near it, {entry['at'][:10]}: {entry['kind']}: {entry['text']}")
        coming = one["forecast"]
        if coming and coming["crosses"]:
            span = f"{coming['earliest']} to {coming['latest'] or 'later than ten years'}"
            terminal.line(f"     - reaches the action limit about {coming['crosses']} (90 %: {span})")
        for ruling in one["rulings"]:
            terminal.line(f"     - {ruling['at'][:10]} {ruling['who']}: {ruling['decision']}: {ruling['reason']}")
        if one["state"] == "open" and not one["rulings"]:
            terminal.line(f'     - decide: vialbook rule {one["finding"]} DECISION --who NAME --reason "…"')
