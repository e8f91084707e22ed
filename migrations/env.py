"""Runs the migrations on the connection handed over by `tracker.store.schema`."""

from alembic import context

from tracker.store.models import Base

connection = context.config.attributes["connection"]
context.configure(
    connection=connection,
    target_metadata=Base.metadata,
    render_as_batch=True,
    transaction_per_migration=False,
)
context.run_migrations()
