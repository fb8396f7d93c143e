"""Signals: measuring points, and the columns or tags their readings come from."""

from __future__ import annotations

from dataclasses import dataclass

from meterfix.intake.site.carry import cell_reach
from meterfix.intake.site.findings import Findings, Place
from meterfix.intake.site.shapes import DatedRange
from meterfix.intake.site.sources import cell_place, cells_of, dimension_of
from meterfix.intake.site.tables import (
    AnySource,
    CellTable,
    OriginTable,
    SignalTable,
    SiteFile,
    SourceTable,
    TagsTable,
)
from meterfix.model.calendar import SECOND
from meterfix.model.source import (
    Excluded,
    Holds,
    Origin,
    Quantity,
    Signal,
    Stamp,
    Transmitter,
)
from meterfix.model.versions import Versions


@dataclass(frozen=True, slots=True)
class _Meaning:
    """What an origin's readings mean; a signal's origins must agree on it."""

    quantity: str | None
    reference: str | None
    root: str | None
    holds: str | None
    stamp: str | None
    interval: int | None
    between: str | None
    maximum_gap: int | None
    """us; a gap or age that cannot be read is reported with its source."""
    maximum_age: int | None


def quantities(file: SiteFile) -> dict[str, Quantity | None]:
    """Return what every signal of the file measures; None where that cannot be told."""
    found: dict[str, Quantity | None] = {}
    for name, table in (file.signal or {}).items():
        found[name] = None
        for origin in table.from_ or []:
            column = _column(file, origin)
            if column is not None and column.quantity is not None:
                found[name] = Quantity(column.quantity)
                break
    return found


def _column(file: SiteFile, origin: OriginTable) -> CellTable | None:
    source = (file.source or {}).get(origin.source)
    return None if source is None else cells_of(source).get(_name_of(origin))


def _name_of(origin: OriginTable) -> str:
    """Return the column or tag that an origin names; '' where that cannot be told."""
    return origin.column or origin.tag or ""


def build_signals(file: SiteFile, findings: Findings) -> tuple[Signal, ...]:
    """Return the signals that could be built."""
    claims: dict[tuple[str, str, str], str] = {}
    bound: set[str] = set()
    signals = [
        _signal(name, table, file, claims, bound, findings)
        for name, table in (file.signal or {}).items()
    ]
    for name, source in (file.source or {}).items():
        if source.files is None:
            continue
        if name in bound and "{binding}" not in source.files:
            findings.add(
                ("source", name, "files"),
                f"'{source.files}' without {{binding}}, though signals name a binding",
                "write {binding} where a file's name says whose it is, or leave out the bindings",
            )
    return tuple(signal for signal in signals if signal is not None)


def _signal(
    name: str,
    table: SignalTable,
    file: SiteFile,
    claims: dict[tuple[str, str, str], str],
    bound: set[str],
    findings: Findings,
) -> Signal | None:
    place: Place = ("signal", name)
    before = len(findings.mistakes)
    found: list[tuple[OriginTable, AnySource, CellTable]] = []
    for n, origin in enumerate(table.from_ or []):
        at = (*place, "from", n)
        _claim(at, name, origin, claims, findings)
        if origin.binding:
            bound.add(origin.source)
        pair = _origin(at, origin, file, findings)
        if pair is not None:
            found.append((origin, *pair))
    if not found:
        return None
    _agree(place, found, findings)
    origin, source, column = found[0]
    excluded = _excluded(place, table, findings)
    if column.quantity is None or column.root is None or column.holds is None:
        return None
    quantity = Quantity(column.quantity)
    ranges = _ranges(place, table, quantity, column, findings)
    steps = cell_place(origin.source, source, _name_of(origin))
    reach = cell_reach(("source", origin.source), source, steps, column, findings)
    if len(findings.mistakes) > before or ranges is None or reach is None:
        return None
    if source.stamp is None:
        return None
    return Signal(
        name=name,
        quantity=quantity,
        gauge=column.reference == "gauge",
        rooted=column.root == "taken",
        holds=Holds(column.holds),
        origins=tuple(Origin(o.source, o.binding, _name_of(o)) for o, _, _ in found),
        transmitter=ranges,
        excluded=excluded,
        stamp=Stamp(source.stamp),
        interval=_interval(source),
        between=reach.between,
        maximum_gap=reach.maximum_gap,
        maximum_age=reach.maximum_age,
    )


def _interval(source: SourceTable) -> int | None:
    """Return a source's interval; what is wrong with it is reported with the source."""
    if source.stamp == "instant" or source.interval is None:
        return None
    return Findings("").duration((), source.interval)


def _claim(
    at: Place,
    name: str,
    origin: OriginTable,
    claims: dict[tuple[str, str, str], str],
    findings: Findings,
) -> None:
    cell = _name_of(origin)
    if origin.source is None or not cell or origin.binding is None:
        return
    key = (origin.source, origin.binding, cell)
    owner = claims.get(key)
    claims.setdefault(key, name)
    if owner is not None:
        whose = f"of binding '{origin.binding}' " if origin.binding else ""
        kind = "column" if origin.column else "tag"
        findings.add(
            at,
            f"{kind} '{cell}' {whose}in source '{origin.source}' "
            f"is read by signal '{owner}' already",
            f"a {kind} belongs to one signal, once; meters may share a signal",
        )


