"""Alembic's environment: one connection, handed over by `qa.store.migrating`; no configuration file, no URL."""

from __future__ import annotations

from alembic import context

attributes = context.config.attributes
context.configure(
    connection=attributes["connection"],
    target_metadata=attributes["metadata"],
    version_table=attributes["version_table"],
    render_as_batch=True,
    compare_type=True,
)
with context.begin_transaction():
    context.run_migrations()
