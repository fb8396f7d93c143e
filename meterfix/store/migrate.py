"""Bringing a database to this version's tables."""

from __future__ import annotations

from typing import Any

from sqlalchemy import Connection, inspect, text

from meterfix.errors import LedgerError

LATEST_REVISION = "0001"
"""The newest revision in `migrations/versions`."""


def database_revision(connection: Connection) -> str | None:
    """Return the revision that the database is at; None if it has no ledger."""
    if not inspect(connection).has_table("alembic_version"):
        return None
    found = connection.execute(text("SELECT version_num FROM alembic_version")).scalar()
    return None if found is None else str(found)


def migration_config(**attributes: Any) -> Any:
    """Return Alembic's configuration for the migrations inside this package."""
    # imported here because a command that finds its database up to date never needs it
    from alembic.config import Config  # noqa: PLC0415

    config = Config(attributes=attributes)
    config.set_main_option("script_location", "meterfix.store:migrations")
    config.set_main_option("path_separator", "os")
    return config


def upgrade(connection: Connection) -> None:
    """Bring the database to the latest revision, inside the caller's transaction.

    Raises
    ------
    LedgerError
        If the database was made by a newer meterfix.
    """
    from alembic import command  # noqa: PLC0415
    from alembic.script import ScriptDirectory  # noqa: PLC0415

    config = migration_config(connection=connection)
    revision = database_revision(connection)
    known = {script.revision for script in ScriptDirectory.from_config(config).walk_revisions()}
    if revision is not None and revision not in known:
        raise LedgerError(
            f"the database is at revision {revision}, which this version of meterfix does not "
            f"know (it knows up to {LATEST_REVISION}); use the version that made it, or a newer one"
        )
    command.upgrade(config, "head")
