"""Run the migrations on the connection that `monitor.store.migrate` has opened and locked."""

from __future__ import annotations

from alembic import context

from monitor.store.schema import VERSION_TABLE

context.configure(
    connection=context.config.attributes["connection"],
    version_table=VERSION_TABLE,
    transaction_per_migration=False,
)
# The caller holds the transaction, and with it the lock: all revisions or none.
context.run_migrations()
