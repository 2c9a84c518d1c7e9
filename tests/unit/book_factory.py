"""Fills a book with a synthetic history, straight as measurements: no DICOM, no fitting.

For tests of rooms that read from the book. Same arguments, same book (times, values, digests).
"""

from __future__ import annotations

import hashlib
import zlib
from collections.abc import Callable
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta

import numpy as np

from qa.intake.series import FileRecord, Session
from qa.locate.placement import Placement
from qa.reading import Budget, Circle, Curve, Measurement, Picture, Reading
from qa.store import Book, open_book
from qa.words import Quantity, State, Verdict

START = datetime(2025, 1, 6, 7, 30, tzinfo=UTC)
SCANS = (
    ("T1 IR", Quantity.T1, "inversion-recovery"),
    ("T2 train", Quantity.T2, "spin-echo-train"),
)
Drift = Callable[[str, str, str, int], float]  # scanner, vial, scan, week -> percent


@dataclass
class Clock:
    """A clock for a book that is set by hand."""

    time: datetime = START

    def __call__(self) -> datetime:
        return self.time


def steady(scanner: str, vial: str, scan: str, week: int) -> float:
    """No drift."""
    return 0.0


def reading(
    vial: str,
    scan: str,
    quantity: Quantity,
    method: str,
    value_ms: float | None,
    reference_ms: float,
    *,
    state: State = State.GOOD,
    notes: tuple[str, ...] = (),
    method_version: str = "1",
) -> Reading:
    """One reading with a plausible budget (0.5 % in all); without a value, all numbers but the reference's are None."""
    if value_ms is None:
        numbers: dict[str, float | None] = dict.fromkeys(
            (
                "value_ms",
                "u_ms",
                "value_at_reference_ms",
                "u_at_reference_ms",
                "deviation_percent",
                "u_deviation_percent",
            )
        )
        budget = None
    else:
        parts = Budget(0.003 * value_ms, 0.003 * value_ms, 0.002 * value_ms, 0.002 * value_ms)
        u = float(np.sqrt(parts.noise_ms**2 + parts.model_ms**2 + parts.region_ms**2))
        budget = parts
        numbers = {
            "value_ms": value_ms,
            "u_ms": u,
            "value_at_reference_ms": value_ms,
            "u_at_reference_ms": float(np.hypot(u, parts.temperature_ms)),
            "deviation_percent": 100.0 * (value_ms / reference_ms - 1.0),
            "u_deviation_percent": 100.0 * float(np.hypot(u, parts.temperature_ms)) / reference_ms,
        }
    return Reading(
        vial=vial,
        quantity=quantity,
        scan=scan,
        method=method,
        method_version=method_version,
        state=state,
        notes=notes,
        voxels=113,
        excluded_voxels=2,
        budget=budget,
        reference_ms=reference_ms,
        u_reference_ms=0.004 * reference_ms,
        **numbers,
    )


def references(vials: int) -> dict[tuple[str, Quantity], float]:
    """Reference values in ms by vial label and quantity: T1 from 200 to 2000 ms, T2 from 20 to 400 ms, log-spaced."""
    t1, t2 = np.geomspace(2000.0, 200.0, vials), np.geomspace(400.0, 20.0, vials)
    labels = [str(number + 1) for number in range(vials)]
    return {(label, Quantity.T1): float(t1[i]) for i, label in enumerate(labels)} | {
        (label, Quantity.T2): float(t2[i]) for i, label in enumerate(labels)
    }


def measurement(
    scanner: str,
    week: int,
    vials: int = 14,
    *,
    drift: Drift = steady,
    evidence: bool = False,
    software: str = "V1",
    coil: str = "HEAD 16",
    celsius: float | None = 20.5,
    seed: int = 0,
) -> Measurement:
    """One run of `vials` vials in two scans: reference x (1 + drift) with 0.5 % Gaussian noise."""
    key = zlib.crc32(f"{scanner}/{week}/{seed}".encode())
    rng = np.random.default_rng(key)
    rows, known = [], references(vials)
    for scan, quantity, method in SCANS:
        for number in range(vials):
            vial = str(number + 1)
            true = known[vial, quantity] * (1 + drift(scanner, vial, scan, week) / 100)
            value = float(true * (1 + 0.005 * rng.standard_normal()))
            rows.append(reading(vial, scan, quantity, method, value, known[vial, quantity]))
    placement = Placement(
        centre_row=64.0 + 0.1 * float(rng.standard_normal()),
        centre_column=63.5,
        rotation_deg=float(rng.uniform(-30, 30)),
        flipped=False,
        scale=1.0 + 0.0005 * float(rng.standard_normal()),
        residual_mm=0.2,
        confidence=0.97,
        seen=tuple(str(n + 1) for n in range(vials)),
        missing=(),
    )
    return Measurement(
        readings=tuple(rows),
        placement=placement,
        placement_centre_mm=(1.0, -2.0, 30.0),
        celsius=celsius,
        u_celsius=None if celsius is None else 0.2,
        celsius_source="none: no entry near the run" if celsius is None else "temperatures.csv",
        remarks=(),
        curves=_curves(rows) if evidence else (),
        pictures=_pictures(rows, rng) if evidence else (),
        shared={"placement: scale": placement.scale, "T1 IR: snr": 210.0},
        software=software,
        coil=coil,
    )


