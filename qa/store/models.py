"""The tables of a book, first half: what was measured. `qa.store.records` has what was noted, decided and witnessed.

Keys are natural (a run's id, its generation, the scan's name, the vial's label), so that rows mean the same in every
book. Rows are added, never overwritten; what may change (a verdict, a held file's fate) is witnessed in the ledger.
"""

from __future__ import annotations

from datetime import datetime
from typing import Any, ClassVar

from sqlalchemy import (
    BigInteger,
    CheckConstraint,
    Double,
    ForeignKey,
    ForeignKeyConstraint,
    Index,
    Integer,
    LargeBinary,
    MetaData,
    String,
)
from sqlalchemy.orm import DeclarativeBase, Mapped, mapped_column

from qa.store.columns import Json, Utc, Words

NAMES = {
    "ix": "ix_%(table_name)s_%(column_0_N_name)s",
    "uq": "uq_%(table_name)s_%(column_0_N_name)s",
    "ck": "ck_%(table_name)s_%(constraint_name)s",
    "fk": "fk_%(table_name)s_%(column_0_N_name)s_%(referred_table_name)s",
    "pk": "pk_%(table_name)s",
}


class Base(DeclarativeBase):
    """The root of all tables; every constraint gets a name, so that migrations can speak of it."""

    metadata = MetaData(naming_convention=NAMES)
    type_annotation_map: ClassVar = {
        str: Words(),
        float: Double(),
        datetime: Utc(),
        dict[str, Any]: Json(),
        list[Any]: Json(),
    }


class RunRow(Base):
    """One phantom session on one scanner."""

    __tablename__ = "run"

    run: Mapped[str] = mapped_column(String(64), primary_key=True)
    study_uid: Mapped[str]
    scanner: Mapped[str]
    phantom: Mapped[str]
    first_seen: Mapped[datetime]


class FileRow(Base):
    """One original file of a run, and the generation that first used it."""

    __tablename__ = "file"
    __table_args__ = (CheckConstraint("role IN ('used', 'duplicate')", name="role"),)

    run: Mapped[str] = mapped_column(String(64), ForeignKey("run.run"), primary_key=True)
    sha256: Mapped[str] = mapped_column(String(64), primary_key=True, index=True)
    generation: Mapped[int]
    path: Mapped[str]
    size: Mapped[int] = mapped_column(BigInteger)
    sop_instance_uid: Mapped[str]
    role: Mapped[str] = mapped_column(String(9))


class MeasurementRow(Base):
    """One pass of measuring a run: generation 1 at its first ingest, one more at each remeasuring."""

    __tablename__ = "measurement"
    __table_args__ = (
        CheckConstraint("generation >= 1", name="generation_positive"),
        CheckConstraint("verdict IN ('steady', 'watch', 'act', 'void')", name="verdict"),
    )

    run: Mapped[str] = mapped_column(String(64), ForeignKey("run.run"), primary_key=True)
    generation: Mapped[int] = mapped_column(Integer, primary_key=True, autoincrement=False)
    measured_at: Mapped[datetime] = mapped_column(index=True)
    reason: Mapped[str]
    method_fingerprint: Mapped[str]
    method_versions: Mapped[dict[str, Any]]
    vialbook_version: Mapped[str]

    acquired: Mapped[datetime] = mapped_column(index=True)
    field_t: Mapped[float | None]
    facts: Mapped[dict[str, Any]]
    files: Mapped[int]  # how many of the originals were used
    files_digest: Mapped[str] = mapped_column(String(64))  # over their hashes
    celsius: Mapped[float | None]
    u_celsius: Mapped[float | None]
    celsius_source: Mapped[str]
    software: Mapped[str]
    coil: Mapped[str]
    shared: Mapped[dict[str, Any]]
    remarks: Mapped[list[Any]]
    run_void: Mapped[bool]  # a void remark about the whole run

    centre_row: Mapped[float | None]  # the placement; all NULL where the plate was not located
    centre_column: Mapped[float | None]
    rotation_deg: Mapped[float | None]
    flipped: Mapped[bool | None]
    scale: Mapped[float | None]
    residual_mm: Mapped[float | None]
    confidence: Mapped[float | None]
    seen: Mapped[list[Any] | None]
    missing: Mapped[list[Any] | None]
    centre_x_mm: Mapped[float | None]
    centre_y_mm: Mapped[float | None]
    centre_z_mm: Mapped[float | None]

    verdict: Mapped[str | None] = mapped_column(String(6))  # NULL until judged
    reasons: Mapped[list[Any] | None]
    limits_digest: Mapped[str | None] = mapped_column(String(64))
    judged_at: Mapped[datetime | None]


class ReadingRow(Base):
    """One quantity in one vial from one scan, with the parts of its uncertainty budget (k = 1)."""

    __tablename__ = "reading"
    __table_args__ = (
        ForeignKeyConstraint(["run", "generation"], ["measurement.run", "measurement.generation"]),
        CheckConstraint("quantity IN ('T1', 'T2')", name="quantity"),
        CheckConstraint("u_ms >= 0", name="u_not_negative"),
    )

    run: Mapped[str] = mapped_column(String(64), primary_key=True)
    generation: Mapped[int] = mapped_column(Integer, primary_key=True, autoincrement=False)
    scan: Mapped[str] = mapped_column(primary_key=True)
    vial: Mapped[str] = mapped_column(primary_key=True)
    position: Mapped[int]  # order within the measurement
    quantity: Mapped[str] = mapped_column(String(2))
    method: Mapped[str]
    method_version: Mapped[str]
    state: Mapped[str]
    notes: Mapped[list[Any]]
    voxels: Mapped[int]
    excluded_voxels: Mapped[int]
    value_ms: Mapped[float | None]
    u_ms: Mapped[float | None]
    u_noise_ms: Mapped[float | None]
    u_model_ms: Mapped[float | None]
    u_region_ms: Mapped[float | None]
    u_temperature_ms: Mapped[float | None]
    value_at_reference_ms: Mapped[float | None]
    u_at_reference_ms: Mapped[float | None]
    reference_ms: Mapped[float | None]
    u_reference_ms: Mapped[float | None]
    deviation_percent: Mapped[float | None]
    u_deviation_percent: Mapped[float | None]


class EvidenceRow(Base):
    """What the run page shows: one row with all curves (compressed JSON), one row per picture (PNG)."""

    __tablename__ = "evidence"
    __table_args__ = (
        ForeignKeyConstraint(["run", "generation"], ["measurement.run", "measurement.generation"]),
        CheckConstraint("kind IN ('curves', 'picture')", name="kind"),
    )

    run: Mapped[str] = mapped_column(String(64), primary_key=True)
    generation: Mapped[int] = mapped_column(Integer, primary_key=True, autoincrement=False)
    position: Mapped[int] = mapped_column(Integer, primary_key=True, autoincrement=False)
    kind: Mapped[str] = mapped_column(String(7))
    about: Mapped[dict[str, Any]]
    content: Mapped[bytes] = mapped_column(LargeBinary)


Index("ix_run_scanner_phantom", RunRow.scanner, RunRow.phantom)
