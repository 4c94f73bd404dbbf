"""Run by alembic: use the connection that the program hands over."""

from alembic import context

from service.storage.tables import metadata

context.configure(connection=context.config.attributes["connection"], target_metadata=metadata)
with context.begin_transaction():
    context.run_migrations()
