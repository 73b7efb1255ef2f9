"""Run by Alembic: applies the revisions on the connection, and in the transaction, that the caller holds."""

from __future__ import annotations

from alembic import context

context.configure(connection=context.config.attributes["connection"], transactional_ddl=True)
context.run_migrations()
