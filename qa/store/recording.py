"""Recording runs: everything one pass of measuring gave, in one transaction with its ledger entry."""

from __future__ import annotations

from collections.abc import Container, Sequence
from typing import TYPE_CHECKING, Any

from sqlalchemy import Connection, func, select, update

from qa import __version__
from qa.errors import StoreError
from qa.reading import Measurement
from qa.store.covers import Covers, Row, as_stored
from qa.store.desk import Desk, add_rows
from qa.store.models import EvidenceRow, FileRow, MeasurementRow, ReadingRow, RunRow
from qa.store.rows import evidence_rows, files_digest, measurement_row, reading_rows
from qa.words import Verdict

if TYPE_CHECKING:
    from qa.intake.series import FileRecord, Session


class KnownFiles(Container[str]):
    """The hashes of all files of recorded runs, asked one at a time: costs the same however many there are."""

    def __init__(self, desk: Desk) -> None:
        self._desk = desk
        self._query = select(FileRow.run).limit(1)

    def __contains__(self, sha256: object) -> bool:
        with self._desk._read() as connection:
            return connection.execute(self._query.where(FileRow.sha256 == str(sha256))).first() is not None


class Recording(Desk):
    """The verbs that put runs into the book."""

    def known_files(self) -> Container[str]:
        """Hashes of the files that recorded runs are made of (held files are not among them: they are tried again)."""
        return KnownFiles(self)

    def has_run(self, run: str) -> bool:
        """Whether any generation of that run is recorded."""
        with self._read() as connection:
            return connection.execute(select(RunRow.run).where(RunRow.run == run)).first() is not None

    def run_files(self, run: str) -> tuple[FileRecord, ...]:
        """The original files of a run that measuring used, in the order of their paths; none for an unknown run."""
        from qa.intake.series import FileRecord

        columns = (FileRow.path, FileRow.sha256, FileRow.size, FileRow.sop_instance_uid)
        query = (
            select(*columns).where(FileRow.run == run, FileRow.role == "used").order_by(FileRow.path, FileRow.sha256)
        )
        with self._read() as connection:
            return tuple(FileRecord(*row) for row in connection.execute(query))

    def record(
        self,
        session: Session,
        measurement: Measurement,
        *,
        method_fingerprint: str,
        reason: str,
        verdict: Verdict | str | None = None,
        reasons: Sequence[str] = (),
        limits_digest: str | None = None,
        duplicates: Sequence[FileRecord] = (),
        only_new_files: bool = False,
    ) -> int:
        """Record one pass of measuring a run as a new generation; nothing earlier is touched.

        Parameters
        ----------
        session, measurement : what was taken in, and what came out of it
        method_fingerprint : names the methods, their versions and settings
        reason : why this pass was made ("first ingest", "remeasured with …")
        verdict, reasons, limits_digest : the judgement, where it is known already; else `set_verdict` follows
        duplicates : files of the run with new content that add nothing (their image is there already)
        only_new_files : if the run is there and this session brings no file that it does not have, leave all
            as it is and give the newest generation: so two ingests of the same folder at once are as good as one

        Returns
        -------
        int
            The generation, from 1.

        Raises
        ------
        StoreError
            If the database refuses; then nothing of the run was recorded.
        """
        with self._write() as connection:
            newest = _newest(connection, session.run)
            roles = select(FileRow.sha256, FileRow.role).where(FileRow.run == session.run)
            known: dict[str, str] = {row[0]: row[1] for row in connection.execute(roles)}
            if newest and only_new_files and all(file.sha256 in known for file in session.files):
                return newest
            generation = newest + 1
            covers = Covers()
            if not newest:
                covers.add("run", add_rows(connection, RunRow, [self._run_row(session)]))
            files = _file_rows(session, duplicates, known, generation)
            covers.add("file", add_rows(connection, FileRow, files))
            used = [sha for sha, role in known.items() if role == "used"]
            used += [file["sha256"] for file in files if file["role"] == "used"]
            row = measurement_row(session, measurement) | {
                "files": len(used),
                "files_digest": files_digest(used),
                "generation": generation,
                "measured_at": self.now(),
                "reason": reason,
                "method_fingerprint": method_fingerprint,
                "vialbook_version": __version__,
            }
            if verdict is not None:
                row |= self._verdict_row(verdict, reasons, limits_digest)
            kept = add_rows(connection, MeasurementRow, [row])
            covers.add("measurement", kept).add("verdict", kept)
            of_run = {"run": session.run, "generation": generation}
            readings = add_rows(connection, ReadingRow, [one | of_run for one in reading_rows(measurement.readings)])
            evidence = [one | of_run for one in evidence_rows(measurement.curves, measurement.pictures)]
            covers.add("reading", readings).add("evidence", add_rows(connection, EvidenceRow, evidence))
            self._witness(connection, "measured", session.run, _payload(session, kept[0], readings), covers)
        return generation

    def set_verdict(
        self,
        run: str,
        generation: int,
        verdict: Verdict | str,
        reasons: Sequence[str] = (),
        limits_digest: str | None = None,
    ) -> bool:
        """Write the judgement of one measurement; False if it was the same already.

        Parameters
        ----------
        limits_digest : which limits were in force, as `note_limits` gave it

        Raises
        ------
        StoreError
            If there is no such measurement.
        """
        here = (MeasurementRow.run == run, MeasurementRow.generation == generation)
        with self._write() as connection:
            found = connection.execute(
                select(MeasurementRow.verdict, MeasurementRow.reasons, MeasurementRow.limits_digest).where(*here)
            ).first()
            if found is None:
                raise StoreError(f"run {run} has no generation {generation}", self._where)
            if tuple(found) == (str(verdict), list(reasons), limits_digest):
                return False
            row = self._verdict_row(verdict, reasons, limits_digest)
            connection.execute(update(MeasurementRow).where(*here).values(**row))
            kept = as_stored(MeasurementRow, row | {"run": run, "generation": generation})
            payload = {"generation": generation, "verdict": str(verdict), "reasons": list(reasons)}
            payload |= {"limits": limits_digest, "before": found[0]}
            self._witness(connection, "judged", run, payload, Covers().add("verdict", [kept]))
        return True

    def _run_row(self, session: Session) -> Row:
        return {
            "run": session.run,
            "study_uid": session.study_uid,
            "scanner": session.scanner,
            "phantom": session.phantom,
            "first_seen": self.now(),
        }

    def _verdict_row(self, verdict: Verdict | str, reasons: Sequence[str], limits_digest: str | None) -> Row:
        return {
            "verdict": str(verdict),
            "reasons": list(reasons),
            "limits_digest": limits_digest,
            "judged_at": self.now(),
        }


