"""Measurements as rows and back: pure functions, no database."""

from __future__ import annotations

import hashlib
import json
import zlib
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import asdict
from typing import TYPE_CHECKING, Any

from qa.reading import Budget, Circle, Curve, Measurement, Picture, Reading
from qa.store.columns import canonical
from qa.words import Consequence, Quantity, Remark, State

if TYPE_CHECKING:
    from qa.intake.series import Session
    from qa.locate.placement import Placement

Row = Mapping[Any, Any]
_PLACED = ("centre_row", "centre_column", "rotation_deg", "flipped", "scale", "residual_mm", "confidence")
_NUMBERS = (
    "value_ms",
    "u_ms",
    "value_at_reference_ms",
    "u_at_reference_ms",
    "reference_ms",
    "u_reference_ms",
    "deviation_percent",
    "u_deviation_percent",
)
_PARTS = {"noise_ms": "u_noise_ms", "model_ms": "u_model_ms", "region_ms": "u_region_ms"} | {
    "temperature_ms": "u_temperature_ms"
}


def measurement_row(session: Session, measurement: Measurement) -> dict[str, Any]:
    """What a measurement says of the run as a whole."""
    placement, centre = measurement.placement, measurement.placement_centre_mm
    row: dict[str, Any] = {name: getattr(placement, name) if placement else None for name in _PLACED}
    row |= {
        "seen": list(placement.seen) if placement else None,
        "missing": list(placement.missing) if placement else None,
    }
    row |= dict(zip(("centre_x_mm", "centre_y_mm", "centre_z_mm"), centre or (None, None, None), strict=True))
    return row | {
        "run": session.run,
        "acquired": session.acquired,
        "field_t": session.field_t,
        "facts": dict(session.facts),
        "celsius": measurement.celsius,
        "u_celsius": measurement.u_celsius,
        "celsius_source": measurement.celsius_source,
        "software": measurement.software,
        "coil": measurement.coil,
        "shared": dict(measurement.shared),
        "remarks": [asdict(remark) for remark in measurement.remarks],
        "run_void": any(r.consequence is Consequence.VOID and not r.subject for r in measurement.remarks),
        "method_versions": {reading.method: reading.method_version for reading in measurement.readings},
    }


def reading_rows(readings: Sequence[Reading]) -> list[dict[str, Any]]:
    """One row per reading, in order; run and generation are still to be added."""
    rows = []
    for position, reading in enumerate(readings):
        row: dict[str, Any] = {name: getattr(reading, name) for name in _NUMBERS}
        budget = reading.budget
        row |= {column: getattr(budget, part) if budget else None for part, column in _PARTS.items()}
        for name in ("vial", "quantity", "scan", "method", "method_version", "state", "voxels", "excluded_voxels"):
            row[name] = getattr(reading, name)
        rows.append(row | {"position": position, "notes": list(reading.notes)})
    return rows


def evidence_rows(curves: Sequence[Curve], pictures: Sequence[Picture]) -> list[dict[str, Any]]:
    """All curves compressed in one row, and a row per picture; run and generation are still to be added."""
    packed = zlib.compress(canonical(curves).encode("ascii"), level=1)
    rows: list[dict[str, Any]] = [{"kind": "curves", "about": {"curves": len(curves)}, "content": packed}]
    for picture in pictures:
        about = asdict(picture)
        content = about.pop("png")
        rows.append({"kind": "picture", "about": about, "content": content})
    return [row | {"position": position} for position, row in enumerate(rows)]


def to_reading(row: Row) -> Reading:
    """A reading as it was measured."""
    parts = {part: row[column] for part, column in _PARTS.items()}
    return Reading(
        vial=row["vial"],
        quantity=Quantity(row["quantity"]),
        scan=row["scan"],
        method=row["method"],
        method_version=row["method_version"],
        state=State(row["state"]),
        notes=tuple(row["notes"]),
        voxels=row["voxels"],
        excluded_voxels=row["excluded_voxels"],
        budget=None
        if all(value is None for value in parts.values())
        else Budget(**{k: _nan(v) for k, v in parts.items()}),
        **{name: row[name] for name in _NUMBERS},
    )


def to_evidence(rows: Iterable[Row]) -> tuple[tuple[Curve, ...], tuple[Picture, ...]]:
    """Curves and pictures, in the order in which they were recorded."""
    curves: tuple[Curve, ...] = ()
    pictures = []
    for row in sorted(rows, key=lambda one: int(one["position"])):
        if row["kind"] == "curves":
            curves = tuple(_curve(item) for item in json.loads(zlib.decompress(row["content"])))
        else:
            about = dict(row["about"])
            circles = tuple(Circle(**(item | {"state": State(item["state"])})) for item in about.pop("circles"))
            spacing = (about["spacing_mm"][0], about["spacing_mm"][1])
            pictures.append(Picture(**(about | {"spacing_mm": spacing}), png=row["content"], circles=circles))
    return curves, tuple(pictures)


def to_measurement(row: Row, readings: Iterable[Row], evidence: Iterable[Row]) -> Measurement:
    """The measurement as it was recorded."""
    curves, pictures = to_evidence(evidence)
    x, y, z = row["centre_x_mm"], row["centre_y_mm"], row["centre_z_mm"]
    return Measurement(
        readings=tuple(to_reading(one) for one in sorted(readings, key=lambda one: int(one["position"]))),
        placement=_placement(row),
        placement_centre_mm=None if x is None else (x, y, z),
        celsius=row["celsius"],
        u_celsius=row["u_celsius"],
        celsius_source=row["celsius_source"],
        remarks=tuple(Remark(**(item | {"consequence": Consequence(item["consequence"])})) for item in row["remarks"]),
        curves=curves,
        pictures=pictures,
        shared=dict(row["shared"]),
        software=row["software"],
        coil=row["coil"],
    )


def files_digest(hashes: Iterable[str]) -> str:
    """One digest over a set of file hashes."""
    return hashlib.sha256("\n".join(sorted(set(hashes))).encode("ascii")).hexdigest()


def _placement(row: Row) -> Placement | None:
    from qa.locate.placement import Placement

    if row["seen"] is None:
        return None
    return Placement(
        **{name: row[name] for name in _PLACED}, seen=tuple(row["seen"]), missing=tuple(row["missing"] or ())
    )


def _curve(item: dict[str, Any]) -> Curve:
    lists = {name: [_nan(value) for value in item[name]] for name in ("times_ms", "signal", "fitted", "residual")}
    return Curve(vial=item["vial"], scan=item["scan"], noise=_nan(item["noise"]), **lists)


def _nan(value: float | None) -> float:
    return float("nan") if value is None else value
