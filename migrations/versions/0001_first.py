"""The first tables: runs, measurements, readings, evidence; held files, limits, log, findings, rulings; the ledger.

Column types are spelt out here and not taken from the models, which will move on.
"""

from __future__ import annotations

import sqlalchemy as sa
from alembic import op

revision = "0001_first"
down_revision = None
branch_labels = None
depends_on = None


def upgrade() -> None:
    op.create_table(
        "finding",
        sa.Column("finding", sa.Text(), nullable=False),
        sa.Column("content", sa.Text(), nullable=False),
        sa.Column("first_raised", sa.DateTime(), nullable=False),
        sa.Column("updated", sa.DateTime(), nullable=False),
        sa.Column("state", sa.String(length=6), nullable=False),
        sa.CheckConstraint("state IN ('open', 'ruled', 'faded')", name=op.f("ck_finding_state")),
        sa.PrimaryKeyConstraint("finding", name=op.f("pk_finding")),
    )
    op.create_table(
        "held",
        sa.Column("held", sa.String(length=32), nullable=False),
        sa.Column("path", sa.Text(), nullable=False),
        sa.Column("sha256", sa.String(length=64)),
        sa.Column("code", sa.Text(), nullable=False),
        sa.Column("reason", sa.Text(), nullable=False),
        sa.Column("first_seen", sa.DateTime(), nullable=False),
        sa.Column("last_seen", sa.DateTime(), nullable=False),
        sa.Column("resolved", sa.DateTime()),
        sa.PrimaryKeyConstraint("held", name=op.f("pk_held")),
    )
    op.create_index("ix_held_sha256", "held", ["sha256"])

    op.create_table(
        "ledger",
        sa.Column("seq", sa.Integer(), autoincrement=False, nullable=False),
        sa.Column("at", sa.DateTime(), nullable=False),
        sa.Column("kind", sa.Text(), nullable=False),
        sa.Column("subject", sa.Text(), nullable=False),
        sa.Column("payload", sa.Text(), nullable=False),
        sa.Column("covers", sa.Text(), nullable=False),
        sa.Column("previous", sa.String(length=64), nullable=False),
        sa.Column("hash", sa.String(length=64), nullable=False),
        sa.PrimaryKeyConstraint("seq", name=op.f("pk_ledger")),
    )
    op.create_table(
        "ledger_head",
        sa.Column("id", sa.Integer(), autoincrement=False, nullable=False),
        sa.Column("entries", sa.Integer(), nullable=False),
        sa.Column("hash", sa.String(length=64), nullable=False),
        sa.CheckConstraint("id = 1", name=op.f("ck_ledger_head_single")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_ledger_head")),
    )
    op.create_table(
        "limits",
        sa.Column("digest", sa.String(length=64), nullable=False),
        sa.Column("since", sa.Date(), nullable=False),
        sa.Column("block", sa.Text(), nullable=False),
        sa.Column("first_seen", sa.DateTime(), nullable=False),
        sa.Column("withdrawn", sa.DateTime()),
        sa.PrimaryKeyConstraint("digest", name=op.f("pk_limits")),
    )
    op.create_table(
        "limits_set",
        sa.Column("digest", sa.String(length=64), nullable=False),
        sa.Column("blocks", sa.Text(), nullable=False),
        sa.Column("first_seen", sa.DateTime(), nullable=False),
        sa.PrimaryKeyConstraint("digest", name=op.f("pk_limits_set")),
    )
    op.create_table(
        "log_entry",
        sa.Column("entry", sa.Integer(), nullable=False),
        sa.Column("at", sa.DateTime(), nullable=False),
        sa.Column("scanner", sa.Text()),
        sa.Column("phantom", sa.Text()),
        sa.Column("kind", sa.Text(), nullable=False),
        sa.Column("text", sa.Text(), nullable=False),
        sa.Column("celsius", sa.Double()),
        sa.Column("restart_baseline", sa.Boolean(), nullable=False),
        sa.Column("source", sa.String(length=6), nullable=False),
        sa.Column("who", sa.Text(), nullable=False),
        sa.Column("entered_at", sa.DateTime(), nullable=False),
        sa.CheckConstraint("source IN ('person', 'dicom')", name=op.f("ck_log_entry_source")),
        sa.PrimaryKeyConstraint("entry", name=op.f("pk_log_entry")),
    )
    op.create_index("ix_log_entry_at", "log_entry", ["at"])
    op.create_index("ix_log_entry_scanner", "log_entry", ["scanner"])

    op.create_table(
        "run",
        sa.Column("run", sa.String(length=64), nullable=False),
        sa.Column("study_uid", sa.Text(), nullable=False),
        sa.Column("scanner", sa.Text(), nullable=False),
        sa.Column("phantom", sa.Text(), nullable=False),
        sa.Column("first_seen", sa.DateTime(), nullable=False),
        sa.PrimaryKeyConstraint("run", name=op.f("pk_run")),
    )
    op.create_index("ix_run_scanner_phantom", "run", ["scanner", "phantom"])

    op.create_table(
        "file",
        sa.Column("run", sa.String(length=64), nullable=False),
        sa.Column("sha256", sa.String(length=64), nullable=False),
        sa.Column("generation", sa.Integer(), nullable=False),
        sa.Column("path", sa.Text(), nullable=False),
        sa.Column("size", sa.BigInteger(), nullable=False),
        sa.Column("sop_instance_uid", sa.Text(), nullable=False),
        sa.Column("role", sa.String(length=9), nullable=False),
        sa.CheckConstraint("role IN ('used', 'duplicate')", name=op.f("ck_file_role")),
        sa.ForeignKeyConstraint(["run"], ["run.run"], name=op.f("fk_file_run_run")),
        sa.PrimaryKeyConstraint("run", "sha256", name=op.f("pk_file")),
    )
    op.create_index("ix_file_sha256", "file", ["sha256"])

    op.create_table(
        "measurement",
        sa.Column("run", sa.String(length=64), nullable=False),
        sa.Column("generation", sa.Integer(), autoincrement=False, nullable=False),
        sa.Column("measured_at", sa.DateTime(), nullable=False),
        sa.Column("reason", sa.Text(), nullable=False),
        sa.Column("method_fingerprint", sa.Text(), nullable=False),
        sa.Column("method_versions", sa.Text(), nullable=False),
        sa.Column("vialbook_version", sa.Text(), nullable=False),
        sa.Column("acquired", sa.DateTime(), nullable=False),
        sa.Column("field_t", sa.Double()),
        sa.Column("facts", sa.Text(), nullable=False),
        sa.Column("files", sa.Integer(), nullable=False),
        sa.Column("files_digest", sa.String(length=64), nullable=False),
        sa.Column("celsius", sa.Double()),
        sa.Column("u_celsius", sa.Double()),
        sa.Column("celsius_source", sa.Text(), nullable=False),
        sa.Column("software", sa.Text(), nullable=False),
        sa.Column("coil", sa.Text(), nullable=False),
        sa.Column("shared", sa.Text(), nullable=False),
        sa.Column("remarks", sa.Text(), nullable=False),
        sa.Column("run_void", sa.Boolean(), nullable=False),
        sa.Column("centre_row", sa.Double()),
        sa.Column("centre_column", sa.Double()),
        sa.Column("rotation_deg", sa.Double()),
        sa.Column("flipped", sa.Boolean()),
        sa.Column("scale", sa.Double()),
        sa.Column("residual_mm", sa.Double()),
        sa.Column("confidence", sa.Double()),
        sa.Column("seen", sa.Text()),
        sa.Column("missing", sa.Text()),
        sa.Column("centre_x_mm", sa.Double()),
        sa.Column("centre_y_mm", sa.Double()),
        sa.Column("centre_z_mm", sa.Double()),
        sa.Column("verdict", sa.String(length=6)),
        sa.Column("reasons", sa.Text()),
        sa.Column("limits_digest", sa.String(length=64)),
        sa.Column("judged_at", sa.DateTime()),
        sa.CheckConstraint("verdict IN ('steady', 'watch', 'act', 'void')", name=op.f("ck_measurement_verdict")),
        sa.CheckConstraint("generation >= 1", name=op.f("ck_measurement_generation_positive")),
        sa.ForeignKeyConstraint(["run"], ["run.run"], name=op.f("fk_measurement_run_run")),
        sa.PrimaryKeyConstraint("run", "generation", name=op.f("pk_measurement")),
    )
    op.create_index("ix_measurement_acquired", "measurement", ["acquired"])
    op.create_index("ix_measurement_measured_at", "measurement", ["measured_at"])

    op.create_table(
        "ruling",
        sa.Column("ruling", sa.Integer(), nullable=False),
        sa.Column("finding", sa.Text(), nullable=False),
        sa.Column("who", sa.Text(), nullable=False),
        sa.Column("decision", sa.Text(), nullable=False),
        sa.Column("reason", sa.Text(), nullable=False),
        sa.Column("at", sa.DateTime(), nullable=False),
        sa.Column("content", sa.Text(), nullable=False),
        sa.ForeignKeyConstraint(["finding"], ["finding.finding"], name=op.f("fk_ruling_finding_finding")),
        sa.PrimaryKeyConstraint("ruling", name=op.f("pk_ruling")),
    )
    op.create_index("ix_ruling_finding", "ruling", ["finding"])

    op.create_table(
        "evidence",
        sa.Column("run", sa.String(length=64), nullable=False),
        sa.Column("generation", sa.Integer(), autoincrement=False, nullable=False),
        sa.Column("position", sa.Integer(), autoincrement=False, nullable=False),
        sa.Column("kind", sa.String(length=7), nullable=False),
        sa.Column("about", sa.Text(), nullable=False),
        sa.Column("content", sa.LargeBinary(), nullable=False),
        sa.CheckConstraint("kind IN ('curves', 'picture')", name=op.f("ck_evidence_kind")),
        sa.ForeignKeyConstraint(
            ["run", "generation"],
            ["measurement.run", "measurement.generation"],
            name=op.f("fk_evidence_run_generation_measurement"),
        ),
        sa.PrimaryKeyConstraint("run", "generation", "position", name=op.f("pk_evidence")),
    )
    op.create_table(
        "reading",
        sa.Column("run", sa.String(length=64), nullable=False),
        sa.Column("generation", sa.Integer(), autoincrement=False, nullable=False),
        sa.Column("scan", sa.Text(), nullable=False),
        sa.Column("vial", sa.Text(), nullable=False),
        sa.Column("position", sa.Integer(), nullable=False),
        sa.Column("quantity", sa.String(length=2), nullable=False),
        sa.Column("method", sa.Text(), nullable=False),
        sa.Column("method_version", sa.Text(), nullable=False),
        sa.Column("state", sa.Text(), nullable=False),
        sa.Column("notes", sa.Text(), nullable=False),
        sa.Column("voxels", sa.Integer(), nullable=False),
        sa.Column("excluded_voxels", sa.Integer(), nullable=False),
        sa.Column("value_ms", sa.Double()),
        sa.Column("u_ms", sa.Double()),
        sa.Column("u_noise_ms", sa.Double()),
        sa.Column("u_model_ms", sa.Double()),
        sa.Column("u_region_ms", sa.Double()),
        sa.Column("u_temperature_ms", sa.Double()),
        sa.Column("value_at_reference_ms", sa.Double()),
        sa.Column("u_at_reference_ms", sa.Double()),
        sa.Column("reference_ms", sa.Double()),
        sa.Column("u_reference_ms", sa.Double()),
        sa.Column("deviation_percent", sa.Double()),
        sa.Column("u_deviation_percent", sa.Double()),
        sa.CheckConstraint("quantity IN ('T1', 'T2')", name=op.f("ck_reading_quantity")),
        sa.CheckConstraint("u_ms >= 0", name=op.f("ck_reading_u_not_negative")),
        sa.ForeignKeyConstraint(
            ["run", "generation"],
            ["measurement.run", "measurement.generation"],
            name=op.f("fk_reading_run_generation_measurement"),
        ),
        sa.PrimaryKeyConstraint("run", "generation", "scan", "vial", name=op.f("pk_reading")),
    )
    head = sa.table("ledger_head", sa.column("id"), sa.column("entries"), sa.column("hash"))
    op.execute(head.insert().values(id=1, entries=0, hash="0" * 64))
