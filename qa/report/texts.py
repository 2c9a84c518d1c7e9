"""Small texts that several pages share: verdicts, days, findings."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import date, datetime
from typing import Any
from zoneinfo import ZoneInfo

from qa.answers import SETTLES
from qa.report.rounding import interval

WHAT_NEXT = {
    "scanner": "Repeat the run. If it stands, ask service what changed, and decide whether quantitative work waits.",
    "vial": "Look at the vial (bubble, leak, label) and scan the phantom on another scanner before blaming either.",
    "phantom": "Check the phantom and its thermometer; scan another phantom on the same scanner.",
    "temperature": "Check the thermometer and how long the phantom stood in the room before the scan.",
    "unknown": "Repeat the run with care for set-up; look at the vial's fitted curve on the run page.",
}


def local(when: datetime, zone: ZoneInfo, *, seconds: bool = False) -> str:
    """An instant in the site's time zone."""
    return f"{when.astimezone(zone):{'%Y-%m-%d %H:%M:%S' if seconds else '%Y-%m-%d %H:%M'}}"


def day(text: str | date | None) -> str:
    """An ISO date or time as a day."""
    return "–" if text is None else str(text)[:10]


def finding_view(one: Mapping[str, Any], rulings: list[dict[str, Any]]) -> dict[str, Any]:
    """A finding for a table; `one` is its dict form."""
    mine = [ruling for ruling in rulings if ruling["finding"] == one["finding"]]
    decided = mine[-1]["decision"] if mine else None
    low, high = one["onset_interval"]
    size = one["size_interval"]
    coming = one.get("forecast")
    forecast = ""
    if coming and coming["crosses"]:
        latest = coming["latest"] or "more than ten years away"
        forecast = f"reaches the action limit about {coming['crosses']} (90 %: {coming['earliest']} to {latest})"
    return {
        "finding": one["finding"],
        "verdict": str(one["verdict"]),
        "state": one["state"],
        "sentence": one["sentence"],
        "kind": one["kind"],
        "cause": one["cause"],
        "reasons": list(one["cause_reasons"]),
        "entries": [f"{entry['at'][:10]} {entry['kind']}: {entry['text']}" for entry in one["log_entries"]],
        "onset": f"{day(one['onset'])} (90 %: {day(low)} to {day(high)})",
        "size": f"{interval(size[0], size[1], '%', sign=True)} (90 %)" if size else "see the sentence",
        "forecast": forecast,
        "next": WHAT_NEXT.get(str(one["cause"]), ""),
        "scanners": list(one["scanners"]),
        "decided": decided,
        "settled": decided in SETTLES,
        "rulings": [
            f"{day(ruling['at'])} {ruling['who']}: {ruling['decision']}: {ruling['reason']}" for ruling in mine
        ],
    }
