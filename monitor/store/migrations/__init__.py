"""Alembic's migrations of the store, run by `monitor.store.migrate` and never by hand."""