def session(
    scanner: str, phantom: str, acquired: datetime, *, field_t: float = 3.0, files: int = 18, software: str = "V1"
) -> Session:
    """A session whose run id and file hashes follow from scanner, phantom and time."""
    study = f"1.2.826.0.1.{zlib.crc32(f'{scanner}{phantom}{acquired.isoformat()}'.encode())}"
    run = hashlib.sha256(f"{study}/{scanner}/{phantom}".encode()).hexdigest()[:12]
    records = tuple(
        FileRecord(f"{run}/{n:03d}.dcm", hashlib.sha256(f"{run}/{n}".encode()).hexdigest(), 33_000 + n, f"{study}.{n}")
        for n in range(files)
    )
    facts = {"SoftwareVersions": software, "MagneticFieldStrength": str(field_t)}
    return Session(run, study, scanner, phantom, acquired, field_t, records, facts)


def fill(
    book: Book,
    *,
    scanners: tuple[str, ...] = ("North bay", "South bay"),
    weeks: int = 30,
    vials: int = 14,
    phantom: str = "Plate A",
    start: datetime = START,
    drift: Drift = steady,
    evidence: bool = False,
    verdict: Verdict | None = Verdict.STEADY,
    clock: Clock | None = None,
    files: int = 18,
) -> list[str]:
    """Record one run per scanner and week; gives the run ids in order.

    With a `clock` (the one that the book was opened with), each run is recorded two hours after it was acquired.
    """
    runs = []
    for week in range(weeks):
        for number, scanner in enumerate(scanners):
            acquired = start + timedelta(weeks=week, minutes=30 * number)
            if clock is not None:
                clock.time = acquired + timedelta(hours=2)
            one = session(scanner, phantom, acquired, files=files)
            book.record(
                one,
                measurement(scanner, week, vials, drift=drift, evidence=evidence),
                method_fingerprint="inversion-recovery 1, spin-echo-train 1",
                reason="first ingest",
                verdict=verdict,
            )
            runs.append(one.run)
    return runs


def filled_book(url: str = "sqlite://", **options: object) -> Book:
    """A new book (in memory unless `url` says otherwise) with a history as `fill` makes it."""
    clock = Clock()
    book = open_book(url, clock=clock)
    fill(book, clock=clock, **options)  # type: ignore[arg-type]
    return book


def _curves(rows: list[Reading]) -> tuple[Curve, ...]:
    curves = []
    for row in rows:
        times = np.geomspace(25, 3000, 10) if row.quantity is Quantity.T1 else np.arange(10, 330, 20.0)
        value = row.value_ms or 100.0
        fitted = (
            np.abs(1000 - 1950 * np.exp(-times / value))
            if row.quantity is Quantity.T1
            else 1000 * np.exp(-times / value)
        )
        residual = 3.0 * np.sin(times)
        four = [[float(f"{x:.6g}") for x in values] for values in (times, fitted + residual, fitted, residual)]
        curves.append(Curve(row.vial, row.scan, *four, noise=3.0))
    return tuple(curves)


def _pictures(rows: list[Reading], rng: np.random.Generator) -> tuple[Picture, ...]:
    """One grey PNG per scan, with a circle per vial."""
    import io

    from PIL import Image

    pictures = []
    for scan, _, _ in SCANS:
        of_scan = [row for row in rows if row.scan == scan]
        grey = rng.integers(0, 40, (128, 128), dtype=np.uint8)
        circles = []
        for number, row in enumerate(of_scan):
            angle = 2 * np.pi * number / max(1, len(of_scan))
            y, x = 64 + 40 * float(np.sin(angle)), 64 + 40 * float(np.cos(angle))
            grey[int(y) - 5 : int(y) + 6, int(x) - 5 : int(x) + 6] += 150
            circles.append(Circle(row.vial, y, x, 5.0, row.state))
        stream = io.BytesIO()
        Image.fromarray(grey).save(stream, "PNG")
        pictures.append(Picture(scan, 128, 128, (1.5, 1.5), stream.getvalue(), tuple(circles)))
    return tuple(pictures)
