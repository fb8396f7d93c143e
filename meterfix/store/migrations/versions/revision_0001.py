"""The ledger's first tables, and the triggers that make tables of record insert-only."""

from __future__ import annotations

from typing import Any

import sqlalchemy as sa
from alembic import op
from sqlalchemy.dialects import sqlite
from sqlalchemy.types import TypeEngine

from meterfix.store.triggers import trigger_statements

revision = "0001"
down_revision = None
branch_labels = None
depends_on = None

# STRICT tables of SQLite know INTEGER and REAL only; PostgreSQL must not fold text by a locale.
INTEGER = sa.BigInteger().with_variant(sa.Integer(), "sqlite")
REAL: TypeEngine[float] = sa.Double().with_variant(sqlite.REAL(), "sqlite")
TEXT = sa.Text().with_variant(sa.Text(collation="C"), "postgresql")
BLOB = sa.LargeBinary()

TYPES: dict[str, TypeEngine[Any]] = {"INTEGER": INTEGER, "REAL": REAL, "TEXT": TEXT, "BLOB": BLOB}

INSERT_ONLY: dict[str, list[tuple[str, ...]]] = {
    "pass": [("sequence",), ("id",)],
    "alert": [("id",)],
    "conflict": [("signal", "instant_us", "decision")],
    "hourly_record": [("meter", "gas_day", "revision")],
    "period_event": [("subject", "kind", "period_start_us", "number")],
    "raw_object": [("sha256",)],
    "site_version": [("digest",)],
    "alert_event": [("alert_id", "number")],
    "balance_revision": [("envelope", "kind", "period_start_us", "quantity", "basis", "revision")],
    "delivery": [("sequence",), ("source", "binding", "name", "version")],
    "total_revision": [("meter", "kind", "period_start_us", "basis", "revision")],
    "fate": [("delivery_sequence", "judgement")],
    "set_aside": [("delivery_sequence", "judgement", "line", "cell", "number")],
    "audit": [("shard", "sequence"), ("shard", "previous_hash")],
}
"""Tables of record with the columns of their keys."""


def columns(text: str) -> list[sa.Column[Any]]:
    """Return columns from 'name TYPE' or, where a value may be unknown, 'name TYPE NULL'."""
    return [
        sa.Column(words[0], TYPES[words[1]], nullable="NULL" in words, autoincrement=False)
        for words in (part.split() for part in text.split(", "))
    ]


