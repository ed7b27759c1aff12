"""Alembic's environment: runs the migrations on the connection it is handed."""

from __future__ import annotations

from alembic import context

from gainwright_service.store.tables import metadata

context.configure(
    connection=context.config.attributes["connection"],
    target_metadata=metadata,
    render_as_batch=True,
    compare_type=True,
)
with context.begin_transaction():
    context.run_migrations()
