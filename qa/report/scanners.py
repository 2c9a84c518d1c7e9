"""The page of one scanner: how it stands, what moved, and each vial's history."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from qa.report.figures import series, small_multiples
from qa.report.front import due_view
from qa.report.texts import finding_view, local
from qa.site.limits import in_force
from qa.words import Quantity

if TYPE_CHECKING:
    import pandas as pd

    from qa.answers import ScannerToday
    from qa.report.pages import Facts
    from qa.trend import StreamSummary

RECENT = 15  # runs listed


def content(facts: Facts, one: ScannerToday) -> dict[str, Any]:
    """What the page of one scanner shows."""
    site, name = facts.site, one.scanner
    mine = [found.as_dict() for found in facts.trend.findings if name in found.scanners]
    views = [finding_view(found, facts.rulings) for found in mine]
    runs = facts.runs[facts.runs["scanner"] == name]
    log = facts.log[(facts.log["scanner"] == name) | facts.log["scanner"].isna()]
    return {
        "scanner": name,
        "verdict": str(one.verdict) if one.verdict else "never run",
        "sentence": one.sentence,
        "reasons": list(one.reasons),
        "last_run": one.last_run,
        "last": local(one.last_acquired, site.timezone) if one.last_acquired else "never",
        "due": [due_view(row) for row in one.due],
        "findings": views,
        "levels": _levels(facts, name, log, mine),
        "vials": _vials(facts, name),
        "streams": _stream_rows([s for s in facts.trend.streams if s.scanner == name]),
        "log": [_entry(row, facts) for row in log.iloc[::-1].to_dict("records")],
        "recent": [
            {
                "run": row["run"],
                "when": local(row["acquired"], site.timezone),
                "phantom": row["phantom"],
                "verdict": row["verdict"] or "void",
                "why": (row["reasons"] or [""])[0],
            }
            for row in runs.tail(RECENT).iloc[::-1].to_dict("records")
        ],
        "runs_in_all": len(runs),
    }


def _entry(row: dict[Any, Any], facts: Facts) -> dict[str, Any]:
    return {
        "when": local(row["at"], facts.site.timezone),
        "kind": row["kind"],
        "text": row["text"],
        "by": row["who"] or ("read from the images" if row["source"] == "dicom" else "–"),
        "restart": bool(row["restart_baseline"]),
    }


def _levels(facts: Facts, name: str, log: pd.DataFrame, mine: list[dict[str, Any]]) -> list[dict[str, Any]]:
    """One chart per phantom and scan: level, smoothed level with its limits, onsets and log entries."""
    levels = facts.trend.levels
    if not len(levels):
        return []
    events = [
        (row["at"].isoformat(), f"{row['kind']}: {row['text']}")
        for row in log.to_dict("records")
        if row["kind"] != "temperature"
    ]
    made = []
    for (phantom, scan, quantity), group in levels[levels["scanner"] == name].groupby(
        ["phantom", "scan", "quantity"], sort=True
    ):
        times = [stamp.isoformat() for stamp in group["acquired"]]
        limit = group["smoothed_limit_percent"]
        lines = [
            {"x": times, "y": group["level_percent"], "u": group["u_percent"], "name": "each run (bars: k = 1)"},
            {
                "x": times,
                "y": group["smoothed_percent"],
                "name": "EWMA",
                "dash": "solid",
                "marker": "",
                "color": "#b3541e",
            },
            {"x": times, "y": limit, "name": "its limits", "dash": "dash", "marker": "", "color": "#6b3a7d"},
            {"x": times, "y": -limit, "name": "lower limit", "dash": "dash", "marker": "", "color": "#6b3a7d"},
        ]
        bands = [
            (*one["onset_interval"], f"onset of {one['finding']}")
            for one in mine
            if one["scan"] == scan and one["kind"] in ("step", "slope") and one["state"] != "past"
        ]
        figure = series(lines, "% from baseline", bands=bands, events=events, legend=True, height=320)
        title = f"{quantity} of all vials together ({scan}, {phantom})"
        made.append({"title": title, "figure": figure})
    return made


def _vials(facts: Facts, name: str) -> list[dict[str, Any]]:
    """Small multiples per phantom and scan: deviation from the reference, else from the baseline's mean."""
    import numpy as np

    readings = facts.readings
    readings = readings[(readings["scanner"] == name) & ~readings["run_void"]]
    known = {(s.phantom, s.scan, s.vial): s for s in facts.trend.streams if s.scanner == name}
    made = []
    for (phantom, scan, quantity), group in readings.groupby(["phantom", "scan", "quantity"], sort=True):
        cells = []
        for vial in dict.fromkeys(group["vial"]):
            rows = group[group["vial"] == vial]
            stream = known.get((str(phantom), str(scan), str(vial)))
            y, u = rows["deviation_percent"].to_numpy(), rows["u_deviation_percent"].to_numpy()
            base = 0.0
            if not np.isfinite(y).any():
                middle = float(np.nanmedian(rows["value_ms"])) if rows["value_ms"].notna().any() else np.nan
                y, u = 100.0 * (rows["value_ms"].to_numpy() / middle - 1.0), 100.0 * rows["u_ms"].to_numpy() / middle
            elif stream is not None and stream.baseline_mean_ms and rows["reference_ms"].notna().any():
                base = 100.0 * (stream.baseline_mean_ms / float(rows["reference_ms"].dropna().iloc[-1]) - 1.0)
            cells.append(
                {
                    "label": f"vial {vial}",
                    "x": [stamp.isoformat() for stamp in rows["acquired"]],
                    "y": y,
                    "u": u,
                    "limits": _limit_lines(facts, str(quantity), str(vial), name, base),
                }
            )
        title = f"{quantity} vial by vial ({scan}, {phantom})"
        made.append({"title": title, "figure": small_multiples(cells, "% off")})
    return made


def _limit_lines(facts: Facts, quantity: str, vial: str, scanner: str, base: float) -> list[float]:
    """Action limits in force today, as deviations from the reference."""
    held = in_force(facts.site.limits, facts.today, Quantity(quantity), vial, scanner)
    lines = []
    for against, block in held.items():
        middle = base if against == "baseline" else 0.0
        lines += [middle - block.act_percent, middle + block.act_percent]
    return [round(value, 3) for value in lines]


def _stream_rows(streams: list[StreamSummary]) -> list[dict[str, Any]]:
    from qa.report.rounding import NONE, significant, with_u

    rows = []
    for one in streams:
        if one.baseline_complete and one.baseline_since is not None:
            baseline = f"{one.baseline_runs} runs from {one.baseline_since}"
        else:
            baseline = f"being learnt ({one.baseline_runs} runs so far)"
        limits = f"{one.watch_percent:g} / {one.act_percent:g} %" if one.watch_percent and one.act_percent else "none"
        rows.append(
            {
                "vial": one.vial,
                "scan": one.scan,
                "phantom": one.phantom,
                "baseline": baseline,
                "mean": f"{significant(one.baseline_mean_ms, 5)} ms" if one.baseline_mean_ms else NONE,
                "scatter": f"{significant(one.baseline_sd_percent, 2)} %" if one.baseline_sd_percent else NONE,
                "now": with_u(one.from_baseline_percent, one.u_from_baseline_percent, "%", sign=True),
                "limits": limits,
                "verdict": str(one.verdict),
            }
        )
    return rows
