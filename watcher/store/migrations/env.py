"""Run by alembic with a connection handed in by ``watcher.store.engine``."""

from __future__ import annotations

from alembic import context

context.configure(connection=context.config.attributes["connection"], render_as_batch=True)
context.run_migrations()
