"""Alembic's entry: it runs on the connection, and inside the transaction, that `qa.store.database` opened."""

from alembic import context

context.configure(connection=context.config.attributes["connection"], transactional_ddl=False)
context.run_migrations()