def upgrade() -> None:
    """Make every table, index and trigger."""
    op.create_table(
        "attempt",
        *columns(
            "source TEXT, binding TEXT, name TEXT, raw_sha256 TEXT, crashes INTEGER, alone INTEGER"
        ),
        sa.PrimaryKeyConstraint("source", "binding", "name", "raw_sha256", name="pk_attempt"),
        sqlite_strict=True,
    )
    op.create_table(
        "audit",
        *columns(
            "shard INTEGER, sequence INTEGER, previous_hash TEXT, row_hash TEXT, digests TEXT, "
            "actor TEXT, clock_us INTEGER, note TEXT"
        ),
        sa.PrimaryKeyConstraint("shard", "sequence", name="pk_audit"),
        sa.CheckConstraint("shard >= 0 AND sequence >= 1", name=op.f("ck_audit_sequence")),
        sa.UniqueConstraint("shard", "previous_hash", name="uq_audit_shard_previous_hash"),
        sqlite_strict=True,
    )
    op.create_table(
        "heartbeat",
        *columns("id INTEGER, last_us INTEGER, last_error TEXT, last_pass INTEGER, note TEXT"),
        sa.PrimaryKeyConstraint("id", name="pk_heartbeat"),
        sa.CheckConstraint("id = 1", name=op.f("ck_heartbeat_one_row")),
        sqlite_strict=True,
    )
    op.create_table(
        "ledger",
        *columns("id TEXT, created_us INTEGER"),
        sa.PrimaryKeyConstraint("id", name="pk_ledger"),
        sqlite_strict=True,
    )
    op.create_table(
        "open_hourly",
        *columns(
            "meter TEXT, gas_day TEXT, period_start_us INTEGER, hours INTEGER, "
            "columns INTEGER, statistics BLOB, sensitivities BLOB NULL, "
            "standard_uncertainty BLOB NULL, parameters TEXT NULL, pass_sequence INTEGER"
        ),
        sa.PrimaryKeyConstraint("meter", "gas_day", name="pk_open_hourly"),
        sqlite_strict=True,
    )
    op.create_table(
        "pass",
        *columns(
            "sequence INTEGER, id TEXT, kind TEXT, now_us INTEGER, started_us INTEGER, "
            "finished_us INTEGER, files INTEGER, readings INTEGER, days INTEGER, note TEXT, "
            "pass_sequence INTEGER"
        ),
        sa.PrimaryKeyConstraint("sequence", name="pk_pass"),
        sa.CheckConstraint("kind IN ('pass', 'restore', 'resolution')", name=op.f("ck_pass_kind")),
        sa.CheckConstraint("pass_sequence = sequence", name=op.f("ck_pass_own_sequence")),
        sa.ForeignKeyConstraint(["pass_sequence"], ["pass.sequence"], name="fk_pass_pass_sequence"),
        sa.UniqueConstraint("id", name="uq_pass_id"),
        sqlite_strict=True,
    )
    op.create_index("ix_pass_pass_sequence", "pass", ["pass_sequence"])
    op.create_table(
        "raw_location",
        *columns("sha256 TEXT, pack TEXT, offset INTEGER, stored_length INTEGER, packing TEXT"),
        sa.PrimaryKeyConstraint("sha256", name="pk_raw_location"),
        sqlite_strict=True,
    )
    op.create_table(
        "reading_segment",
        *columns("pass_sequence INTEGER, file TEXT, digest TEXT"),
        sa.PrimaryKeyConstraint("pass_sequence", name="pk_reading_segment"),
        sqlite_strict=True,
    )
    op.create_table(
        "reading_span",
        *columns(
            "pass_sequence INTEGER, signal TEXT, first_us INTEGER, last_us INTEGER, "
            "start INTEGER, count INTEGER"
        ),
        sa.PrimaryKeyConstraint("pass_sequence", "signal", name="pk_reading_span"),
        sqlite_strict=True,
    )
    op.create_index(
        "ix_reading_span_signal_first_us_last_us", "reading_span", ["signal", "first_us", "last_us"]
    )
    op.create_table(
        "seen",
        *columns("source TEXT, binding TEXT, name TEXT, size INTEGER, modified_us INTEGER"),
        sa.PrimaryKeyConstraint("source", "binding", "name", name="pk_seen"),
        sqlite_strict=True,
    )
    op.create_table(
        "settled_pack",
        *columns("pack TEXT"),
        sa.PrimaryKeyConstraint("pack", name="pk_settled_pack"),
        sqlite_strict=True,
    )
    op.create_table(
        "waiting",
        *columns("source TEXT, binding TEXT, name TEXT, reason TEXT, seen_us INTEGER"),
        sa.PrimaryKeyConstraint("source", "binding", "name", name="pk_waiting"),
        sqlite_strict=True,
    )
    op.create_table(
        "alert",
        *columns("id TEXT, kind TEXT, subject TEXT, since_us INTEGER, pass_sequence INTEGER"),
        sa.PrimaryKeyConstraint("id", name="pk_alert"),
        sa.ForeignKeyConstraint(
            ["pass_sequence"], ["pass.sequence"], name="fk_alert_pass_sequence"
        ),
        sqlite_strict=True,
    )
    op.create_index("ix_alert_pass_sequence", "alert", ["pass_sequence"])
    op.create_table(
        "conflict",
        *columns(
            "signal TEXT, instant_us INTEGER, decision INTEGER, candidates TEXT, chosen REAL, "
            "rule TEXT, pass_sequence INTEGER"
        ),
        sa.PrimaryKeyConstraint("signal", "instant_us", "decision", name="pk_conflict"),
        sa.ForeignKeyConstraint(
            ["pass_sequence"], ["pass.sequence"], name="fk_conflict_pass_sequence"
        ),
        sqlite_strict=True,
    )
    op.create_index("ix_conflict_pass_sequence", "conflict", ["pass_sequence"])
    op.create_table(
        "hourly_record",
        *columns(
            "meter TEXT, gas_day TEXT, revision INTEGER, period_start_us INTEGER, "
            "hours INTEGER, columns INTEGER, statistics BLOB, sensitivities BLOB NULL, "
            "standard_uncertainty BLOB NULL, parameters TEXT NULL, pass_sequence INTEGER"
        ),
        sa.PrimaryKeyConstraint("meter", "gas_day", "revision", name="pk_hourly_record"),
        sa.CheckConstraint("revision >= 1", name=op.f("ck_hourly_record_revision")),
        sa.ForeignKeyConstraint(
            ["pass_sequence"], ["pass.sequence"], name="fk_hourly_record_pass_sequence"
        ),
        sqlite_strict=True,
    )
    op.create_index("ix_hourly_record_pass_sequence", "hourly_record", ["pass_sequence"])
    op.create_table(
        "period_event",
        *columns(
            "subject TEXT, kind TEXT, period_start_us INTEGER, number INTEGER, stage TEXT, "
            "reason TEXT, pass_sequence INTEGER"
        ),
        sa.PrimaryKeyConstraint(
            "subject", "kind", "period_start_us", "number", name="pk_period_event"
        ),
        sa.CheckConstraint("kind IN ('gas_day', 'month')", name=op.f("ck_period_event_kind")),
        sa.CheckConstraint(
            "stage IN ('provisional', 'final', 'reopened')", name=op.f("ck_period_event_stage")
        ),
        sa.ForeignKeyConstraint(
            ["pass_sequence"], ["pass.sequence"], name="fk_period_event_pass_sequence"
        ),
        sqlite_strict=True,
    )
    op.create_index("ix_period_event_pass_sequence", "period_event", ["pass_sequence"])
    op.create_table(
        "raw_object",
        *columns("sha256 TEXT, length INTEGER, pass_sequence INTEGER"),
        sa.PrimaryKeyConstraint("sha256", name="pk_raw_object"),
        sa.CheckConstraint("length >= 0", name=op.f("ck_raw_object_length")),
        sa.CheckConstraint("length(sha256) = 64", name=op.f("ck_raw_object_sha256")),
        sa.ForeignKeyConstraint(
            ["pass_sequence"], ["pass.sequence"], name="fk_raw_object_pass_sequence"
        ),
        sqlite_strict=True,
    )
    op.create_index("ix_raw_object_pass_sequence", "raw_object", ["pass_sequence"])
    op.create_table(
        "site_version",
        *columns("digest TEXT, text TEXT, pass_sequence INTEGER"),
        sa.PrimaryKeyConstraint("digest", name="pk_site_version"),
        sa.ForeignKeyConstraint(
            ["pass_sequence"], ["pass.sequence"], name="fk_site_version_pass_sequence"
        ),
        sqlite_strict=True,
    )
    op.create_index("ix_site_version_pass_sequence", "site_version", ["pass_sequence"])
    op.create_table(
        "alert_event",
        *columns(
            "alert_id TEXT, number INTEGER, state TEXT, until_us INTEGER NULL, severity TEXT, "
            "message TEXT, evidence TEXT, effect_base_volume_m3_per_day REAL NULL, "
            "effect_energy_J_per_day REAL NULL, effect_money_per_day REAL NULL, currency TEXT, "
            "input_digest TEXT, pass_sequence INTEGER"
        ),
        sa.PrimaryKeyConstraint("alert_id", "number", name="pk_alert_event"),
        sa.CheckConstraint(
            "state IN ('opened', 'updated', 'closed')", name=op.f("ck_alert_event_state")
        ),
        sa.ForeignKeyConstraint(["alert_id"], ["alert.id"], name="fk_alert_event_alert_id"),
        sa.ForeignKeyConstraint(
            ["pass_sequence"], ["pass.sequence"], name="fk_alert_event_pass_sequence"
        ),
        sqlite_strict=True,
    )
    op.create_index("ix_alert_event_pass_sequence", "alert_event", ["pass_sequence"])
    op.create_table(
        "balance_revision",
        *columns(
            "envelope TEXT, kind TEXT, period_start_us INTEGER, quantity TEXT, basis TEXT, "
            "revision INTEGER, period_end_us INTEGER, gas_day TEXT, inflow REAL NULL, "
            "outflow REAL NULL, vented REAL NULL, storage_change REAL NULL, "
            "imbalance REAL NULL, expanded_uncertainty REAL NULL, uncertainty TEXT NULL, "
            "tolerance REAL NULL, beyond_tolerance TEXT, significant TEXT, "
            "base_pressure_Pa REAL NULL, base_temperature_K REAL NULL, "
            "calorific_value_kind TEXT NULL, combustion_reference_temperature_K REAL NULL, "
            "measured_fraction REAL, reason TEXT, hourly BLOB NULL, links TEXT, "
            "as_of_pass INTEGER, site_digest TEXT, calculation_version TEXT, fingerprint TEXT, "
            "revision_reason TEXT, pass_sequence INTEGER"
        ),
        sa.PrimaryKeyConstraint(
            "envelope",
            "kind",
            "period_start_us",
            "quantity",
            "basis",
            "revision",
            name="pk_balance_revision",
        ),
        sa.CheckConstraint(
            "basis IN ('measured', 'amended', 'substituted')",
            name=op.f("ck_balance_revision_basis"),
        ),
        sa.CheckConstraint(
            "beyond_tolerance IN ('yes', 'no', 'cannot be judged')",
            name=op.f("ck_balance_revision_beyond_tolerance"),
        ),
        sa.CheckConstraint("kind IN ('gas_day', 'month')", name=op.f("ck_balance_revision_kind")),
        sa.CheckConstraint(
            "period_end_us > period_start_us", name=op.f("ck_balance_revision_period")
        ),
        sa.CheckConstraint("revision >= 1", name=op.f("ck_balance_revision_revision")),
        sa.CheckConstraint(
            "significant IN ('yes', 'no', 'cannot be judged')",
            name=op.f("ck_balance_revision_significant"),
        ),
        sa.ForeignKeyConstraint(
            ["pass_sequence"], ["pass.sequence"], name="fk_balance_revision_pass_sequence"
        ),
        sa.ForeignKeyConstraint(
            ["site_digest"], ["site_version.digest"], name="fk_balance_revision_site_digest"
        ),
        sqlite_strict=True,
    )
    op.create_index("ix_balance_revision_gas_day", "balance_revision", ["gas_day"])
    op.create_index("ix_balance_revision_pass_sequence", "balance_revision", ["pass_sequence"])
    op.create_table(
        "delivery",
        *columns(
            "sequence INTEGER, source TEXT, binding TEXT, name TEXT, version INTEGER, "
            "raw_sha256 TEXT, kind TEXT, byte_offset INTEGER, line_offset INTEGER, "
            "prefix_sha256 TEXT, file_sha256 TEXT, file_length INTEGER, carried TEXT, "
            "arrival_us INTEGER, modified_us INTEGER, replaces INTEGER, pass_sequence INTEGER"
        ),
        sa.PrimaryKeyConstraint("sequence", name="pk_delivery"),
        sa.CheckConstraint("kind IN ('whole', 'tail', 'restart')", name=op.f("ck_delivery_kind")),
        sa.CheckConstraint(
            "sequence >= 1 AND version >= 1 AND byte_offset >= 0 AND line_offset >= 0",
            name=op.f("ck_delivery_numbers"),
        ),
        sa.ForeignKeyConstraint(
            ["pass_sequence"], ["pass.sequence"], name="fk_delivery_pass_sequence"
        ),
        sa.ForeignKeyConstraint(
            ["raw_sha256"], ["raw_object.sha256"], name="fk_delivery_raw_sha256"
        ),
        sa.UniqueConstraint(
            "source", "binding", "name", "version", name="uq_delivery_source_binding_name_version"
        ),
        sqlite_strict=True,
    )
    op.create_index("ix_delivery_pass_sequence", "delivery", ["pass_sequence"])
    op.create_index("ix_delivery_raw_sha256", "delivery", ["raw_sha256"])
    op.create_table(
        "open_balance",
        *columns(
            "envelope TEXT, kind TEXT, period_start_us INTEGER, quantity TEXT, "
            "period_end_us INTEGER, gas_day TEXT, inflow REAL NULL, outflow REAL NULL, "
            "vented REAL NULL, storage_change REAL NULL, imbalance REAL NULL, "
            "expanded_uncertainty REAL NULL, uncertainty TEXT NULL, tolerance REAL NULL, "
            "beyond_tolerance TEXT, significant TEXT, "
            "base_pressure_Pa REAL NULL, base_temperature_K REAL NULL, "
            "calorific_value_kind TEXT NULL, combustion_reference_temperature_K REAL NULL, "
            "measured_fraction REAL, reason TEXT, "
            "hourly BLOB NULL, links TEXT, as_of_pass INTEGER, site_digest TEXT, "
            "calculation_version TEXT, fingerprint TEXT, pass_sequence INTEGER"
        ),
        sa.PrimaryKeyConstraint(
            "envelope", "kind", "period_start_us", "quantity", name="pk_open_balance"
        ),
        sa.CheckConstraint(
            "beyond_tolerance IN ('yes', 'no', 'cannot be judged')",
            name=op.f("ck_open_balance_beyond_tolerance"),
        ),
        sa.CheckConstraint("kind IN ('gas_day', 'month')", name=op.f("ck_open_balance_kind")),
        sa.CheckConstraint("period_end_us > period_start_us", name=op.f("ck_open_balance_period")),
        sa.CheckConstraint(
            "significant IN ('yes', 'no', 'cannot be judged')",
            name=op.f("ck_open_balance_significant"),
        ),
        sa.ForeignKeyConstraint(
            ["site_digest"], ["site_version.digest"], name="fk_open_balance_site_digest"
        ),
        sqlite_strict=True,
    )
    op.create_table(
        "open_total",
        *columns(
            "meter TEXT, kind TEXT, period_start_us INTEGER, period_end_us INTEGER, "
            "gas_day TEXT, duration_s REAL, measured_time_s REAL, flow_time_s REAL, "
            "mass_kg REAL NULL, line_volume_m3 REAL NULL, base_volume_m3 REAL NULL, "
            "energy_J REAL NULL, mass_expanded_uncertainty_kg REAL NULL, "
            "base_volume_expanded_uncertainty_m3 REAL NULL, "
            "energy_expanded_uncertainty_J REAL NULL, uncertainty TEXT NULL, "
            "base_pressure_Pa REAL NULL, base_temperature_K REAL NULL, "
            "calorific_value_kind TEXT, combustion_reference_temperature_K REAL NULL, "
            "measured_fraction REAL, flags TEXT, missing TEXT, "
            "input_digest TEXT, as_of_delivery INTEGER, as_of_pass INTEGER, site_digest TEXT, "
            "calculation_version TEXT, fingerprint TEXT, pass_sequence INTEGER"
        ),
        sa.PrimaryKeyConstraint("meter", "kind", "period_start_us", name="pk_open_total"),
        sa.CheckConstraint("kind IN ('gas_day', 'month')", name=op.f("ck_open_total_kind")),
        sa.CheckConstraint("period_end_us > period_start_us", name=op.f("ck_open_total_period")),
        sa.ForeignKeyConstraint(
            ["site_digest"], ["site_version.digest"], name="fk_open_total_site_digest"
        ),
        sqlite_strict=True,
    )
    op.create_table(
        "total_revision",
        *columns(
            "meter TEXT, kind TEXT, period_start_us INTEGER, basis TEXT, revision INTEGER, "
            "period_end_us INTEGER, gas_day TEXT, duration_s REAL, measured_time_s REAL, "
            "flow_time_s REAL, mass_kg REAL NULL, line_volume_m3 REAL NULL, "
            "base_volume_m3 REAL NULL, energy_J REAL NULL, "
            "mass_expanded_uncertainty_kg REAL NULL, "
            "base_volume_expanded_uncertainty_m3 REAL NULL, "
            "energy_expanded_uncertainty_J REAL NULL, uncertainty TEXT NULL, "
            "base_pressure_Pa REAL NULL, base_temperature_K REAL NULL, "
            "calorific_value_kind TEXT, combustion_reference_temperature_K REAL NULL, "
            "measured_fraction REAL, flags TEXT, missing TEXT, "
            "input_digest TEXT, as_of_delivery INTEGER, as_of_pass INTEGER, site_digest TEXT, "
            "calculation_version TEXT, fingerprint TEXT, reason TEXT, pass_sequence INTEGER"
        ),
        sa.PrimaryKeyConstraint(
            "meter", "kind", "period_start_us", "basis", "revision", name="pk_total_revision"
        ),
        sa.CheckConstraint(
            "basis IN ('measured', 'amended', 'substituted')", name=op.f("ck_total_revision_basis")
        ),
        sa.CheckConstraint("kind IN ('gas_day', 'month')", name=op.f("ck_total_revision_kind")),
        sa.CheckConstraint(
            "period_end_us > period_start_us", name=op.f("ck_total_revision_period")
        ),
        sa.CheckConstraint("revision >= 1", name=op.f("ck_total_revision_revision")),
        sa.ForeignKeyConstraint(
            ["pass_sequence"], ["pass.sequence"], name="fk_total_revision_pass_sequence"
        ),
        sa.ForeignKeyConstraint(
            ["site_digest"], ["site_version.digest"], name="fk_total_revision_site_digest"
        ),
        sqlite_strict=True,
    )
    op.create_index("ix_total_revision_gas_day", "total_revision", ["gas_day"])
    op.create_index("ix_total_revision_pass_sequence", "total_revision", ["pass_sequence"])
    op.create_table(
        "fate",
        *columns(
            "delivery_sequence INTEGER, judgement INTEGER, site_digest TEXT, verdict TEXT, "
            "reason TEXT, warning TEXT, lines_read INTEGER, lines_used INTEGER, "
            "lines_set_aside INTEGER, lines_duplicate INTEGER, lines_skipped INTEGER, "
            "cells_read INTEGER, cells_used INTEGER, cells_set_aside INTEGER, "
            "cells_duplicate INTEGER, readings_digest TEXT, pass_sequence INTEGER"
        ),
        sa.PrimaryKeyConstraint("delivery_sequence", "judgement", name="pk_fate"),
        sa.CheckConstraint(
            "cells_read = cells_used + cells_set_aside + cells_duplicate",
            name=op.f("ck_fate_cells_add_up"),
        ),
        sa.CheckConstraint(
            "lines_used >= 0 AND lines_set_aside >= 0 AND lines_duplicate >= 0 AND "
            "lines_skipped >= 0 AND cells_used >= 0 AND cells_set_aside >= 0 AND "
            "cells_duplicate >= 0",
            name=op.f("ck_fate_counts"),
        ),
        sa.CheckConstraint(
            "lines_read = lines_used + lines_set_aside + lines_duplicate + lines_skipped",
            name=op.f("ck_fate_lines_add_up"),
        ),
        sa.CheckConstraint(
            "verdict IN ('accepted', 'rejected', 'quarantined')", name=op.f("ck_fate_verdict")
        ),
        sa.ForeignKeyConstraint(
            ["delivery_sequence"], ["delivery.sequence"], name="fk_fate_delivery_sequence"
        ),
        sa.ForeignKeyConstraint(["pass_sequence"], ["pass.sequence"], name="fk_fate_pass_sequence"),
        sa.ForeignKeyConstraint(
            ["site_digest"], ["site_version.digest"], name="fk_fate_site_digest"
        ),
        sqlite_strict=True,
    )
    op.create_index("ix_fate_pass_sequence", "fate", ["pass_sequence"])
    op.create_table(
        "set_aside",
        *columns(
            "delivery_sequence INTEGER, judgement INTEGER, line INTEGER, cell TEXT, "
            "number INTEGER, reason TEXT, text BLOB, pass_sequence INTEGER"
        ),
        sa.PrimaryKeyConstraint(
            "delivery_sequence", "judgement", "line", "cell", "number", name="pk_set_aside"
        ),
        sa.ForeignKeyConstraint(
            ["delivery_sequence", "judgement"],
            ["fate.delivery_sequence", "fate.judgement"],
            name="fk_set_aside_delivery_sequence_judgement",
        ),
        sa.ForeignKeyConstraint(
            ["pass_sequence"], ["pass.sequence"], name="fk_set_aside_pass_sequence"
        ),
        sqlite_strict=True,
    )
    op.create_index("ix_set_aside_pass_sequence", "set_aside", ["pass_sequence"])
    for statement in trigger_statements(op.get_context().dialect.name, INSERT_ONLY):
        op.execute(sa.text(statement))