def _origin(
    at: Place, origin: OriginTable, file: SiteFile, findings: Findings
) -> tuple[AnySource, CellTable] | None:
    sources = file.source or {}
    if origin.source is None:
        return None
    if findings.reference((*at, "source"), origin.source, "source", sources) is None:
        return None
    source = sources[origin.source]
    key, other = ("tag", "column") if isinstance(source, TagsTable) else ("column", "tag")
    if other in origin.model_fields_set:
        layout = f"source '{origin.source}' has {key}s"
        findings.add((*at, other), f"'{getattr(origin, other)}', but {layout}", f"name a {key}")
        return None
    if key not in origin.model_fields_set:
        findings.add((*at, key), "missing", "this key is needed")
        return None
    cells = cells_of(source)
    name = findings.reference((*at, key), getattr(origin, key), key, cells)
    if name is None:
        return None
    if not origin.binding and source.files is not None and "{binding}" in source.files:
        findings.add(
            (*at, "binding"),
            "missing",
            f"source '{origin.source}' has files per {{binding}}; say whose this is",
        )
    if origin.binding and any(mark in origin.binding for mark in "*?[]{}/\\"):
        findings.add(
            (*at, "binding"), f"'{origin.binding}'", "none of * ? [ ] { } / \\ may be in it"
        )
    return source, cells[name]


def _meaning(source: AnySource, column: CellTable) -> _Meaning:
    # what is wrong with the source's own times is reported with the source
    reach = cell_reach((), source, (), column, Findings(""))
    return _Meaning(
        column.quantity,
        column.reference,
        column.root,
        column.holds,
        source.stamp,
        _interval(source),
        None if reach is None else reach.between,
        None if reach is None else reach.maximum_gap,
        None if reach is None else reach.maximum_age,
    )


def _agree(
    place: Place, found: list[tuple[OriginTable, AnySource, CellTable]], findings: Findings
) -> None:
    meanings = [_meaning(source, column) for _, source, column in found]
    for n, meaning in enumerate(meanings[1:], start=1):
        for field in _Meaning.__dataclass_fields__:
            first, other = getattr(meanings[0], field), getattr(meaning, field)
            if first != other:
                findings.add(
                    (*place, "from", n),
                    f"its {field} is {_told(other)}, that of the first origin {_told(first)}",
                    "the origins of one signal must mean the same; make it two signals",
                )


def _told(meaning: str | int | None) -> str:
    """Return a word in quotes, a duration in seconds."""
    return f"{meaning / SECOND:g} s" if isinstance(meaning, int) else repr(meaning)


def _excluded(place: Place, table: SignalTable, findings: Findings) -> tuple[Excluded, ...]:
    intervals = []
    for n, entry in enumerate(table.excluded or []):
        at = (*place, "excluded", n)
        start = findings.instant((*at, "from"), entry.from_)
        end = findings.instant((*at, "to"), entry.to)
        if start is None or end is None or entry.reason is None:
            continue
        if start >= end:
            findings.add(at, f"from {entry.from_} to {entry.to}", "`to` must be later than `from`")
            continue
        intervals.append(Excluded(start, end, entry.reason))
    return tuple(sorted(intervals, key=lambda interval: (interval.start, interval.end)))


def _ranges(
    place: Place,
    table: SignalTable,
    quantity: Quantity,
    column: CellTable,
    findings: Findings,
) -> Versions[Transmitter] | None:
    """Return the transmitter's ranges; a differential pressure needs one from the beginning."""
    at: Place = (*place, "range")
    differential = quantity is Quantity.DIFFERENTIAL_PRESSURE
    if table.range is None:
        if differential and "range" not in table.model_fields_set:
            findings.add(
                at,
                "missing",
                "a differential pressure needs its transmitter's range: [lower, upper]",
            )
        return Versions(())
    given: list[tuple[Place, str | None, list[str] | None]] = (
        [
            ((*at, n), entry.since, entry.value)
            for n, entry in enumerate(table.range)
            if isinstance(entry, DatedRange)
        ]
        if table.range == [] or isinstance(table.range[0], DatedRange)
        else [(at, None, [text for text in table.range if isinstance(text, str)])]
    )
    entries = [
        (where, since, _transmitter(where, pair, quantity, column, findings))
        for where, since, pair in given
    ]
    return findings.versions(at, entries, from_beginning=differential, what="range")


def _transmitter(
    at: Place,
    pair: list[str] | None,
    quantity: Quantity,
    column: CellTable,
    findings: Findings,
) -> Transmitter | None:
    values = findings.pair(at, pair, dimension_of(quantity, rooted=False))
    if values is None:
        return None
    if column.root == "taken" and values[0] != 0.0:
        findings.add(
            at,
            f"the range of a rooted signal begins at '{pair[0] if pair else ''}'",
            "it must begin at 0: a rooted cell is a fraction of full-scale flow",
        )
        return None
    return Transmitter(*values)
