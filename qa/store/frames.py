"""Reading back: tidy frames for trend, compare and report; measurements and evidence for the run page."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import date, datetime
from typing import TYPE_CHECKING, Any, Literal

from sqlalchemy import Connection, Select, Text, and_, exists, select, type_coerce

from qa.errors import StoreError
from qa.reading import Curve, Measurement, Picture
from qa.store.desk import Desk, as_instant
from qa.store.models import EvidenceRow, MeasurementRow, ReadingRow, RunRow
from qa.store.rows import to_evidence, to_measurement

if TYPE_CHECKING:
    from pandas import DataFrame

Which = Literal["newest", "all"] | int
_M, _R = MeasurementRow.__table__.c, ReadingRow.__table__.c
_RUN = RunRow.__table__.c

_HEAD = (_M.run, _M.generation, _RUN.scanner, _RUN.phantom, _M.acquired, _M.celsius, _M.software, _M.coil, _M.run_void)
_VALUES = (
    *(_R.vial, _R.quantity, _R.scan, _R.value_ms, _R.u_ms, _R.value_at_reference_ms, _R.u_at_reference_ms),
    *(_R.reference_ms, _R.u_reference_ms, _R.deviation_percent, _R.u_deviation_percent, _R.state),
    *(_R.method, _R.method_version, _R.voxels, _R.excluded_voxels),
    *(_R.u_noise_ms, _R.u_model_ms, _R.u_region_ms, _R.u_temperature_ms),
)
READING_COLUMNS = (
    *("run", "generation", "scanner", "phantom", "vial", "quantity", "scan", "acquired", "value_ms", "u_ms"),
    *("value_at_reference_ms", "u_at_reference_ms", "reference_ms", "u_reference_ms", "deviation_percent"),
    *("u_deviation_percent", "state", "notes", "method", "method_version", "voxels", "celsius", "software", "coil"),
    *("run_void", "excluded_voxels", "u_noise_ms", "u_model_ms", "u_region_ms", "u_temperature_ms"),
)
_OF_RUN = (
    *(_M.run, _M.generation, _RUN.scanner, _RUN.phantom, _M.acquired, _M.celsius, _M.u_celsius, _M.celsius_source),
    *(_M.verdict, _M.reasons, _M.limits_digest, _M.judged_at, _M.centre_x_mm, _M.centre_y_mm, _M.centre_z_mm),
    *(_M.centre_row, _M.centre_column, _M.rotation_deg, _M.flipped, _M.scale, _M.residual_mm, _M.confidence),
    *(_M.seen, _M.missing, _M.software, _M.coil, _M.field_t, _M.remarks, _M.shared, _M.run_void, _M.measured_at),
    *(_M.vialbook_version, _M.files, _M.files_digest, _M.reason, _M.method_fingerprint, _M.method_versions),
    *(_RUN.study_uid, _M.facts),
)


class Frames(Desk):
    """The verbs that give back what was recorded."""

    def readings(
        self,
        *,
        run: str | None = None,
        scanner: str | None = None,
        phantom: str | None = None,
        as_of: datetime | date | None = None,
        since: datetime | date | None = None,
        generation: Which = "newest",
    ) -> DataFrame:
        """One row per reading, ordered by acquisition, run, generation and the plate's order within each scan.

        Parameters
        ----------
        run, scanner, phantom : only those
        as_of : the book as it was then: only what had been measured by that time (a date: by its end, UTC)
        since : only runs acquired at that time or later
        generation : "newest" of each run, "all", or that number where a run has it

        Returns
        -------
        DataFrame
            run, generation, scanner, phantom, vial, quantity, scan, acquired (datetime64[ns, UTC]), values and
            standard uncertainties (k = 1, ms; NaN where absent), deviations (percent), state, notes (joined by "; "),
            method, method_version, voxels, celsius, software, coil, run_void, and the parts of the budget (u_…_ms).
        """
        import numpy as np
        import pandas as pd

        from qa.store.tidy import objects, series

        chosen = _chosen(run, scanner, phantom, as_of, since, generation)
        runs = chosen.with_only_columns(*_HEAD).order_by(_M.acquired, _M.run, _M.generation)
        of_measurement = and_(_R.run == _M.run, _R.generation == _M.generation)
        notes = type_coerce(_R.notes, Text)  # as text: most rows have the same few
        rows = chosen.join(ReadingRow.__table__, of_measurement).with_only_columns(
            _R.run, _R.generation, _R.position, notes, *_VALUES
        )
        with self._read() as connection:
            heads, body = connection.execute(runs).all(), connection.execute(rows).all()
        index = {(head[0], head[1]): number for number, head in enumerate(heads)}
        owner = np.array([index[row[0], row[1]] for row in body], dtype=np.int64)
        order = np.lexsort(([row[2] for row in body], owner)) if body else owner
        owner = owner[order]
        data: dict[str, Any] = {}
        for column, values in zip(_HEAD, _turned(heads, len(_HEAD)), strict=True):
            data[column.key] = series(column.type, values)[owner]
        turned = _turned(body, 4 + len(_VALUES))
        for column, values in zip(_VALUES, turned[4:], strict=True):
            data[column.key] = series(column.type, values)[order]
        data["notes"] = objects(_joined(turned[3]))[order]
        return pd.DataFrame(data)[list(READING_COLUMNS)]

    def runs(
        self,
        *,
        run: str | None = None,
        scanner: str | None = None,
        phantom: str | None = None,
        as_of: datetime | date | None = None,
        since: datetime | date | None = None,
        generation: Which = "newest",
    ) -> DataFrame:
        """One row per run (or per measurement, with ``generation="all"``), ordered by acquisition.

        Returns
        -------
        DataFrame
            run, generation, scanner, phantom, acquired, celsius, celsius_source, verdict (None until judged), reasons,
            the placement (centre_x_mm … confidence; NaN where the plate was not located), software, coil, field_t,
            remarks (list of dict), shared (dict), files (how many of the originals were used), measured_at,
            vialbook_version, and what else is recorded of a measurement. `run_void`: a void remark on the whole run.
            Verdicts are those of now, also with `as_of`: the ledger tells how they came about.
        """
        from qa.store.tidy import frame

        query = _chosen(run, scanner, phantom, as_of, since, generation).with_only_columns(*_OF_RUN)
        with self._read() as connection:
            return frame(_OF_RUN, connection.execute(query.order_by(_M.acquired, _M.run, _M.generation)).all())

    def measurement(self, run: str, generation: int | None = None) -> Measurement:
        """A measurement as it was recorded; the newest generation if none is named.

        Raises
        ------
        StoreError
            If there is no such run or generation.
        """
        with self._read() as connection:
            number = _generation(connection, run, generation, self._where)
            here = (MeasurementRow.run == run, MeasurementRow.generation == number)
            row = connection.execute(select(MeasurementRow.__table__).where(*here)).mappings().one()
            readings = _rows_of(connection, ReadingRow, run, number)
            evidence = _rows_of(connection, EvidenceRow, run, number)
        return to_measurement(row, readings, evidence)

    def evidence(self, run: str, generation: int | None = None) -> tuple[tuple[Curve, ...], tuple[Picture, ...]]:
        """The curves and pictures of a measurement; the newest generation if none is named.

        Raises
        ------
        StoreError
            If there is no such run or generation.
        """
        with self._read() as connection:
            number = _generation(connection, run, generation, self._where)
            return to_evidence(_rows_of(connection, EvidenceRow, run, number))


def _chosen(
    run: str | None,
    scanner: str | None,
    phantom: str | None,
    as_of: datetime | date | None,
    since: datetime | date | None,
    generation: Which,
) -> Select[Any]:
    """Measurements joined with their runs, narrowed down."""
    query = select(_M.run).join(RunRow.__table__, _RUN.run == _M.run)
    if run is not None:
        query = query.where(_M.run == run)
    if scanner is not None:
        query = query.where(_RUN.scanner == scanner)
    if phantom is not None:
        query = query.where(_RUN.phantom == phantom)
    if since is not None:
        query = query.where(_M.acquired >= as_instant(since))
    later = MeasurementRow.__table__.alias("later")
    is_later = and_(later.c.run == _M.run, later.c.generation > _M.generation)
    if as_of is not None:
        then = as_instant(as_of, end=True)
        query = query.where(_M.measured_at <= then)
        is_later = and_(is_later, later.c.measured_at <= then)
    if isinstance(generation, int):
        return query.where(_M.generation == generation)
    if generation == "newest":  # asked run by run: costs nothing for the runs that are not asked for
        query = query.where(~exists(select(later.c.run).where(is_later).correlate(MeasurementRow.__table__)))
    return query


def _generation(connection: Connection, run: str, generation: int | None, where: str) -> int:
    query = select(_M.generation).where(_M.run == run).order_by(_M.generation.desc())
    known = list(connection.execute(query).scalars())
    if not known:
        raise StoreError(f"there is no run {run}", where)
    if generation is not None and generation not in known:
        raise StoreError(f"run {run} has no generation {generation}: it has {known[-1]} to {known[0]}", where)
    return known[0] if generation is None else generation


def _rows_of(
    connection: Connection, table: type[ReadingRow] | type[EvidenceRow], run: str, generation: int
) -> Sequence[Any]:
    query = select(table.__table__).where(table.run == run, table.generation == generation)
    return connection.execute(query).mappings().all()


def _turned(rows: Sequence[Any], width: int) -> list[tuple[Any, ...]]:
    """Columns of rows; `width` empty ones if there are none."""
    return list(zip(*rows, strict=True)) or [()] * width


def _joined(texts: Sequence[str]) -> list[str]:
    """Stored lists of notes as one text each."""
    import json

    known = {text: "; ".join(json.loads(text)) for text in set(texts)}
    return [known[text] for text in texts]
