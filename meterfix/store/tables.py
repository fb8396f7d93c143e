"""The ledger's tables: what is stored, under which key, and what may change.

Tables of record only ever grow; triggers refuse anything else, and the audit row of a pass holds
a digest of every row that the pass inserted. Tables outside the chain can be replaced: each of
them can be made again from the tables of record and the archive, or matters only to the running
service. Times are integer UTC microseconds (`_us`); a gas day is its ISO date; quantities are SI
with the unit in the name. No key column may be empty.
"""

from __future__ import annotations

from sqlalchemy import (
    BigInteger,
    CheckConstraint,
    Column,
    Double,
    ForeignKey,
    ForeignKeyConstraint,
    Index,
    Integer,
    LargeBinary,
    MetaData,
    PrimaryKeyConstraint,
    Table,
    Text,
    UniqueConstraint,
)
from sqlalchemy.dialects.sqlite import REAL
from sqlalchemy.sql.schema import SchemaItem
from sqlalchemy.types import TypeEngine

metadata = MetaData(
    naming_convention={
        "pk": "pk_%(table_name)s",
        "uq": "uq_%(table_name)s_%(column_0_N_name)s",
        "ck": "ck_%(table_name)s_%(constraint_name)s",
        "fk": "fk_%(table_name)s_%(column_0_N_name)s",
        "ix": "ix_%(table_name)s_%(column_0_N_name)s",
    }
)

# STRICT tables of SQLite know INTEGER and REAL only; PostgreSQL must not fold text by a locale.
_INTEGER = BigInteger().with_variant(Integer(), "sqlite")
_REAL: TypeEngine[float] = Double().with_variant(REAL(), "sqlite")
_TEXT = Text().with_variant(Text(collation="C"), "postgresql")

_TOTAL_KINDS = "kind IN ('gas_day', 'month')"
_VERDICTS = "IN ('yes', 'no', 'cannot be judged')"


def _integer(name: str, *constraints: SchemaItem, default: int | None = None) -> Column[int]:
    return Column(
        name, _INTEGER, *constraints, nullable=False, autoincrement=False, default=default
    )


def _text(name: str, *constraints: SchemaItem, default: str | None = None) -> Column[str]:
    return Column(name, _TEXT, *constraints, nullable=False, default=default)


def _real(name: str) -> Column[float]:
    return Column(name, _REAL, nullable=False)


def _known_or_not(name: str) -> Column[float]:
    """Return a figure that may be unknown; the row says why in a text of its own."""
    return Column(name, _REAL, nullable=True)


def _blob(name: str, *, nullable: bool = False) -> Column[bytes]:
    return Column(name, LargeBinary(), nullable=nullable)


def _check(name: str, text: str) -> CheckConstraint:
    return CheckConstraint(text, name=name)


def _key(*columns: str) -> PrimaryKeyConstraint:
    return PrimaryKeyConstraint(*columns)


def _record(name: str, *items: SchemaItem) -> Table:
    """Add a table of record: insert only, each row part of the audit row of its pass."""
    return Table(
        name,
        metadata,
        *items,
        _integer("pass_sequence", ForeignKey("pass.sequence")),
        Index(None, "pass_sequence"),
        sqlite_strict=True,
        info={"record": True},
    )


def _outside(name: str, *items: SchemaItem) -> Table:
    """Add a table outside the chain: its rows may be replaced and removed."""
    return Table(name, metadata, *items, sqlite_strict=True, info={"record": False})


# --- what arrived ----------------------------------------------------------------------------

