"""Runs migrations on the connection that the service hands over."""

from alembic import context

from service.store.alert_tables import AlertRow

connection = context.config.attributes["connection"]
context.configure(
    connection=connection, target_metadata=AlertRow.metadata, transaction_per_migration=False
)
context.run_migrations()
