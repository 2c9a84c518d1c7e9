"""Writing the pages: what each needs is fetched once, in one place."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import date
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

from qa.answers import ScannerToday, agreement, drift, scanners_today
from qa.report import comparing, front, history, runs, scanners
from qa.report.output import Output, slug
from qa.site import Site
from qa.store import Book

if TYPE_CHECKING:
    import pandas as pd

    from qa.trend import Trend


class Facts:
    """Everything the pages show, each part read from the book at most once."""

    def __init__(self, book: Book, site: Site, today: date) -> None:
        self.book, self.site, self.today = book, site, today

    @cached_property
    def trend(self) -> Trend:
        """What has moved up to today."""
        return drift(self.book, self.site, self.today)

    @cached_property
    def scanners(self) -> tuple[ScannerToday, ...]:
        """How each scanner stands today, those in need first."""
        return scanners_today(self.book, self.site, self.today, self.trend)

    @cached_property
    def runs(self) -> pd.DataFrame:
        """All runs in their newest generation, by time."""
        return self.book.runs()

    @cached_property
    def readings(self) -> pd.DataFrame:
        """All readings in their newest generation."""
        return self.book.readings()

    @cached_property
    def log(self) -> pd.DataFrame:
        """All log entries."""
        return self.book.log_entries()

    @cached_property
    def findings(self) -> dict[str, dict[str, Any]]:
        """Findings as the book keeps them, by key."""
        return {one["finding"]: one for one in self.book.findings()}

    @cached_property
    def rulings(self) -> list[dict[str, Any]]:
        """Rulings in order."""
        return [{str(key): value for key, value in row.items()} for row in self.book.rulings().to_dict("records")]


def write_pages(
    book: Book,
    site: Site,
    out: Path,
    *,
    today: date,
    single_file: bool = False,
    runs: Sequence[str] | None = None,
) -> Path:
    """Write the pages and give the front page.

    Parameters
    ----------
    out : folder for them
    single_file : each page carries everything itself and links nowhere; of runs only each scanner's latest
    runs : the run pages to write; None: all

    Raises
    ------
    ReportError
        If a page cannot be written.
    """
    facts, output = Facts(book, site, today), Output(out, single=single_file)
    output.share()
    common = {"site": site.name, "today": today.isoformat(), "scanner_names": [one.scanner for one in facts.scanners]}
    wanted = list(facts.runs["run"]) if runs is None else list(runs)
    if single_file and runs is None:
        wanted = [one.last_run for one in facts.scanners if one.last_run is not None]
    write_runs(output, facts, wanted, common)
    for one in facts.scanners:
        output.write(f"scanners/{slug(one.scanner)}.html", "scanner.html", common | scanners.content(facts, one))
    output.write("compare.html", "compare.html", common | comparing.content(agreement(book)))
    output.write("history.html", "history.html", common | history.content(facts))
    return output.write("index.html", "front.html", common | front.content(facts))


def write_runs(output: Output, facts: Facts, wanted: Sequence[str], common: dict[str, Any]) -> None:
    """Write the pages of some runs."""
    for run in wanted:
        output.write(f"runs/{run}.html", "run.html", common | runs.content(facts.book, facts.site, run))