_record(
    "pass",
    _integer("sequence"),
    _text("id"),
    _text("kind"),
    _integer("now_us"),
    _integer("started_us"),
    _integer("finished_us"),
    _integer("files", default=0),
    _integer("readings", default=0),
    _integer("days", default=0),
    _text("note", default="{}"),
    _key("sequence"),
    UniqueConstraint("id"),
    _check("kind", "kind IN ('pass', 'restore', 'resolution')"),
    _check("own_sequence", "pass_sequence = sequence"),
)
_record("site_version", _text("digest"), _text("text"), _key("digest"))
_record(
    "raw_object",
    _text("sha256"),
    _integer("length"),
    _key("sha256"),
    _check("sha256", "length(sha256) = 64"),
    _check("length", "length >= 0"),
)
_record(
    "delivery",
    _integer("sequence"),
    _text("source"),
    _text("binding"),
    _text("name"),
    _integer("version"),
    _text("raw_sha256", ForeignKey("raw_object.sha256")),
    _text("kind"),
    _integer("byte_offset", default=0),
    _integer("line_offset", default=0),
    _text("prefix_sha256", default=""),
    _text("file_sha256"),
    _integer("file_length"),
    _text("carried", default="{}"),
    _integer("arrival_us"),
    _integer("modified_us"),
    _integer("replaces", default=0),
    _key("sequence"),
    UniqueConstraint("source", "binding", "name", "version"),
    Index(None, "raw_sha256"),
    _check("kind", "kind IN ('whole', 'tail', 'restart')"),
    _check("numbers", "sequence >= 1 AND version >= 1 AND byte_offset >= 0 AND line_offset >= 0"),
)
_record(
    "fate",
    _integer("delivery_sequence", ForeignKey("delivery.sequence")),
    _integer("judgement"),
    _text("site_digest", ForeignKey("site_version.digest")),
    _text("verdict"),
    _text("reason", default=""),
    _text("warning", default=""),
    _integer("lines_read"),
    _integer("lines_used"),
    _integer("lines_set_aside"),
    _integer("lines_duplicate"),
    _integer("lines_skipped"),
    _integer("cells_read"),
    _integer("cells_used"),
    _integer("cells_set_aside"),
    _integer("cells_duplicate"),
    _text("readings_digest", default=""),
    _key("delivery_sequence", "judgement"),
    _check("verdict", "verdict IN ('accepted', 'rejected', 'quarantined')"),
    _check(
        "lines_add_up",
        "lines_read = lines_used + lines_set_aside + lines_duplicate + lines_skipped",
    ),
    _check("cells_add_up", "cells_read = cells_used + cells_set_aside + cells_duplicate"),
    _check(
        "counts",
        "lines_used >= 0 AND lines_set_aside >= 0 AND lines_duplicate >= 0 AND lines_skipped >= 0"
        " AND cells_used >= 0 AND cells_set_aside >= 0 AND cells_duplicate >= 0",
    ),
)
_record(
    "set_aside",
    _integer("delivery_sequence"),
    _integer("judgement"),
    _integer("line"),
    _text("cell"),
    _integer("number"),
    _text("reason"),
    _blob("text"),
    _key("delivery_sequence", "judgement", "line", "cell", "number"),
    ForeignKeyConstraint(
        ["delivery_sequence", "judgement"], ["fate.delivery_sequence", "fate.judgement"]
    ),
)
_record(
    "conflict",
    _text("signal"),
    _integer("instant_us"),
    _integer("decision"),
    _text("candidates"),
    _real("chosen"),
    _text("rule"),
    _key("signal", "instant_us", "decision"),
)

# --- what was computed -----------------------------------------------------------------------


def _total_columns() -> tuple[SchemaItem, ...]:
    return (
        _integer("period_end_us"),
        _text("gas_day"),
        _real("duration_s"),
        _real("measured_time_s"),
        _real("flow_time_s"),
        _known_or_not("mass_kg"),
        _known_or_not("line_volume_m3"),
        _known_or_not("base_volume_m3"),
        _known_or_not("energy_J"),
        _known_or_not("mass_expanded_uncertainty_kg"),
        _known_or_not("base_volume_expanded_uncertainty_m3"),
        _known_or_not("energy_expanded_uncertainty_J"),
        Column("uncertainty", _TEXT, nullable=True),
        _known_or_not("base_pressure_Pa"),
        _known_or_not("base_temperature_K"),
        _text("calorific_value_kind", default=""),
        _known_or_not("combustion_reference_temperature_K"),
        _real("measured_fraction"),
        _text("flags", default="{}"),
        _text("missing", default=""),
        _text("input_digest"),
        _integer("as_of_delivery"),
        _integer("as_of_pass"),
        _text("site_digest", ForeignKey("site_version.digest")),
        _text("calculation_version"),
        _text("fingerprint"),
        _check("kind", _TOTAL_KINDS),
        _check("period", "period_end_us > period_start_us"),
    )


