"""The triggers that keep tables of record insert-only, for each database."""

from __future__ import annotations

_POSTGRESQL_FUNCTION = """\
CREATE FUNCTION refuse_change() RETURNS trigger LANGUAGE plpgsql AS $$
BEGIN
    RAISE EXCEPTION 'rows of % are never changed', TG_TABLE_NAME;
END
$$"""


def trigger_statements(dialect: str, tables: tuple[str, ...]) -> list[str]:
    """Return the statements that make the tables insert-only.

    On SQLite they also stop `INSERT OR REPLACE`, as long as `recursive_triggers` is on.

    Parameters
    ----------
    dialect : {'sqlite', 'postgresql'}
    tables : tuple of str

    Raises
    ------
    ValueError
        For any other database.
    """
    if dialect == "sqlite":
        return list(sqlite_triggers(tables).values())
    if dialect == "postgresql":
        return [_POSTGRESQL_FUNCTION, *postgresql_triggers(tables).values()]
    raise ValueError(f"no triggers are known for {dialect}; sqlite and postgresql are supported")


def sqlite_triggers(tables: tuple[str, ...]) -> dict[str, str]:
    """Return trigger name -> statement, as SQLite keeps it in its schema."""
    return {
        f"{table}_refuses_{event}": (
            f'CREATE TRIGGER {table}_refuses_{event} BEFORE {event.upper()} ON "{table}" '
            f"BEGIN SELECT RAISE(ABORT, 'rows of {table} are never changed'); END"
        )
        for table in tables
        for event in ("update", "delete")
    }


def postgresql_triggers(tables: tuple[str, ...]) -> dict[str, str]:
    """Return trigger name -> statement for PostgreSQL."""
    found: dict[str, str] = {}
    for table in tables:
        for name, events, each in (
            ("change", "UPDATE OR DELETE", "ROW"),
            ("truncate", "TRUNCATE", "STATEMENT"),
        ):
            found[f"{table}_refuses_{name}"] = (
                f'CREATE TRIGGER {table}_refuses_{name} BEFORE {events} ON "{table}" '
                f"FOR EACH {each} EXECUTE FUNCTION refuse_change()"
            )
    return found
