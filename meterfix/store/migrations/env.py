"""Alembic's entry: runs on the connection that the ledger hands over, in its transaction."""

from __future__ import annotations

from alembic import context

from meterfix.store.tables import metadata

if context.is_offline_mode():
    context.configure(
        url=context.config.get_main_option("sqlalchemy.url"),
        dialect_name=context.config.attributes.get("dialect"),
        target_metadata=metadata,
        literal_binds=True,
    )
else:
    context.configure(
        connection=context.config.attributes["connection"],
        target_metadata=metadata,
        transactional_ddl=True,
    )
with context.begin_transaction():
    context.run_migrations()
