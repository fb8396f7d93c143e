"""The triggers that keep tables of record insert-only, for each database."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from sqlalchemy import Table, UniqueConstraint

_POSTGRESQL_FUNCTION = """\
CREATE FUNCTION refuse_change() RETURNS trigger LANGUAGE plpgsql AS $$
BEGIN
    RAISE EXCEPTION 'rows of % are never changed', TG_TABLE_NAME;
END
$$"""


Keys = Mapping[str, Sequence[Sequence[str]]]
"""Table -> the columns of its primary key, then those of each other unique key."""


def trigger_statements(dialect: str, tables: Keys) -> list[str]:
    """Return the statements that make the tables insert-only.

    Parameters
    ----------
    dialect : {'sqlite', 'postgresql'}
    tables : mapping
        Table to its keys. On SQLite a trigger refuses an insert under a key that exists, because
        `INSERT OR REPLACE` removes rows without asking the trigger that refuses deletions unless
        the connection has `recursive_triggers` on. On PostgreSQL the keys themselves refuse it.

    Raises
    ------
    ValueError
        For any other database.
    """
    if dialect == "sqlite":
        return list(sqlite_triggers(tables).values())
    if dialect == "postgresql":
        return [_POSTGRESQL_FUNCTION, *postgresql_triggers(tuple(tables)).values()]
    raise ValueError(f"no triggers are known for {dialect}; sqlite and postgresql are supported")


def sqlite_triggers(tables: Keys) -> dict[str, str]:
    """Return trigger name -> statement, as SQLite keeps it in its schema."""
    changes = {
        f"{table}_refuses_{event}": (
            f'CREATE TRIGGER {table}_refuses_{event} BEFORE {event.upper()} ON "{table}" '
            f"BEGIN SELECT RAISE(ABORT, 'rows of {table} are never changed'); END"
        )
        for table in tables
        for event in ("update", "delete")
    }
    return changes | {
        f"{table}_refuses_replace": _replace(table, tables[table]) for table in tables
    }


def _replace(table: str, keys: Sequence[Sequence[str]]) -> str:
    """Return the trigger against an insert under a key, or a row number, that exists.

    A row number that the insert does not name is -1 here, which no row has.
    """
    # the names are this package's own, never a user's
    same = [
        " AND ".join(f"{column} = NEW.{column}" for column in columns)
        for columns in (*keys, ("rowid",))
    ]
    found = " OR ".join(f'EXISTS (SELECT 1 FROM "{table}" WHERE {key})' for key in same)  # noqa: S608
    return (
        f'CREATE TRIGGER {table}_refuses_replace BEFORE INSERT ON "{table}" WHEN {found} '
        f"BEGIN SELECT RAISE(ABORT, 'rows of {table} are never changed'); END"
    )


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


def unique_keys(table: Table) -> list[tuple[str, ...]]:
    """Return the columns of a table's primary key, then those of each other unique key."""
    others = [key for key in table.constraints if isinstance(key, UniqueConstraint)]
    first, *more = [
        tuple(column.name for column in key.columns) for key in (table.primary_key, *others)
    ]
    return [first, *sorted(more)]
