"""Findings of the trend analysis, and what named people decided about them."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import TYPE_CHECKING, Any

from sqlalchemy import insert, select, update

from qa.errors import StoreError, UsageError
from qa.store.columns import plain
from qa.store.covers import Covers, as_stored
from qa.store.desk import Desk, add_rows
from qa.store.records import FindingRow, RulingRow

if TYPE_CHECKING:
    from pandas import DataFrame

_GRAVITY = {"steady": 0, "watch": 1, "void": 2, "act": 3}
_OURS = ("first_raised", "state")  # kept by the book, not part of a finding's content


class Decisions(Desk):
    """The verbs for findings and rulings."""

    def save_findings(self, findings: Iterable[Mapping[str, Any]], *, complete: bool = False) -> int:
        """Keep what the trend analysis found; gives how many findings are new or have changed.

        Parameters
        ----------
        findings : JSON-like; each with its stable key under "finding". A key that is there already is the same
            finding, grown: its content is renewed, its first date and any ruling stay. A ruling holds for what was
            ruled on: if the verdict gets graver than it then was, the finding is open again.
        complete : these are all there are now; open findings not among them fade (and may come back)
        """
        given = {_key_of(one): {k: plain(v) for k, v in one.items() if k not in _OURS} for one in findings}
        changed = 0
        with self._write() as connection:
            rows = {row["finding"]: dict(row) for row in connection.execute(select(FindingRow.__table__)).mappings()}
            now = self.now()
            for key, content in given.items():
                before = rows.get(key)
                if before is None:
                    fresh = {"finding": key, "content": content, "first_raised": now, "updated": now, "state": "open"}
                    kept, kind = add_rows(connection, FindingRow, [fresh])[0], "raised"
                else:
                    state = self._state_of(connection, before, content)
                    if before["content"] == content and before["state"] == state:
                        continue
                    kept, kind = before | {"content": content, "updated": now, "state": state}, "grown"
                    connection.execute(update(FindingRow).where(FindingRow.finding == key).values(**kept))
                self._witness(
                    connection, kind, key, content | {"state": kept["state"]}, Covers().add("finding", [kept])
                )
                changed += 1
            for key, row in rows.items():
                if complete and key not in given and row["state"] == "open":
                    kept = row | {"updated": now, "state": "faded"}
                    connection.execute(update(FindingRow).where(FindingRow.finding == key).values(**kept))
                    self._witness(connection, "faded", key, {"state": "faded"}, Covers().add("finding", [kept]))
                    changed += 1
        return changed

    def findings(self) -> list[dict[str, Any]]:
        """All findings, the newest first: each one's content with "first_raised" (ISO 8601) and "state"
        ("open", "ruled" or "faded")."""
        query = select(FindingRow.__table__).order_by(FindingRow.first_raised.desc(), FindingRow.finding)
        with self._read() as connection:
            return [
                {"finding": row["finding"]}
                | row["content"]
                | {"first_raised": row["first_raised"].isoformat(), "state": row["state"]}
                for row in connection.execute(query).mappings()
            ]

    def rule(self, finding: str, who: str, decision: str, reason: str) -> int:
        """Enter a named person's decision on a finding, as the finding now is; gives the ruling's number.

        Raises
        ------
        UsageError
            If name, decision or reason is empty, or there is no such finding.
        """
        for name, value in {"name of who decides": who, "decision": decision, "reason": reason}.items():
            if not value.strip():
                raise UsageError(f"a ruling needs the {name}", remedy="Nothing was entered.")
        with self._write() as connection:
            row = (
                connection.execute(select(FindingRow.__table__).where(FindingRow.finding == finding)).mappings().first()
            )
            if row is None:
                known = ", ".join(sorted(connection.execute(select(FindingRow.finding)).scalars())) or "none"
                raise UsageError(f"there is no finding '{finding}'", self._where, f"Findings: {known}.")
            told = {"finding": finding, "who": who.strip(), "decision": decision.strip(), "reason": reason.strip()}
            ruling = as_stored(RulingRow, told | {"at": self.now(), "content": row["content"]})
            del ruling["ruling"]
            made = connection.execute(insert(RulingRow).values(**ruling)).inserted_primary_key
            if made is None:
                raise StoreError("the database gave the ruling no number", self._where)
            ruling["ruling"] = int(made[0])
            ruled = dict(row) | {"state": "ruled"}
            connection.execute(update(FindingRow).where(FindingRow.finding == finding).values(state="ruled"))
            covers = Covers().add("ruling", [ruling]).add("finding", [ruled])
            self._witness(connection, "ruled", finding, told | {"content": row["content"]}, covers)
        return int(ruling["ruling"])

    def rulings(self) -> DataFrame:
        """Rulings in order: ruling, finding, who, decision, reason, at (datetime64[ns, UTC]), content (the finding
        as it was when ruled on, dict)."""
        from qa.store.tidy import frame

        columns = list(RulingRow.__table__.columns)
        with self._read() as connection:
            return frame(columns, connection.execute(select(*columns).order_by(RulingRow.ruling)).all())

    def _state_of(self, connection: Any, before: Mapping[str, Any], content: Mapping[str, Any]) -> str:
        """Open, unless a ruling still holds for what the finding has become."""
        last = (
            connection.execute(
                select(RulingRow.content)
                .where(RulingRow.finding == before["finding"])
                .order_by(RulingRow.ruling.desc())
            )
            .scalars()
            .first()
        )
        if last is None:
            return "open"
        return "ruled" if _gravity(content) <= _gravity(last) else "open"


def _gravity(content: Mapping[str, Any]) -> int:
    return _GRAVITY.get(str(content.get("verdict")), 0)


def _key_of(finding: Mapping[str, Any]) -> str:
    key = finding.get("finding")
    if not isinstance(key, str) or not key:
        raise StoreError('a finding to be kept needs its key, a text, under "finding"')
    return key
