"""Sources: where logs lie, how their bytes are laid out, what each column or tag means."""

from __future__ import annotations

import re

from meterfix import units
from meterfix.errors import UnitError
from meterfix.intake.site.carry import cell_reach, source_reach
from meterfix.intake.site.findings import Findings, Place
from meterfix.intake.site.tables import AnySource, CellTable, ColumnTable, SourceTable, TagsTable
from meterfix.intake.site.tag_logs import check_tags, qualities
from meterfix.intake.site.terms import zone_known
from meterfix.model.source import (
    Column,
    Delivery,
    Holds,
    Layout,
    LayoutKind,
    Quality,
    Quantity,
    RepeatedHour,
    Source,
    Stamp,
)

_DIRECTIVE = re.compile(r"%(.?)")
_DIRECTIVES = "YmdHMSfz"

PLAUSIBLE: dict[str, tuple[float, float]] = {
    "differential_pressure": (-2.5e5, 2.5e5),
    "rooted": (-0.05, 1.5),
    "static_pressure_gauge": (-1.1e5, 4e7),
    "static_pressure_absolute": (0.0, 4e7),
    "temperature": (173.15, 473.15),
    "barometric_pressure": (5e4, 1.1e5),
}
"""Default plausible ranges, SI: what transmitters on gas meters can meet at all. Wide on
purpose: a value outside is used and flagged, never dropped. Common practice."""


def dimension_of(quantity: Quantity, *, rooted: bool) -> units.Dimension:
    """Return the dimension in which a column of the quantity is written."""
    if rooted:
        return "fraction"
    return "temperature" if quantity is Quantity.TEMPERATURE else "pressure"


def cells_of(source: AnySource) -> dict[str, CellTable]:
    """Return a source's columns, or its tags, by name."""
    found = source.tag if isinstance(source, TagsTable) else source.column
    return dict(found or {})


def cell_place(name: str, source: AnySource, cell: str) -> Place:
    """Return where a source's column or tag stands in the site file."""
    return ("source", name, "tag" if isinstance(source, TagsTable) else "column", cell)


def build_column(
    place: Place, header: str, table: CellTable, stamp: str | None, findings: Findings
) -> Column | None:
    """Return one column or tag; `stamp` is its source's."""
    before = len(findings.mistakes)
    if table.quantity is None:
        return None
    quantity = Quantity(table.quantity)
    rooted = table.root == "taken"
    if rooted and quantity is not Quantity.DIFFERENTIAL_PRESSURE:
        findings.add((*place, "root"), "'taken'", "only a differential pressure can be rooted")
        rooted = False
    _check_reference(place, quantity, table, findings)
    if table.holds == "mean" and stamp == "instant":
        findings.add(
            (*place, "holds"),
            "'mean' in a source whose stamp is an instant",
            "a mean needs an interval: stamp = 'interval_start' or 'interval_end'",
        )
    dimension = dimension_of(quantity, rooted=rooted)
    scale, offset = 1.0, 0.0
    if table.unit is not None:
        try:
            scale, offset = units.linear(table.unit, dimension)
        except UnitError as error:
            given, _, allowed = str(error).partition("; ")
            if rooted:
                allowed = "a rooted value is a fraction of full-scale flow: unit '1' or '%'"
            findings.add((*place, "unit"), given, allowed)
    gauge = table.reference == "gauge"
    kind = "rooted" if rooted else quantity.value
    if quantity is Quantity.STATIC_PRESSURE:
        kind = f"{kind}_{'gauge' if gauge else 'absolute'}"
    plausible = findings.pair((*place, "plausible"), table.plausible, dimension) or PLAUSIBLE[kind]
    findings.duration((*place, "maximum_gap"), table.maximum_gap)
    findings.duration((*place, "maximum_age"), table.maximum_age, positive=False)
    required = table.required if isinstance(table, ColumnTable) else False
    if len(findings.mistakes) > before or table.holds is None or required is None:
        return None
    return Column(
        header=header,
        quantity=quantity,
        holds=Holds(table.holds),
        scale=scale,
        offset=offset,
        gauge=gauge,
        rooted=rooted,
        required=required,
        plausible_minimum=plausible[0],
        plausible_maximum=plausible[1],
    )


