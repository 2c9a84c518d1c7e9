"""The JSON documents that scripts read: plain numbers, ISO 8601 dates, null where there is nothing.

Each is described by a JSON Schema of the same name in `qa/schemas`.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import asdict, is_dataclass
from datetime import date
from enum import Enum
from pathlib import Path
from typing import TYPE_CHECKING, Any

from qa.reading import Measurement, Reading

if TYPE_CHECKING:
    from qa.answers import ScannerToday
    from qa.compare import Agreement
    from qa.due import DueRow
    from qa.intake.series import Held
    from qa.pipeline import IngestOutcome, RunOutcome
    from qa.remeasure import Change
    from qa.store import Anchor, Book, Migration, Problem
    from qa.trend import Trend

CONTRACT = 1


def plain(value: Any) -> Any:
    """`value` as JSON knows it: dates as ISO 8601, NaN and infinity as null, dataclasses as objects."""
    if isinstance(value, Enum):
        return value.value
    if isinstance(value, str | bool | int) or value is None:
        return value
    if isinstance(value, float):
        return float(value) if math.isfinite(value) else None
    if isinstance(value, date):
        return value.isoformat() if value == value else None  # pandas' NaT is not equal to itself
    if isinstance(value, Path):
        return str(value)
    if is_dataclass(value) and not isinstance(value, type):
        return plain(asdict(value))
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if hasattr(value, "tolist"):  # NumPy's numbers and arrays
        return plain(value.tolist())
    if isinstance(value, Iterable):
        return [plain(item) for item in value]
    return str(value) if value == value else None


def document(**content: Any) -> dict[str, Any]:
    """A document of this version of the contract."""
    return {"contract": CONTRACT} | {key: plain(value) for key, value in content.items()}


def of_ingest(outcome: IngestOutcome) -> dict[str, Any]:
    """``vialbook ingest --json``."""
    return document(
        runs=[of_run(run) for run in outcome.runs],
        held=of_held(outcome.held),
        files={
            "seen": outcome.seen,
            "used": outcome.used,
            "duplicate": outcome.duplicate,
            "held": len(outcome.held),
        },
        scanners=[of_scanner(one) for one in outcome.scanners],
        front_page=outcome.front_page,
    )


def of_run(run: RunOutcome) -> dict[str, Any]:
    """One run with its readings."""
    made = run.measurement
    return {
        "run": run.run,
        "generation": run.generation,
        "scanner": run.scanner,
        "phantom": run.phantom,
        "acquired": run.acquired,
        "temperature_c": made.celsius,
        "temperature_from": made.celsius_source,
        "verdict": run.verdict,
        "reasons": run.reasons,
        "report": run.report,
        "placement": _placement(made),
        "remarks": made.remarks,
        "readings": [_reading(reading) for reading in made.readings],
    }


def _placement(made: Measurement) -> dict[str, Any] | None:
    found = made.placement
    if found is None:
        return None
    return {
        "centre_mm": made.placement_centre_mm,
        "rotation_deg": found.rotation_deg,
        "flipped": found.flipped,
        "scale": found.scale,
        "residual_mm": found.residual_mm,
        "confidence": found.confidence,
        "missing": found.missing,
    }


def _reading(reading: Reading) -> dict[str, Any]:
    """As `Reading`; `u_…` are standard uncertainties (k = 1), `budget` their parts in ms."""
    fields: dict[str, Any] = plain(reading)
    return fields


def of_held(held: Sequence[Held]) -> list[dict[str, Any]]:
    """Held files: where, why, and what to do."""
    return [{"path": one.path, "code": one.code, "reason": one.reason, "sha256": one.sha256} for one in held]


def of_scanner(one: ScannerToday) -> dict[str, Any]:
    """How one scanner stands today."""
    return {
        "scanner": one.scanner,
        "verdict": one.verdict,
        "sentence": one.sentence,
        "reasons": one.reasons,
        "last_run": one.last_run,
        "last_acquired": one.last_acquired,
        "findings": [finding.finding for finding in one.findings],
    }


def of_due(rows: Sequence[DueRow], today: date) -> dict[str, Any]:
    """``vialbook due --json``."""
    return document(today=today, due=rows)


def of_drift(trend: Trend, book: Book, today: date) -> dict[str, Any]:
    """``vialbook drift --json``: what moves, as the analysis has it, with what the book has about it."""
    kept = {one["finding"]: one for one in book.findings()}
    rulings: dict[str, list[Any]] = {}
    for row in book.rulings().to_dict("records"):
        rulings.setdefault(str(row["finding"]), []).append(
            {key: row[key] for key in ("who", "decision", "reason", "at")}
        )
    content = trend.as_dict()
    for one in content["findings"]:
        known = kept.get(one["finding"])
        one["rulings"] = rulings.get(one["finding"], [])
        if known is not None:
            one["first_raised"] = known["first_raised"][:10]
            if one["state"] == "open":
                one["state"] = known["state"]
    return document(today=today, **content)


def of_compare(agreement: Agreement) -> dict[str, Any]:
    """``vialbook compare --json``."""
    return document(**agreement.as_dict())


def of_remeasure(changes: Sequence[Change], held: Sequence[Held]) -> dict[str, Any]:
    """``vialbook remeasure --json``."""
    return document(runs=changes, held=of_held(held))


def of_audit(problems: Sequence[Problem], anchor: Anchor, entries: int, originals: int) -> dict[str, Any]:
    """``vialbook audit --json``."""
    return document(
        sound=not any(problem.grave for problem in problems),
        problems=problems,
        anchor=str(anchor),
        ledger_entries=entries,
        originals_checked=originals,
    )


def of_migrate(done: Migration) -> dict[str, Any]:
    """``vialbook migrate --json``."""
    return document(before=done.before, after=done.after, copy=done.copy, advice=done.advice)