def _hourly_columns() -> tuple[SchemaItem, ...]:
    return (
        _integer("period_start_us"),
        _integer("hours"),
        _integer("columns"),
        _blob("statistics"),
        _blob("sensitivities", nullable=True),
        _blob("standard_uncertainty", nullable=True),
        Column("parameters", _TEXT, nullable=True),
    )


def _balance_columns() -> tuple[SchemaItem, ...]:
    return (
        _integer("period_end_us"),
        _text("gas_day"),
        *map(_known_or_not, ("inflow", "outflow", "vented", "storage_change", "imbalance")),
        _known_or_not("expanded_uncertainty"),
        Column("uncertainty", _TEXT, nullable=True),
        _known_or_not("tolerance"),
        _text("beyond_tolerance"),
        _text("significant"),
        _known_or_not("base_pressure_Pa"),
        _known_or_not("base_temperature_K"),
        Column("calorific_value_kind", _TEXT, nullable=True),
        _known_or_not("combustion_reference_temperature_K"),
        _real("measured_fraction"),
        _text("reason", default=""),
        _blob("hourly", nullable=True),
        _text("links", default="[]"),
        _integer("as_of_pass"),
        _text("site_digest", ForeignKey("site_version.digest")),
        _text("calculation_version"),
        _text("fingerprint"),
        _check("kind", _TOTAL_KINDS),
        _check("period", "period_end_us > period_start_us"),
        _check("beyond_tolerance", f"beyond_tolerance {_VERDICTS}"),
        _check("significant", f"significant {_VERDICTS}"),
    )


_record(
    "total_revision",
    _text("meter"),
    _text("kind"),
    _integer("period_start_us"),
    _text("basis"),
    _integer("revision"),
    *_total_columns(),
    _text("reason", default=""),
    _key("meter", "kind", "period_start_us", "basis", "revision"),
    _check("basis", "basis IN ('measured', 'amended', 'substituted')"),
    _check("revision", "revision >= 1"),
    Index(None, "gas_day"),
)
_record(
    "hourly_record",
    _text("meter"),
    _text("gas_day"),
    _integer("revision"),
    *_hourly_columns(),
    _key("meter", "gas_day", "revision"),
    _check("revision", "revision >= 1"),
)
_record(
    "balance_revision",
    _text("envelope"),
    _text("kind"),
    _integer("period_start_us"),
    _text("quantity"),
    _text("basis"),
    _integer("revision"),
    *_balance_columns(),
    _text("revision_reason", default=""),
    _key("envelope", "kind", "period_start_us", "quantity", "basis", "revision"),
    _check("basis", "basis IN ('measured', 'amended', 'substituted')"),
    _check("revision", "revision >= 1"),
    Index(None, "gas_day"),
)
_record(
    "period_event",
    _text("subject"),
    _text("kind"),
    _integer("period_start_us"),
    _integer("number"),
    _text("stage"),
    _text("reason", default=""),
    _key("subject", "kind", "period_start_us", "number"),
    _check("kind", _TOTAL_KINDS),
    _check("stage", "stage IN ('provisional', 'final', 'reopened')"),
)
_record(
    "alert",
    _text("id"),
    _text("kind"),
    _text("subject"),
    _integer("since_us"),
    _key("id"),
)
_record(
    "alert_event",
    _text("alert_id", ForeignKey("alert.id")),
    _integer("number"),
    _text("state"),
    Column("until_us", _INTEGER, nullable=True),
    _text("severity"),
    _text("message"),
    _text("evidence", default="{}"),
    _known_or_not("effect_base_volume_m3_per_day"),
    _known_or_not("effect_energy_J_per_day"),
    _known_or_not("effect_money_per_day"),
    _text("currency", default=""),
    _text("input_digest", default=""),
    _key("alert_id", "number"),
    _check("state", "state IN ('opened', 'updated', 'closed')"),
)

