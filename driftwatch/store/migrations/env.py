"""Run by Alembic: migrates over the connection and inside the transaction that the caller holds."""

from __future__ import annotations

from alembic import context

from driftwatch.store.tables import METADATA, VERSION_TABLE

context.configure(
    connection=context.config.attributes["connection"],
    target_metadata=METADATA,
    version_table=VERSION_TABLE,
    transactional_ddl=True,
)
context.run_migrations()
