"""Measuring stored runs again from the archive: always a new generation beside the old, never an overwrite."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime

from qa import intake
from qa.errors import UsageError
from qa.intake.series import Held
from qa.methods import fingerprint
from qa.pipeline import Progress, judge_book, measure_session
from qa.reading import Measurement
from qa.site import Site
from qa.store import open_book
from qa.temperature import FROM_COMMAND


@dataclass(frozen=True, slots=True)
class ReadingChange:
    """One reading before and after; None where that generation had no number."""

    vial: str
    scan: str
    old_ms: float | None
    new_ms: float | None
    u_new_ms: float | None
    difference_percent: float | None


@dataclass(frozen=True, slots=True, eq=False)
class Change:
    """One run measured anew: the old and the new generation beside each other."""

    run: str
    scanner: str
    phantom: str
    acquired: datetime
    old_generation: int
    new_generation: int
    rows: tuple[ReadingChange, ...]


def remeasure(
    site: Site, runs: Sequence[str] | None = None, *, reason: str, progress: Progress | None = None
) -> tuple[tuple[Change, ...], tuple[Held, ...]]:
    """Measure runs again with today's methods, recipe, plate and references.

    Parameters
    ----------
    runs : run ids; None for all
    reason : why, for the ledger

    Returns
    -------
    changes, held
        A run whose originals are missing or altered in the archive keeps its old generation and is listed as held.

    Raises
    ------
    UsageError
        If a run id is not in the book.
    """
    changes: list[Change] = []
    held: list[Held] = []
    with open_book(site, create=False) as book:
        table = book.runs().sort_values("acquired")
        unknown = sorted(set(runs or ()) - set(table["run"]))
        if unknown:
            raise UsageError(f"no such run: {', '.join(unknown)}", remedy="'vialbook export --what runs' lists them.")
        wanted = table if runs is None else table[table["run"].isin(list(runs))]
        for number, row in enumerate(wanted.itertuples()):
            if progress:
                progress("measuring again", number, len(wanted))
            run, old_generation = str(row.run), int(row.generation)  # type: ignore[arg-type]  # pandas' row fields
            session, refused = intake.session_from_archive(site, book.run_files(run), run=run)
            held += refused
            if session is None:
                continue
            old = book.measurement(run, old_generation)
            given = old.celsius if old.celsius_source == FROM_COMMAND else None
            new, also_held = measure_session(book, site, session, given)
            held += also_held
            generation = book.record(session, new, method_fingerprint=fingerprint(), reason=reason)
            changes.append(
                Change(
                    run=run,
                    scanner=session.scanner,
                    phantom=session.phantom,
                    acquired=session.acquired,
                    old_generation=old_generation,
                    new_generation=generation,
                    rows=compare_measurements(old, new),
                )
            )
        judge_book(book, site)
    if progress:
        progress("measuring again", len(wanted), len(wanted))
    return tuple(changes), tuple(held)


def compare_measurements(old: Measurement, new: Measurement) -> tuple[ReadingChange, ...]:
    """Every vial and scan that either generation has, with the change in percent of the old value."""
    before = {(r.scan, r.vial): r for r in old.readings}
    after = {(r.scan, r.vial): r for r in new.readings}
    rows = []
    for key in dict.fromkeys([*after, *before]):
        was, now = before.get(key), after.get(key)
        old_ms = was.value_ms if was else None
        new_ms = now.value_ms if now else None
        change = 100.0 * (new_ms / old_ms - 1.0) if old_ms and new_ms else None
        rows.append(ReadingChange(key[1], key[0], old_ms, new_ms, now.u_ms if now else None, change))
    return tuple(rows)