# --- the chain itself: insert only as well, but digested by its own hashes ---------------------

Table(
    "audit",
    metadata,
    _integer("shard"),
    _integer("sequence"),
    _text("previous_hash"),
    _text("row_hash"),
    _text("digests"),
    _text("actor"),
    _integer("clock_us"),
    _text("note", default="{}"),
    _key("shard", "sequence"),
    UniqueConstraint("shard", "previous_hash"),
    _check("sequence", "shard >= 0 AND sequence >= 1"),
    sqlite_strict=True,
    info={"record": False, "chain": True},
)

# --- outside the chain -----------------------------------------------------------------------

_outside("ledger", _text("id"), _integer("created_us", default=0), _key("id"))
_outside(
    "raw_location",
    _text("sha256"),
    _text("pack"),
    _integer("offset"),
    _integer("stored_length"),
    _text("packing"),
    _key("sha256"),
)
_outside("settled_pack", _text("pack"), _key("pack"))
_outside(
    "reading_segment",
    _integer("pass_sequence"),
    _text("file"),
    _text("digest"),
    _key("pass_sequence"),
)
_outside(
    "reading_span",
    _integer("pass_sequence"),
    _text("signal"),
    _integer("first_us"),
    _integer("last_us"),
    _integer("start"),
    _integer("count"),
    _key("pass_sequence", "signal"),
    Index(None, "signal", "first_us", "last_us"),
)
_outside(
    "open_total",
    _text("meter"),
    _text("kind"),
    _integer("period_start_us"),
    *_total_columns(),
    _integer("pass_sequence"),
    _key("meter", "kind", "period_start_us"),
)
_outside(
    "open_hourly",
    _text("meter"),
    _text("gas_day"),
    *_hourly_columns(),
    _integer("pass_sequence"),
    _key("meter", "gas_day"),
)
_outside(
    "open_balance",
    _text("envelope"),
    _text("kind"),
    _integer("period_start_us"),
    _text("quantity"),
    *_balance_columns(),
    _integer("pass_sequence"),
    _key("envelope", "kind", "period_start_us", "quantity"),
)
_outside(
    "waiting",
    _text("source"),
    _text("binding"),
    _text("name"),
    _text("reason"),
    _integer("seen_us"),
    _key("source", "binding", "name"),
)
_outside(
    "seen",
    _text("source"),
    _text("binding"),
    _text("name"),
    _integer("size"),
    _integer("modified_us"),
    _key("source", "binding", "name"),
)
_outside(
    "heartbeat",
    _integer("id"),
    _integer("last_us"),
    _text("last_error", default=""),
    _integer("last_pass", default=0),
    _text("note", default="{}"),
    _key("id"),
    _check("one_row", "id = 1"),
)
_outside(
    "attempt",
    _text("source"),
    _text("binding"),
    _text("name"),
    _text("raw_sha256"),
    _integer("crashes", default=0),
    _integer("alone", default=0),
    _key("source", "binding", "name", "raw_sha256"),
)

RECORD_TABLES: tuple[str, ...] = tuple(
    table.name for table in metadata.sorted_tables if table.info["record"]
)
"""Tables of record, each after the tables that it refers to."""

INSERT_ONLY_TABLES: tuple[str, ...] = (*RECORD_TABLES, "audit")
"""Tables whose triggers refuse every change of a stored row."""

OUTSIDE_TABLES: tuple[str, ...] = tuple(
    table.name for table in metadata.sorted_tables if table.name not in INSERT_ONLY_TABLES
)
"""Tables whose rows may be replaced."""


def table_named(name: str) -> Table:
    """Return a table of the ledger; ValueError names an unknown one."""
    try:
        return metadata.tables[name]
    except KeyError:
        raise ValueError(f"the ledger has no table {name!r}") from None
