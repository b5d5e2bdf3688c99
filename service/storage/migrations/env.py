"""Run by alembic, within the transaction that `migrate.py` has opened."""

from alembic import context

from service.storage.tables import metadata

connection = context.config.attributes["connection"]
if connection is None:
    raise RuntimeError("migrations are run by service.storage.migrate")
context.configure(
    connection=connection,
    target_metadata=metadata,
    render_as_batch=True,
)
with context.begin_transaction():
    context.run_migrations()
