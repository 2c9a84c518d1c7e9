"""The whole of an ingest on one page: intake -> locate -> fit -> measure -> store -> judge -> report.

Each run is recorded in one transaction before the next is begun, and judged after all are in: killed at any instant,
a rerun finds what was recorded, takes the rest and ends in the same state as an unbroken run.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import date, datetime
from pathlib import Path
from typing import TYPE_CHECKING

from qa import intake
from qa.answers import ScannerToday, drift, scanners_today
from qa.intake.series import Held, Session
from qa.measure import measure
from qa.methods import fingerprint
from qa.reading import Measurement
from qa.site import Site
from qa.store import Book, open_book
from qa.temperature import FROM_COMMAND, FROM_LOG, FROM_TABLE, RunTemperature
from qa.words import Consequence, Remark, Verdict

if TYPE_CHECKING:
    from qa.trend import Judgement, Trend

Progress = Callable[[str, int, int], None]  # what is being done, how many are done, out of how many


@dataclass(frozen=True, slots=True, eq=False)
class RunOutcome:
    """One run of this ingest, as it now stands in the book."""

    run: str
    generation: int
    scanner: str
    phantom: str
    acquired: datetime
    measurement: Measurement
    verdict: Verdict
    reasons: tuple[str, ...]
    report: Path | None


@dataclass(frozen=True, slots=True, eq=False)
class IngestOutcome:
    """What an ingest did with every file it saw: seen = used + duplicate + held."""

    runs: tuple[RunOutcome, ...]  # measured, or first judged, by this ingest; by time
    held: tuple[Held, ...]
    seen: int
    used: int
    duplicate: int
    scanners: tuple[ScannerToday, ...]  # every scanner as it now stands
    front_page: Path | None


def ingest(
    site: Site,
    paths: Sequence[Path],
    *,
    celsius: float | None = None,
    progress: Progress | None = None,
    report: bool = True,
    today: date | None = None,
) -> IngestOutcome:
    """Take in folders and files of DICOM: everything that is not known yet is measured, stored, judged and reported.

    Parameters
    ----------
    celsius : temperature of all runs taken in now; absent: from the log, else from temperatures.csv
    today : the day for what is due and overdue; absent: now, in the site's time zone
    """
    tell = progress or _silent
    day = today or datetime.now(site.timezone).date()
    with open_book(site) as book:
        waiting = [run for run, verdict in _verdicts(book) if verdict is None]  # an earlier ingest was cut short
        taken = intake.gather(paths, site, known=book.known_files(), progress=progress)
        held = list(taken.held)
        measured: dict[str, Measurement] = {}
        used: list[str] = []
        for number, session in enumerate(sorted(taken.sessions, key=lambda one: one.acquired)):
            tell("measuring runs", number, len(taken.sessions))
            earlier = book.run_files(session.run)
            whole = intake.merge(session, earlier, site) if earlier else session
            measurement, also_held = measure_session(book, site, whole, celsius)
            held += [*whole.held, *also_held]
            whole = _without(whole, also_held)
            reason = "more files of this run arrived" if earlier else "first measured"
            book.record(whole, measurement, method_fingerprint=fingerprint(), reason=reason, only_new_files=True)
            measured[whole.run] = measurement
            used += [record.sha256 for record in whole.files]
        tell("measuring runs", len(taken.sessions), len(taken.sessions))
        book.hold(held)
        book.release(used)
        judged = judge_book(book, site)
        trend = keep_findings(book, site, day)
        front = None
        if report:
            tell("writing pages", 0, 1)
            front = write_report(site, book=book, runs=list(judged), today=day)
            tell("writing pages", 1, 1)
        outcomes = _outcomes(book, {*waiting, *measured}, measured, front)
        scanners = scanners_today(book, site, day, trend)
    refused = {one.sha256 for one in held}
    rest = sum(file.sha256 not in refused for one in taken.sessions for file in one.files)
    return IngestOutcome(outcomes, tuple(held), taken.seen, rest, taken.duplicates, scanners, front)


def measure_session(
    book: Book, site: Site, session: Session, celsius: float | None = None
) -> tuple[Measurement, tuple[Held, ...]]:
    """Load one run's series and measure them; a run for which no recipe is scheduled is void, with the reason."""
    temperature = temperature_of(book, site, session, celsius)
    schedule = site.schedule_for(session.scanner, session.phantom)
    if schedule is None:
        text = (
            f"no [[schedule]] in site.toml joins scanner '{session.scanner}' and phantom '{session.phantom}', "
            "so there is no recipe to measure by: add one and run 'vialbook remeasure'"
        )
        void = Remark("no-recipe", text, Consequence.VOID)
        nothing = measure([], site.phantom(session.phantom).plate, session.field_t, temperature, (void,))
        return nothing, ()
    loaded = intake.load(session, schedule.recipe)
    plate = site.phantom(session.phantom).plate
    remarks = (*session.remarks, *loaded.remarks)
    return measure(loaded.series, plate, session.field_t, temperature, remarks), loaded.held


