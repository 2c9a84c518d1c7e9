"""The history for auditors: what was measured with which method and limits, who decided what, and the ledger's end."""

from __future__ import annotations

import json
from typing import TYPE_CHECKING, Any

from qa.report.runs import limit_text
from qa.report.texts import day, finding_view, local

if TYPE_CHECKING:
    from qa.report.pages import Facts

LEDGER_TAIL = 40
MOST_RUNS = 400
_LONGEST = 300


def content(facts: Facts) -> dict[str, Any]:
    """What the auditors' page shows."""
    zone, book = facts.site.timezone, facts.book
    runs = facts.runs
    blocks = book.limits()
    anchor = book.anchor()
    ledger = book.ledger()
    return {
        "anchor": str(anchor),
        "entries": len(ledger),
        "runs_in_all": len(runs),
        "runs": [
            {
                "run": row["run"],
                "when": local(row["acquired"], zone),
                "scanner": row["scanner"],
                "phantom": row["phantom"],
                "verdict": row["verdict"] or "void",
                "generation": row["generation"],
                "measured": local(row["measured_at"], zone),
                "methods": ", ".join(f"{name} {version}" for name, version in sorted(row["method_versions"].items())),
                "limits": (row["limits_digest"] or "")[:10],
                "software": row["software"],
                "coil": row["coil"],
            }
            for row in runs.tail(MOST_RUNS).iloc[::-1].to_dict("records")
        ],
        "limits": [
            {
                "text": limit_text(row["block"]),
                "digest": row["digest"][:10],
                "seen": local(row["first_seen"], zone),
                "withdrawn": local(row["withdrawn"], zone) if row["withdrawn"] == row["withdrawn"] else "in force",
            }
            for row in blocks.to_dict("records")
        ],
        "findings": [
            finding_view(one, facts.rulings) | {"raised": day(one["first_raised"])} for one in facts.findings.values()
        ],
        "rulings": [
            {
                "when": local(row["at"], zone),
                "who": row["who"],
                "finding": row["finding"],
                "decision": row["decision"],
                "reason": row["reason"],
            }
            for row in facts.rulings
        ],
        "log": [
            {
                "when": local(row["at"], zone),
                "entered": local(row["entered_at"], zone),
                "about": " / ".join(str(row[key]) for key in ("scanner", "phantom") if row[key]) or "all",
                "kind": row["kind"],
                "text": row["text"],
                "by": row["who"] or ("read from the images" if row["source"] == "dicom" else "–"),
                "restart": bool(row["restart_baseline"]),
            }
            for row in facts.log.iloc[::-1].to_dict("records")
        ],
        "ledger": [
            {
                "seq": row["seq"],
                "when": local(row["at"], zone, seconds=True),
                "kind": row["kind"],
                "subject": row["subject"],
                "payload": _short(row["payload"]),
                "hash": row["hash"][:16],
            }
            for row in ledger.tail(LEDGER_TAIL).iloc[::-1].to_dict("records")
        ],
    }


def _short(payload: Any) -> str:
    text = json.dumps(payload, ensure_ascii=False, sort_keys=True)
    return text if len(text) <= _LONGEST else text[: _LONGEST - 1] + "…"