def _check_reference(
    place: Place, quantity: Quantity, table: CellTable, findings: Findings
) -> None:
    at = (*place, "reference")
    if quantity is Quantity.STATIC_PRESSURE:
        if "reference" not in table.model_fields_set:
            findings.add(at, "missing", "a static pressure is 'gauge' or 'absolute'")
    elif quantity is Quantity.BAROMETRIC_PRESSURE:
        if table.reference == "gauge":
            findings.add(at, "'gauge'", "a barometer measures absolute pressure")
    elif table.reference is not None:
        measured = quantity.value.replace("_", " ")
        findings.add(at, f"'{table.reference}'", f"a {measured} has none; leave it out")


def build_source(name: str, table: AnySource, findings: Findings) -> Source | None:
    """Return one source of logs."""
    place: Place = ("source", name)
    before = len(findings.mistakes)
    _check_pattern(place, table, findings)
    interval = _interval(place, table, findings)
    reach = source_reach(place, table, findings)
    settle = findings.duration((*place, "settle_time"), table.settle_time, positive=False)
    wait = findings.duration((*place, "unfinished_wait"), table.unfinished_wait, positive=False)
    layout = _layout(place, table, findings)
    whole = (
        None not in {table.stamp, table.delivery, table.precedence, table.folder, table.files}
        and len(findings.mistakes) == before
    )
    if not whole or reach is None or settle is None or wait is None or layout is None:
        return None
    return Source(
        name=name,
        folder=table.folder,
        file_pattern=table.files,
        delivery=Delivery(table.delivery),
        stamp=Stamp(table.stamp),
        interval=interval,
        between=reach.between,
        maximum_gap=reach.maximum_gap,
        maximum_age=reach.maximum_age,
        settle_time=settle,
        unfinished_wait=wait,
        precedence=table.precedence,
        layout=layout,
    )


def _check_pattern(place: Place, table: SourceTable, findings: Findings) -> None:
    pattern = table.files
    if pattern is None:
        return
    at = (*place, "files")
    if pattern.count("{binding}") > 1 or "{" in pattern.replace("{binding}", ""):
        findings.add(at, f"'{pattern}'", "{binding} may stand in it once, and nothing else in {}")
    if "/" in pattern or "\\" in pattern or not pattern:
        findings.add(at, f"'{pattern}'", "it is a pattern of file names; folders go into `folder`")
    if table.delivery == "appended" and pattern.lower().endswith(".gz"):
        findings.add(
            at,
            f"'{pattern}' with delivery 'appended'",
            "a compressed file cannot be read while it grows; say 'whole', or log plain text",
        )


def _interval(place: Place, table: SourceTable, findings: Findings) -> int | None:
    interval = findings.duration((*place, "interval"), table.interval)
    if table.stamp is None:
        return interval
    if table.stamp == "instant":
        if table.interval is not None:
            findings.add(
                (*place, "interval"), f"'{table.interval}' with stamp 'instant'", "leave it out"
            )
        if "between" not in table.model_fields_set and table.report == "periodic":
            findings.add((*place, "between"), "missing", "say 'linear' or 'hold'")
        return None
    if "interval" not in table.model_fields_set:
        findings.add(
            (*place, "interval"),
            f"missing with stamp '{table.stamp}'",
            "an interval's length is needed, for example '1 min'",
        )
    if table.between == "linear":
        findings.add(
            (*place, "between"),
            f"'linear' with stamp '{table.stamp}'",
            "an interval's value holds over it: say 'hold' or leave it out",
        )
    return interval