def temperature_of(book: Book, site: Site, session: Session, celsius: float | None) -> RunTemperature:
    """The run's temperature: from the command, else from the book's log, else from temperatures.csv, else unknown."""
    if celsius is not None:
        return RunTemperature.measured(celsius, FROM_COMMAND)
    logged = book.temperature_logged(session.scanner, session.acquired)
    if logged is not None:
        return RunTemperature.measured(logged, FROM_LOG)
    tabled = site.celsius(session.scanner, session.acquired)
    if tabled is not None:
        return RunTemperature.measured(tabled, FROM_TABLE)
    return RunTemperature.unknown(site.plausible_c)


def judge_book(book: Book, site: Site, again: tuple[str | None, datetime] | None = None) -> dict[str, Judgement]:
    """Judge every run that has no verdict yet, and every later run of the same scanner.

    Software and coil changes that the runs themselves show become log entries first. A verdict is stored only where
    it is new or differs, so judging twice changes nothing.

    Parameters
    ----------
    again : a scanner (None: all) and a time: its runs since then are judged again too, as after a log entry that
        restarts their baseline
    """
    from qa import trend

    runs = book.runs()
    waiting = runs["verdict"].isna()
    if again is not None:
        waiting |= (runs["acquired"] >= again[1]) & ((runs["scanner"] == again[0]) | (again[0] is None))
    waiting_runs = runs[waiting]
    if waiting_runs.empty:
        return {}
    for entry in trend.log_entries_from_runs(runs):
        book.add_log_entry(entry.at, entry.scanner, None, entry.kind, entry.text, source="dicom")
    limits = book.note_limits(site.limits).digest
    log = book.log_entries()
    judged: dict[str, Judgement] = {}
    for scanner, group in waiting_runs.groupby("scanner"):
        name = str(scanner)
        judged |= trend.judge(
            book.readings(scanner=name),
            log,
            site.limits,
            runs=runs[(runs["scanner"] == name) & (runs["acquired"] >= group["acquired"].min())],
            baseline_runs=site.baseline_runs,
            schedule_days=site.shortest_days(name),
            timezone=site.timezone,
        )
    for row in runs[runs["run"].isin(list(judged))].to_dict("records"):
        judgement = judged[row["run"]]
        if row["verdict"] != judgement.verdict or list(row["reasons"] or ()) != list(judgement.reasons):
            book.set_verdict(row["run"], row["generation"], judgement.verdict, judgement.reasons, limits)
    return judged


def keep_findings(book: Book, site: Site, today: date) -> Trend:
    """Look for what has moved and keep the open findings in the book: new ones are raised, known ones grow."""
    trend = drift(book, site, today)
    book.save_findings([one.as_dict() for one in trend.findings if one.state == "open"], complete=True)
    return trend


def write_report(
    site: Site,
    *,
    book: Book | None = None,
    out: Path | None = None,
    runs: Sequence[str] | None = None,
    single_file: bool = False,
    today: date | None = None,
) -> Path:
    """Write the pages and give the front page.

    Parameters
    ----------
    book : an open book; absent: the site's is opened
    out : folder for the pages; absent: ``pages`` in the site folder
    runs : write only these run pages, and those that are missing; absent: all
    single_file : every page whole in itself, to be mailed
    """
    from qa.report.pages import write_pages

    folder = out or site.pages
    day = today or datetime.now(site.timezone).date()
    if book is None:
        with open_book(site, create=False) as opened:
            return write_report(site, book=opened, out=out, runs=runs, single_file=single_file, today=day)
    wanted = None
    if runs is not None:
        wanted = [run for run in book.runs()["run"] if run in runs or not (folder / "runs" / f"{run}.html").exists()]
    return write_pages(book, site, folder, today=day, single_file=single_file, runs=wanted)


def _without(session: Session, held: Iterable[Held]) -> Session:
    """The session less the files that turned out to be unusable when their pixels were read."""
    refused = {one.sha256 for one in held}
    return replace(session, files=tuple(record for record in session.files if record.sha256 not in refused))


def _verdicts(book: Book) -> list[tuple[str, str | None]]:
    runs = book.runs()
    return [(str(run), verdict or None) for run, verdict in zip(runs["run"], runs["verdict"].fillna(""), strict=True)]


def _outcomes(
    book: Book, new: Iterable[str], measured: Mapping[str, Measurement], front: Path | None
) -> tuple[RunOutcome, ...]:
    """The runs of `new` as the book now has them, by time."""
    rows = book.runs()
    outcomes = []
    for row in rows[rows["run"].isin(list(new))].to_dict("records"):
        run = str(row["run"])
        page = front.parent / "runs" / f"{run}.html" if front is not None else None
        outcomes.append(
            RunOutcome(
                run=run,
                generation=int(row["generation"]),
                scanner=str(row["scanner"]),
                phantom=str(row["phantom"]),
                acquired=row["acquired"].to_pydatetime(),
                measurement=measured[run] if run in measured else book.measurement(run),
                verdict=Verdict(row["verdict"]),
                reasons=tuple(row["reasons"] or ()),
                report=page if page is not None and page.exists() else None,
            )
        )
    return tuple(outcomes)


def _silent(doing: str, done: int, total: int) -> None:
    """No progress shown."""