def _newest(connection: Connection, run: str) -> int:
    query = select(func.max(MeasurementRow.generation)).where(MeasurementRow.run == run)
    return int(connection.execute(query).scalar() or 0)


def _file_rows(
    session: Session, duplicates: Sequence[FileRecord], known: Container[str], generation: int
) -> list[dict[str, Any]]:
    """Rows for the files that the run does not have yet; of equal contents one is enough."""
    rows: dict[str, dict[str, Any]] = {}
    for role, files in (("used", session.files), ("duplicate", duplicates)):
        for file in files:
            if file.sha256 in known or file.sha256 in rows:
                continue
            rows[file.sha256] = {
                "run": session.run,
                "sha256": file.sha256,
                "generation": generation,
                "path": file.path,
                "size": file.size,
                "sop_instance_uid": file.sop_instance_uid,
                "role": role,
            }
    return list(rows.values())


def _payload(session: Session, row: Row, readings: Sequence[Row]) -> dict[str, Any]:
    """What an auditor reads of a measurement: who, when, how, and every value as it then was."""
    told = (
        *("generation", "reason", "method_fingerprint", "method_versions", "vialbook_version"),
        *("acquired", "celsius", "files", "files_digest", "verdict"),
    )
    return {name: row[name] for name in told} | {
        "scanner": session.scanner,
        "phantom": session.phantom,
        "readings": [[r["scan"], r["vial"], r["state"], r["value_ms"], r["u_ms"]] for r in readings],
    }
