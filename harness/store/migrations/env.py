"""Runs migrations on a connection that the caller opened, inside the caller's transaction."""

from __future__ import annotations

from alembic import context

connection = context.config.attributes["connection"]
context.configure(
    connection=connection,
    version_table="bitassay_revision",
    render_as_batch=True,
    transactional_ddl=True,
)
with context.begin_transaction():
    context.run_migrations()
