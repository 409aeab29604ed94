"""Alembic's entry: runs the migrations on the connection it is given."""

from __future__ import annotations

from alembic import context

from spc.records.retention_tables import metadata  # of all tables, these included

connection = context.config.attributes["connection"]
context.configure(
    connection=connection,
    target_metadata=metadata,
    render_as_batch=True,
    transaction_per_migration=False,
)
context.run_migrations()
