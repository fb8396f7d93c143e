from __future__ import annotations

import io
import sqlite3

import pytest
from alembic import command
from alembic.autogenerate import compare_metadata
from alembic.migration import MigrationContext
from alembic.script import ScriptDirectory
from sqlalchemy import create_engine, inspect
from sqlalchemy.dialects import postgresql
from sqlalchemy.schema import CreateIndex, CreateTable

from meterfix.errors import LedgerError
from meterfix.store.migrate import LATEST_REVISION, migration_config
from meterfix.store.proof import check_store
from meterfix.store.tables import INSERT_ONLY_TABLES, OUTSIDE_TABLES, RECORD_TABLES, metadata


def test_an_empty_database_gets_every_table(ledger):
    """The migrations alone make every table, column, key and check that the tables declare."""
    with ledger.engine.connect() as connection:
        found = inspect(connection)
        assert set(found.get_table_names()) == {*metadata.tables, "alembic_version"}
        assert compare_metadata(MigrationContext.configure(connection), metadata) == []
        for name, table in metadata.tables.items():
            assert found.get_pk_constraint(name)["constrained_columns"] == [
                column.name for column in table.primary_key.columns
            ]
            stated = {c["name"] for c in found.get_check_constraints(name)}
            declared = {
                str(constraint.name)
                for constraint in table.constraints
                if constraint.__visit_name__.endswith("check_constraint")
            }
            assert stated == declared, name
    assert check_store(ledger) == []


def test_migrations_and_metadata_make_the_same_sqlite_tables(ledger):
    """Table by table, the migrated schema is word for word the one that the metadata makes."""
    fresh = create_engine("sqlite://")
    metadata.create_all(fresh)

    def schema(engine):
        with engine.connect() as connection:
            rows = connection.exec_driver_sql(
                "SELECT name, sql FROM sqlite_schema WHERE type IN ('table', 'index') AND "
                "sql IS NOT NULL AND name != 'alembic_version'"
            )
            return {
                name: sorted(part.strip(" ,") for part in sql.split("\n")) for name, sql in rows
            }

    assert schema(ledger.engine) == schema(fresh)
    fresh.dispose()


def test_every_table_has_its_kind():
    """Each table is of record, the chain, or outside; key columns are never NULL."""
    assert {*RECORD_TABLES, *OUTSIDE_TABLES, "audit"} == set(metadata.tables)
    assert set(INSERT_ONLY_TABLES) == {*RECORD_TABLES, "audit"}
    for table in metadata.tables.values():
        assert list(table.primary_key.columns)
        assert not any(column.nullable for column in table.primary_key.columns)
    for name in RECORD_TABLES:
        assert not metadata.tables[name].c.pass_sequence.nullable


def test_the_latest_revision_is_the_last_script():
    """The revision that a ledger is checked against is the newest in the package."""
    assert ScriptDirectory.from_config(migration_config()).get_heads() == [LATEST_REVISION]


def test_tables_compile_for_postgresql():
    """Every table and index compiles for PostgreSQL: 64-bit integers, text compared bytewise."""
    dialect = postgresql.dialect()
    for table in metadata.sorted_tables:
        text = str(CreateTable(table).compile(dialect=dialect))
        assert "STRICT" not in text
        assert "SERIAL" not in text
        assert text.count(' TEXT COLLATE "C"') == text.count(" TEXT")
        for index in table.indexes:
            assert "CREATE INDEX" in str(CreateIndex(index).compile(dialect=dialect))


def test_migrations_write_sql_for_postgresql():
    """The migrations themselves write SQL for PostgreSQL, triggers included."""
    written = io.StringIO()
    config = migration_config(dialect="postgresql")
    config.output_buffer = written
    command.upgrade(config, "head", sql=True)
    text = written.getvalue()
    assert "LANGUAGE plpgsql" in text
    for table in metadata.tables:
        assert f"CREATE TABLE {table} " in text or f'CREATE TABLE "{table}" ' in text
    for table in INSERT_ONLY_TABLES:
        assert f'BEFORE UPDATE OR DELETE ON "{table}" FOR EACH ROW' in text
        assert f'BEFORE TRUNCATE ON "{table}"' in text


def test_a_newer_database_is_refused(tmp_path, scenario):
    """A database that a later version made is left alone."""
    scenario.open_ledger(tmp_path).close()
    with sqlite3.connect(tmp_path / "site.sqlite") as database:
        database.execute("UPDATE alembic_version SET version_num = '9999'")
    database.close()
    with pytest.raises(LedgerError, match="revision 9999"):
        scenario.open_ledger(tmp_path)
    with pytest.raises(LedgerError, match="no ledger of this version"):
        scenario.open_ledger(tmp_path, read_only=True)
