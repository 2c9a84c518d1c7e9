"""Entering a ruling, with what follows from it: an accepted change starts a new baseline."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import date, datetime, time

from qa.answers import DECISIONS
from qa.errors import UsageError
from qa.pipeline import judge_book, keep_findings
from qa.site import Site
from qa.store import open_book


@dataclass(frozen=True, slots=True)
class Ruled:
    """What was entered. `restarts` is None unless a new baseline was started."""

    ruling: int
    log_entries: tuple[int, ...]
    restarts: datetime | None
    judged_again: int


def enter_ruling(site: Site, finding: str, decision: str, who: str, reason: str) -> Ruled:
    """Enter a named person's decision on a finding.

    ``accept`` also makes a log entry that restarts the baseline of the finding's scanners and phantoms on the day it
    began, and judges their runs since then again.

    Raises
    ------
    UsageError
        If the decision is not one of `DECISIONS`, the name or the reason is empty, or there is no such finding.
    """
    if decision not in DECISIONS:
        told = "; ".join(f"{name}: {meaning}" for name, meaning in DECISIONS.items())
        raise UsageError(f"'{decision}' is not a decision", remedy=told)
    with open_book(site, create=False) as book:
        ruling = book.rule(finding, who, decision, reason)
        if decision != "accept":
            return Ruled(ruling, (), None, 0)
        content = next(one for one in book.findings() if one["finding"] == finding)
        onset = datetime.combine(date.fromisoformat(content["onset"]), time(), site.timezone)
        text = f"new baseline: {finding} accepted (ruling {ruling})"
        phantoms = [None] if content["cause"] == "scanner" else list(content["phantoms"])
        entries = tuple(
            book.add_log_entry(onset, scanner, phantom, "note", text, True, "person", who)
            for scanner in content["scanners"]
            for phantom in phantoms
        )
        judged = sum(len(judge_book(book, site, again=(scanner, onset))) for scanner in content["scanners"])
        keep_findings(book, site, datetime.now(site.timezone).date())
    return Ruled(ruling, entries, onset, judged)
