"""Alembic's entry: runs the revisions on the connection, and in the transaction, it is given."""

from alembic import context

from audit.store.tables import SiteRow

context.configure(
    connection=context.config.attributes["connection"],
    target_metadata=SiteRow.metadata,
    render_as_batch=True,
    transactional_ddl=True,
)
with context.begin_transaction():
    context.run_migrations()
