"""How agreement between scanners is told in a terminal."""

from __future__ import annotations

from typing import TYPE_CHECKING

from qa.cli.terminal import Terminal, attention

if TYPE_CHECKING:
    from qa.compare import Agreement


def tell(terminal: Terminal, found: Agreement) -> None:
    """Who has left the others, then one table per scan, then what it means for a study."""
    from qa.report.comparing import content

    told = content(found)
    terminal.line(f"{told['counted']} runs of {', '.join(told['compared']) or 'no scanner'}, {told['span']}.")
    for one in told["departures"]:
        terminal.line(attention("watch", one["sentence"]))
    if found.comparisons and not told["departures"]:
        terminal.line("No scanner has left the others.")
    for one in told["comparisons"]:
        terminal.line(f"\n{one['title']}")
        rows = [(row["name"], str(row["runs"]), str(row["vials"]), row["bias"], row["cv"]) for row in one["scanners"]]
        terminal.table(("scanner", "runs", "vials", "bias (k = 1)", "scatter within (CV)"), rows)
        pairs = [(row["names"], str(row["vials"]), row["bias"], row["limits"]) for row in one["pairs"]]
        terminal.table(("first − second", "vials", "bias", "95 % limits of agreement"), pairs)
        for name, text in (
            *one["parts"][:2],
            *[(f"smallest real change, {name}", text) for name, text in one["change"]],
        ):
            terminal.line(f"   {name}: {text}")
        for text in dict.fromkeys((*one["parts_missing"], *one["change_missing"], *one["remarks"])):
            terminal.line(f"   {text}")
    for text in told["remarks"]:
        terminal.line(text)
