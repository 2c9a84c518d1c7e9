"""The page of one run: what was measured, how, and from which files."""

from __future__ import annotations

import base64
from typing import Any

from qa.reading import Circle, Measurement, Picture, Reading
from qa.report.figures import curves
from qa.report.output import slug
from qa.report.rounding import NONE, fixed, significant, with_u
from qa.report.texts import local
from qa.site import Site
from qa.store import Book
from qa.words import Quantity

_TRAITS = {
    "snr": ("signal to noise of one voxel", ""),
    "inversion_efficiency": ("inversion efficiency", ""),
    "refocusing_angle_deg": ("mean refocusing angle over the slice", "°"),
    "transmit_level": ("transmit level (1: as prescribed)", ""),
    "scale": ("size of the plate in the image over its stated size", ""),
}


def content(book: Book, site: Site, run: str) -> dict[str, Any]:
    """What the page of one run shows."""
    rows = book.runs(run=run, generation="all").to_dict("records")
    row = rows[-1]
    made = book.measurement(run, int(row["generation"]))
    scans = list(dict.fromkeys(reading.scan for reading in made.readings))
    return {
        "run": run,
        "scanner": row["scanner"],
        "scanner_page": f"scanners/{slug(row['scanner'])}.html",
        "phantom": row["phantom"],
        "when": local(row["acquired"], site.timezone),
        "verdict": row["verdict"] or "void",
        "reasons": list(row["reasons"] or ()),
        "facts": _facts(row, made),
        "remarks": [
            {"text": r.text, "consequence": str(r.consequence), "about": r.subject or "the run"} for r in made.remarks
        ],
        "scans": [_scan(name, made) for name in scans],
        "pictures": [_picture(picture) for picture in made.pictures],
        "files": [{"path": file.path, "sha256": file.sha256, "size": file.size} for file in book.run_files(run)],
        "generations": [_generation(one, site) for one in rows] if len(rows) > 1 else [],
        "provenance": _provenance(row, site),
        "limits": [limit_text(one) for one in book.limits(row["limits_digest"])["block"]]
        if row["limits_digest"]
        else [],
    }


def _facts(row: dict[Any, Any], made: Measurement) -> list[tuple[str, str]]:
    if made.celsius is None:
        temperature = f"not known ({made.celsius_source}): values stand uncorrected, and their uncertainty is widened"
    else:
        temperature = f"{with_u(made.celsius, made.u_celsius, '°C')} (k = 1; {made.celsius_source})"
    facts = [("Temperature", temperature), ("Field", f"{row['field_t']:g} T")]
    facts += [(name, str(row[key])) for name, key in (("Software", "software"), ("Coil", "coil")) if row[key]]
    found = made.placement
    if found is None:
        facts.append(("Plate", "not located"))
    else:
        face = "its labelled face away from the viewer" if found.flipped else "its labelled face towards the viewer"
        missing = f"; not seen: {', '.join(found.missing)}" if found.missing else "; every vial seen"
        facts.append(
            (
                "Plate",
                f"turned by {found.rotation_deg:.1f}°, {face}{missing}; "
                f"vial centres fit to {found.residual_mm:.2f} mm rms",
            )
        )
        facts.append(("Certainty of the labels", f"{100 * found.confidence:.0f} %"))
    for key, value in made.shared.items():
        scan, _, trait = key.partition(": ")
        if trait in _TRAITS:
            name, unit = _TRAITS[trait]
            u = made.shared.get(f"{scan}: u_{trait}")
            text = with_u(value, u) if u is not None else significant(value, 4 if trait == "scale" else 3)
            facts.append((f"{scan}: {name}" if scan != "placement" else name, f"{text}{unit}"))
    return facts


def _scan(name: str, made: Measurement) -> dict[str, Any]:
    readings = [reading for reading in made.readings if reading.scan == name]
    first = readings[0]
    drawn = [curve for curve in made.curves if curve.scan == name]
    labels = {r.vial: f"vial {r.vial}: {with_u(r.value_ms, r.u_ms, 'ms')}" for r in readings}
    time_name = "TI" if first.quantity is Quantity.T1 else "TE"
    return {
        "name": name,
        "quantity": str(first.quantity),
        "method": f"{first.method}, version {first.method_version}",
        "rows": [_reading(reading) for reading in readings],
        "figure": curves(drawn, labels, time_name) if drawn else None,
    }


def _reading(one: Reading) -> dict[str, Any]:
    parts = ""
    if one.budget is not None:
        budget = (
            ("noise", one.budget.noise_ms),
            ("model", one.budget.model_ms),
            ("within the vial", one.budget.region_ms),
        )
        parts = ", ".join(f"{name} {significant(value, 2)}" for name, value in budget)
        parts += f"; temperature correction {significant(one.budget.temperature_ms, 2)}"
    return {
        "vial": one.vial,
        "measured": with_u(one.value_ms, one.u_ms),
        "at_reference": with_u(one.value_at_reference_ms, one.u_at_reference_ms),
        "reference": with_u(one.reference_ms, one.u_reference_ms) if one.reference_ms is not None else "none",
        "deviation": with_u(one.deviation_percent, one.u_deviation_percent, sign=True),
        "parts": parts or NONE,
        "state": str(one.state),
        "voxels": f"{one.voxels}" + (f" ({one.excluded_voxels} left out)" if one.excluded_voxels else ""),
        "notes": "; ".join(one.notes),
    }


def _picture(one: Picture) -> dict[str, Any]:
    return {
        "scan": one.scan,
        "rows": one.rows,
        "columns": one.columns,
        "png": base64.b64encode(one.png).decode("ascii"),
        "circles": [_circle(circle, one) for circle in one.circles],
        "alt": f"Image of scan {one.scan}: {len(one.circles)} vials marked by circles with their labels",
    }


def _circle(one: Circle, picture: Picture) -> dict[str, Any]:
    return {
        "label": one.vial,
        "x": fixed(one.column + 0.5, 2),
        "y": fixed(one.row + 0.5, 2),
        "r": fixed(one.radius, 2),
        "state": str(one.state).replace(" ", "-"),
        "size": fixed(max(one.radius * 0.9, picture.rows / 32), 2),
    }


def _generation(row: dict[Any, Any], site: Site) -> dict[str, Any]:
    return {
        "number": row["generation"],
        "measured": local(row["measured_at"], site.timezone),
        "why": row["reason"],
        "methods": row["method_fingerprint"],
        "files": row["files"],
        "verdict": row["verdict"] or "not judged",
    }


def _provenance(row: dict[Any, Any], site: Site) -> list[tuple[str, str]]:
    judged = row["judged_at"]
    return [
        ("Run", str(row["run"])),
        ("Generation", f"{row['generation']}: {row['reason']}"),
        ("Measured", f"{local(row['measured_at'], site.timezone)} with {row['method_fingerprint']}"),
        ("Judged", f"{local(judged, site.timezone)}" if judged == judged else "not yet"),
        ("Limits in force (digest)", str(row["limits_digest"] or NONE)),
        ("Study", str(row["study_uid"])),
    ]


def limit_text(block: dict[str, Any]) -> str:
    about = [str(block[key]) for key in ("quantity", "scanner") if block.get(key)]
    about += [f"vials {', '.join(block['vials'])}"] if block.get("vials") else []
    where = ", ".join(about) or "everything"
    return (
        f"{where}: watch beyond {block['watch_percent']:g} %, act beyond {block['act_percent']:g} % "
        f"from {block['against']}, since {block['since']}"
    )
