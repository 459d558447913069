"""The Alembic environment: the engine is handed over by the catalogue, never named here."""

from alembic import context

from pinlight.catalogue.tables import Base

context.configure(
    connection=context.config.attributes["connection"],
    target_metadata=Base.metadata,
    render_as_batch=True,
    compare_type=True,
)
with context.begin_transaction():
    context.run_migrations()
