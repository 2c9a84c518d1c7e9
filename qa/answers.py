"""The book's answers to the three questions that people bring: may it be used, what has moved, do they agree?

Joins the store with the statistics, for the command line, the pages and notebooks alike. Reads; writes nothing.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date, datetime
from typing import TYPE_CHECKING, Any

from qa.due import DueRow, DueState, due, last_run_days
from qa.errors import NoBookError
from qa.site import Site
from qa.store import Book, open_book
from qa.words import Verdict, worst

if TYPE_CHECKING:
    import pandas as pd

    from qa.compare import Agreement
    from qa.trend import Finding, Trend

SETTLES = ("accept", "dismiss")  # decisions after which a finding no longer speaks against the scanner
DECISIONS = {
    "accept": "the change is real and accepted: a new baseline starts where it began",
    "dismiss": "no change of scanner or phantom: set-up, temperature or chance",
    "repair": "service is ordered; the finding stands until runs after it are steady",
    "rescan": "to be scanned again before anything is concluded; the finding stands",
}


@dataclass(frozen=True, slots=True, eq=False)
class ScannerToday:
    """How one scanner stands today, and why."""

    scanner: str
    verdict: Verdict | None  # None: never run
    sentence: str
    reasons: tuple[str, ...]
    last_run: str | None
    last_acquired: datetime | None
    due: tuple[DueRow, ...]
    findings: tuple[Finding, ...]  # open, and no ruling has settled them


def drift(book: Book, site: Site, today: date, *, as_of: date | None = None) -> Trend:
    """What has moved up to `today`; with `as_of`, from what the book knew by the end of that day."""
    from qa import trend

    log = book.log_entries()
    if as_of is not None:
        log = log[log["entered_at"].dt.date <= as_of]
    return trend.find(
        book.readings(as_of=as_of),
        log,
        site.limits,
        today=today,
        baseline_runs=site.baseline_runs,
        schedule_days=min((line.every_days for line in site.schedules), default=7),
    )


def agreement(book: Book, *, since: date | None = None, until: date | None = None) -> Agreement:
    """How the scanners agree: bias, repeatability, reproducibility."""
    from qa import compare

    return compare.agree(book.readings(), since=since, until=until)


def schedule(book: Book, site: Site, today: date) -> tuple[DueRow, ...]:
    """What the schedule asks for on `today`, the most overdue first."""
    return due(site, last_run_days(site, book.runs()), today)


def schedule_on(site: Site, today: date) -> tuple[DueRow, ...]:
    """As `schedule`, for a site whose book may not exist yet: then nothing was ever run."""
    try:
        with open_book(site, create=False) as book:
            return schedule(book, site, today)
    except NoBookError:
        return due(site, {}, today)


def decisions(book: Book) -> dict[str, str]:
    """The latest decision on each finding that has a ruling."""
    rulings = book.rulings()
    return dict(zip(rulings["finding"], rulings["decision"], strict=True))


def scanners_today(book: Book, site: Site, today: date, trend: Trend) -> tuple[ScannerToday, ...]:
    """Every scanner of the site, those that need attention most first."""
    runs = book.runs()
    rows = due(site, last_run_days(site, runs), today)
    kept = {one["finding"]: one["state"] for one in book.findings()}
    decided = decisions(book)
    standing = [
        one
        for one in trend.findings
        if one.state == "open" and not (kept.get(one.finding) == "ruled" and decided.get(one.finding) in SETTLES)
    ]
    told = [_today(name, site, runs[runs["scanner"] == name], rows, standing) for name in _names(site, runs)]
    order = [Verdict.ACT, Verdict.VOID, Verdict.WATCH, None, Verdict.STEADY]
    return tuple(sorted(told, key=lambda one: order.index(one.verdict)))


_SENTENCES = {
    Verdict.STEADY: "Nothing measured speaks against quantitative work.",
    Verdict.WATCH: "Look closer before quantitative work.",
    Verdict.ACT: "No quantitative work until a physicist has decided.",
    Verdict.VOID: "The latest run could not be judged: scan again before quantitative work.",
}


def _names(site: Site, runs: pd.DataFrame) -> list[str]:
    """Scanners of site.toml, then those that the book still knows."""
    return list(dict.fromkeys([*(one.name for one in site.scanners), *runs["scanner"]]))


def _today(
    name: str, site: Site, runs: pd.DataFrame, rows: Sequence[DueRow], standing: Sequence[Finding]
) -> ScannerToday:
    mine = tuple(row for row in rows if row.scanner == name)
    findings = tuple(one for one in standing if name in one.scanners)
    if runs.empty:
        return ScannerToday(name, None, "No run yet: nothing can be said.", (), None, None, mine, findings)
    latest: list[Any] = runs.groupby("phantom", sort=True).tail(1).to_dict("records")
    last = max(latest, key=lambda row: row["acquired"])
    verdicts = [Verdict(row["verdict"]) for row in latest if row["verdict"]]
    reasons = [text for row in latest for text in row["reasons"] or () if row["verdict"] != Verdict.STEADY]
    verdicts += [one.verdict for one in findings]
    reasons += [one.sentence for one in findings if one.sentence not in reasons]
    stale = [row for row in mine if row.state is DueState.OVERDUE]
    if stale:
        verdicts.append(Verdict.WATCH)
        reasons += [f"{row.phantom} is {-row.days} days past due: what was found may no longer hold." for row in stale]
    verdict = worst(verdicts)
    return ScannerToday(
        scanner=name,
        verdict=verdict,
        sentence=_SENTENCES[verdict],
        reasons=tuple(dict.fromkeys(reasons)),
        last_run=str(last["run"]),
        last_acquired=last["acquired"].to_pydatetime(),
        due=mine,
        findings=findings,
    )
