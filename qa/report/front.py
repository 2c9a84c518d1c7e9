"""The site's front page: may each scanner be used today, what is due, what needs a decision."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from qa.due import DueRow, DueState
from qa.report.figures import series
from qa.report.output import slug
from qa.report.texts import finding_view, local

if TYPE_CHECKING:
    from qa.report.pages import Facts

LATEST = 12  # runs listed
MOST_HELD = 60  # held files listed


def content(facts: Facts) -> dict[str, Any]:
    """What the front page shows."""
    site = facts.site
    latest = facts.runs.tail(LATEST).iloc[::-1].to_dict("records")
    rows = {row["run"]: row for row in latest}
    held = facts.book.held()
    open_ones = [one.as_dict() for one in facts.trend.findings if one.state == "open"]
    views = [finding_view(one, facts.rulings) for one in open_ones]
    return {
        "scanners": [_scanner(one, site.timezone) for one in facts.scanners],
        "undecided": [view for view in views if view["decided"] is None],
        "standing": [view for view in views if view["decided"] is not None and not view["settled"]],
        "due": [due_view(row) for one in facts.scanners for row in one.due],
        "held": [
            {
                "path": row["path"],
                "code": row["code"],
                "reason": row["reason"],
                "since": local(row["first_seen"], site.timezone),
            }
            for row in held.head(MOST_HELD).to_dict("records")
        ],
        "held_in_all": len(held),
        "latest": [
            {
                "run": run,
                "when": local(row["acquired"], site.timezone),
                "scanner": row["scanner"],
                "phantom": row["phantom"],
                "verdict": row["verdict"] or "void",
                "why": (row["reasons"] or [""])[0],
            }
            for run, row in rows.items()
        ],
        "figures": _levels(facts),
    }


def _scanner(one: Any, zone: Any) -> dict[str, Any]:
    return {
        "name": one.scanner,
        "page": f"scanners/{slug(one.scanner)}.html",
        "verdict": str(one.verdict) if one.verdict else "never run",
        "sentence": one.sentence,
        "reasons": list(one.reasons),
        "last_run": one.last_run,
        "last": local(one.last_acquired, zone) if one.last_acquired else "never",
    }


def due_view(row: DueRow) -> dict[str, Any]:
    """One line of the schedule in words."""
    if row.state is DueState.NEVER:
        words = "never run"
    elif row.state is DueState.DONE:
        words = f"next in {row.days} day{'' if row.days == 1 else 's'}"
    elif row.days == 0:
        words = "due today"
    else:
        words = f"{row.state}, {-row.days} day{'' if row.days == -1 else 's'} past"
    return {
        "scanner": row.scanner,
        "phantom": row.phantom,
        "recipe": row.recipe,
        "last": row.last.isoformat() if row.last else "never",
        "next": row.next_due.isoformat() if row.next_due else "–",
        "words": words,
        "late": row.state in (DueState.OVERDUE, DueState.NEVER),
    }


def _levels(facts: Facts) -> list[dict[str, Any]]:
    """One figure per quantity: the smoothed level of each scanner."""
    levels = facts.trend.levels
    figures = []
    for quantity in sorted(set(levels["quantity"])) if len(levels) else []:
        lines = []
        chosen = levels[levels["quantity"] == quantity]
        for (scanner, phantom, scan), group in chosen.groupby(["scanner", "phantom", "scan"], sort=True):
            several = chosen[chosen["scanner"] == scanner][["phantom", "scan"]].drop_duplicates()
            name = str(scanner) if len(several) == 1 else f"{scanner}, {phantom}, {scan}"
            times = [stamp.isoformat() for stamp in group["acquired"]]
            lines.append({"x": times, "y": group["level_percent"], "u": None, "name": name, "dash": "solid"})
        figure = series(lines, f"{quantity} level, % from baseline", legend=True, height=280)
        figures.append({"title": f"{quantity}: what all vials of a scanner have in common", "figure": figure})
    return figures
