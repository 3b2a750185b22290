"""Schema revisions of the store, run by ``audit.store.schema`` on SQLite and PostgreSQL."""
