"""Limits as seen: every dated block with the time it was first seen, so that nobody alters the past unnoticed."""

from __future__ import annotations

import hashlib
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import date
from typing import TYPE_CHECKING, Any

from sqlalchemy import Connection, func, select, update

from qa.store.columns import canonical, plain
from qa.store.covers import Covers, as_stored
from qa.store.desk import Desk, add_rows, as_instant
from qa.store.models import MeasurementRow
from qa.store.records import LimitsRow, LimitsSetRow

if TYPE_CHECKING:
    from pandas import DataFrame

    from qa.site.limits import LimitBlock


@dataclass(frozen=True, slots=True)
class LimitsChange:
    """A block that came, went or came back. `judged` runs of its period had been judged without it (or with it)."""

    change: str  # "noted", "withdrawn", "reinstated"
    block: Mapping[str, Any]
    judged: int

    @property
    def backwards(self) -> bool:
        """Whether it touches a time that had been judged already."""
        return self.judged > 0

    def __str__(self) -> str:
        told = ", ".join(f"{name} = {value}" for name, value in self.block.items())
        tail = f"; {self.judged} judged runs are of its period: their verdicts stand" if self.backwards else ""
        return f"limits {self.change}: {told}{tail}"


@dataclass(frozen=True, slots=True)
class LimitsNoted:
    """The digest that verdicts refer to, and what differs from the last time."""

    digest: str
    changes: tuple[LimitsChange, ...]


def block_digest(block: LimitBlock) -> str:
    """SHA-256 over what the block says; keys that it leaves out do not count."""
    return _sha256(_said(block))


def limits_digest(blocks: Iterable[LimitBlock]) -> str:
    """SHA-256 over all blocks in file order: the limits in force, whole."""
    return _sha256([block_digest(block) for block in blocks])


class Tolerances(Desk):
    """The verbs for limits."""

    def note_limits(self, blocks: Sequence[LimitBlock]) -> LimitsNoted:
        """Compare the limits with those last seen; what is new, changed or gone is entered in the ledger.

        A changed block shows as one withdrawn and one noted. Call it before runs are judged.
        """
        now_said = {block_digest(block): block for block in blocks}
        whole = limits_digest(blocks)
        with self._read() as connection:
            if self._as_last_seen(connection, whole, set(now_said)):
                return LimitsNoted(whole, ())
        with self._write() as connection:
            rows = {row["digest"]: dict(row) for row in connection.execute(select(LimitsRow.__table__)).mappings()}
            new = [digest for digest in now_said if digest not in rows]
            back = [d for d in now_said if d in rows and rows[d]["withdrawn"] is not None]
            gone = [d for d, row in rows.items() if row["withdrawn"] is None and d not in now_said]
            now = self.now()
            fresh = [
                {"digest": d, "since": now_said[d].since, "block": _said(now_said[d]), "first_seen": now} for d in new
            ]
            touched = add_rows(connection, LimitsRow, fresh)
            for digest, when in [(d, None) for d in back] + [(d, now) for d in gone]:
                connection.execute(update(LimitsRow).where(LimitsRow.digest == digest).values(withdrawn=when))
                touched.append(as_stored(LimitsRow, rows[digest] | {"withdrawn": when}))
            changes = tuple(
                LimitsChange(change, block, _judged_since(connection, since))
                for change, digests in (("noted", new), ("withdrawn", gone), ("reinstated", back))
                for digest in digests
                for block, since in [_block_of(digest, now_said, rows)]
            )
            covers = Covers().add("limits", touched)
            if connection.execute(select(LimitsSetRow.digest).where(LimitsSetRow.digest == whole)).first() is None:
                members = {"digest": whole, "blocks": [block_digest(block) for block in blocks], "first_seen": now}
                covers.add("limits_set", add_rows(connection, LimitsSetRow, [members]))
            payload = {
                "digest": whole,
                "changes": [{"change": c.change, "block": c.block, "judged_runs": c.judged} for c in changes],
            }
            kind = "limits-altered-backwards" if any(change.backwards for change in changes) else "limits"
            self._witness(connection, kind, "limits", payload, covers)
        return LimitsNoted(whole, changes)

    def limits(self, digest: str | None = None) -> DataFrame:
        """Blocks as seen: digest, since, block (dict), first_seen, withdrawn (NaT while in force).

        Parameters
        ----------
        digest : only the blocks, in file order, that a verdict with this `limits_digest` was judged by
        """
        from qa.store.tidy import frame

        columns = list(LimitsRow.__table__.columns)
        with self._read() as connection:
            rows = connection.execute(select(*columns).order_by(LimitsRow.since, LimitsRow.digest)).all()
            if digest is not None:
                query = select(LimitsSetRow.blocks).where(LimitsSetRow.digest == digest)
                by_digest = {row[0]: row for row in rows}
                rows = [by_digest[one] for one in connection.execute(query).scalar() or [] if one in by_digest]
        return frame(columns, rows)

    def _as_last_seen(self, connection: Connection, whole: str, digests: set[str]) -> bool:
        standing = select(LimitsRow.digest).where(LimitsRow.withdrawn.is_(None))
        known = select(LimitsSetRow.digest).where(LimitsSetRow.digest == whole)
        return set(connection.execute(standing).scalars()) == digests and connection.execute(known).first() is not None


def _judged_since(connection: Connection, since: date) -> int:
    """How many runs acquired on or after that day have been judged."""
    query = select(func.count(func.distinct(MeasurementRow.run))).where(
        MeasurementRow.verdict.is_not(None), MeasurementRow.acquired >= as_instant(since)
    )
    return int(connection.execute(query).scalar() or 0)


def _block_of(
    digest: str, said: Mapping[str, LimitBlock], rows: Mapping[str, Mapping[str, Any]]
) -> tuple[dict[str, Any], date]:
    if digest in said:
        return _said(said[digest]), said[digest].since
    return dict(rows[digest]["block"]), rows[digest]["since"]


def _said(block: LimitBlock) -> dict[str, Any]:
    return dict(plain(block.model_dump(mode="json", exclude_none=True)))


def _sha256(value: object) -> str:
    return hashlib.sha256(canonical(value).encode("ascii")).hexdigest()