def _layout(place: Place, table: AnySource, findings: Findings) -> Layout | None:
    earliest = findings.instant((*place, "earliest"), table.earliest)
    _check_marks(place, table, findings)
    _check_time(place, table, findings)
    tags = table if isinstance(table, TagsTable) else None
    codes: tuple[Quality, ...] = ()
    if tags is not None:
        check_tags(place, tags, findings)
        codes = qualities(place, tags, findings)
    columns = []
    for header, column in cells_of(table).items():
        at = cell_place(str(place[1]), table, header)
        columns.append(build_column(at, header, column, table.stamp, findings))
        if isinstance(table, TagsTable):
            cell_reach(place, table, at, column, findings)
    good = [column for column in columns if column is not None]
    settled = None not in {
        table.encoding,
        table.repeated_hour,
        table.hour_24,
        table.final_line_end,
        table.size_limit_bytes,
    }
    if not settled or earliest is None or len(good) < len(columns):
        return None
    return Layout(
        encoding=table.encoding,
        delimiter=table.delimiter,
        decimal_mark=table.decimal_mark,
        thousands_mark=table.thousands_mark,
        time_columns=tuple(table.time_columns or ()),
        time_format=table.time_format,
        time_zone=table.time_zone or "UTC",
        repeated_hour=RepeatedHour(table.repeated_hour),
        hour_24=table.hour_24,
        columns=tuple(good),
        ignored_columns=tuple(table.ignored_columns or ()),
        bad_values=tuple((table.bad_values or {}).items()),
        final_line_end_required=table.final_line_end == "required",
        earliest=earliest,
        size_limit=table.size_limit_bytes,
        kind=LayoutKind.TAGS if isinstance(table, TagsTable) else LayoutKind.WIDE,
        tag_column=tags.tag_column if tags else "",
        value_column=tags.value_column if tags else "",
        quality_column=(tags.quality_column or "") if tags else "",
        qualities=codes,
        ignored_tags=tuple(tags.ignored_tags or ()) if tags else (),
    )


def _check_marks(place: Place, table: SourceTable, findings: Findings) -> None:
    marks = {
        "delimiter": table.delimiter,
        "decimal_mark": table.decimal_mark,
        "thousands_mark": table.thousands_mark,
    }
    given = {key: mark for key, mark in marks.items() if mark}
    if len(set(given.values())) < len(given):
        shown = ", ".join(f"{key} {mark!r}" for key, mark in given.items())
        findings.add(place, shown, "these marks must all differ")
    for key in ("delimiter", "thousands_mark"):
        mark = given.get(key)
        if mark and (mark.isalnum() or mark in '"+-\r\n\0'):
            findings.add(
                (*place, key), repr(mark), "no letter, digit, sign, quote or line end can be one"
            )


def _check_time(place: Place, table: AnySource, findings: Findings) -> None:
    headers = [] if isinstance(table, TagsTable) else list(table.column or {})
    for key, names in (
        ("time_columns", table.time_columns or []),
        ("ignored_columns", table.ignored_columns or []),
    ):
        for name in names:
            if name in headers:
                findings.add(
                    (*place, key), f"'{name}'", "it is a column of values too; one or the other"
                )
    text = table.time_format
    at = (*place, "time_format")
    if text is not None:
        found = _DIRECTIVE.findall(text)
        unknown = [f"%{letter}" for letter in found if letter not in _DIRECTIVES or not letter]
        lacking = [f"%{letter}" for letter in "YmdHM" if letter not in found]
        doubled = [f"%{letter}" for letter in sorted(set(found)) if found.count(letter) > 1]
        if unknown:
            findings.add(
                at,
                f"'{text}' holds {', '.join(unknown)}",
                "use %Y %m %d %H %M %S %f %z; two-digit years are not read",
            )
        if lacking and "%y" not in unknown:
            findings.add(
                at, f"'{text}' lacks {', '.join(lacking)}", "a full date and time is needed"
            )
        if doubled:
            findings.add(at, f"'{text}' holds {', '.join(doubled)} twice", "each may stand once")
        if "time_zone" not in table.model_fields_set and "z" not in found:
            findings.add(
                (*place, "time_zone"),
                "missing",
                "times without an offset need a time zone, for example 'UTC'",
            )
    if table.time_zone is not None:
        zone_known((*place, "time_zone"), table.time_zone, findings)
