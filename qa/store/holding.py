"""Files that could not be used: kept in mind until they can, or until somebody lets them go."""

from __future__ import annotations

import hashlib
from collections.abc import Iterable, Iterator, Sequence
from itertools import islice
from typing import TYPE_CHECKING, Any

from sqlalchemy import bindparam, or_, select, update

from qa.store.columns import clean
from qa.store.covers import Covers
from qa.store.desk import Desk, add_rows
from qa.store.records import HeldRow

if TYPE_CHECKING:
    from pandas import DataFrame

    from qa.intake.series import Held

_AT_ONCE = 500  # keys in one query: every SQLite allows that many


class Holding(Desk):
    """The verbs for held files."""

    def hold(self, held: Iterable[Held]) -> int:
        """Keep held files in mind; gives how many are new, held for another reason than before, or held again."""
        noticed = {_key(one.path, one.sha256): one for one in held}
        if not noticed:
            return 0
        with self._write() as connection:
            before: dict[str, dict[str, Any]] = {}
            for part in _parts(noticed):
                for found in connection.execute(select(HeldRow.__table__).where(HeldRow.held.in_(part))).mappings():
                    before[found["held"]] = dict(found)
            now = self.now()
            new: list[dict[str, Any]] = []
            changed: list[dict[str, Any]] = []
            for key, one in noticed.items():
                said = {"code": one.code, "reason": clean(one.reason)}
                known = before.get(key)
                if known is None:
                    times = {"first_seen": now, "last_seen": now}
                    new.append({"held": key, "path": one.path, "sha256": one.sha256} | said | times)
                elif known["resolved"] is not None or {name: known[name] for name in said} != said:
                    changed.append(known | said | {"last_seen": now, "resolved": None})
            kept = add_rows(connection, HeldRow, new)
            if before:
                seen_again = update(HeldRow).where(HeldRow.held == bindparam("key")).values(last_seen=now)
                connection.execute(seen_again, [{"key": key} for key in before])
            for row in changed:
                connection.execute(update(HeldRow).where(HeldRow.held == row["held"]).values(**row))
            news = kept + changed
            if news:
                payload = {"files": [[row["path"], row["code"], row["reason"]] for row in news]}
                self._witness(connection, "held", _count(news), payload, Covers().add("held", news))
        return len(news)

    def release(self, paths_or_hashes: Iterable[str]) -> int:
        """Mark held files as no longer in the way, by path or content hash; gives how many were."""
        names = {clean(str(name)): None for name in paths_or_hashes}
        with self._write() as connection:
            rows: dict[str, dict[str, Any]] = {}
            for part in _parts(names):
                query = select(HeldRow.__table__).where(
                    or_(HeldRow.path.in_(part), HeldRow.sha256.in_(part)), HeldRow.resolved.is_(None)
                )
                rows |= {row["held"]: dict(row) for row in connection.execute(query).mappings()}
            now = self.now()
            for row in rows.values():
                row["resolved"] = now
                connection.execute(update(HeldRow).where(HeldRow.held == row["held"]).values(resolved=now))
            if rows:
                payload = {"files": [[row["path"], row["code"]] for row in rows.values()]}
                covers = Covers().add("held", rows.values())
                self._witness(connection, "released", _count(list(rows.values())), payload, covers)
        return len(rows)

    def held(self, *, resolved: bool = False) -> DataFrame:
        """Held files, newest first: path, sha256, code, reason, first_seen, last_seen, resolved.

        Parameters
        ----------
        resolved : also those that are no longer in the way
        """
        from qa.store.tidy import frame

        columns = [column for column in HeldRow.__table__.columns if column.name != "held"]
        query = select(*columns).order_by(HeldRow.last_seen.desc(), HeldRow.path)
        if not resolved:
            query = query.where(HeldRow.resolved.is_(None))
        with self._read() as connection:
            return frame(columns, connection.execute(query))


def _key(path: str, sha256: str | None) -> str:
    text = f"{clean(path)}\0{sha256 or ''}"
    return hashlib.sha256(text.encode("utf-8")).hexdigest()[:32]


def _count(rows: Sequence[object]) -> str:
    return f"{len(rows)} file" if len(rows) == 1 else f"{len(rows)} files"


def _parts(names: Iterable[str]) -> Iterator[list[str]]:
    pending = iter(names)
    while part := list(islice(pending, _AT_ONCE)):
        yield part
