"""How the values of a column or tag run between instants, and how far they reach."""

from __future__ import annotations

from dataclasses import dataclass

from meterfix.intake.site.findings import Findings, Place
from meterfix.intake.site.tables import CellTable, SourceTable, TagTable
from meterfix.model.source import Between

BY_EXCEPTION = "by_exception"


@dataclass(frozen=True, slots=True)
class Reach:
    """How values run between instants, and how far."""

    between: Between
    maximum_gap: int
    """us."""
    maximum_age: int
    """us."""


def source_reach(place: Place, table: SourceTable, findings: Findings) -> Reach | None:
    """Return what holds for a source's columns or tags unless they say otherwise.

    Parameters
    ----------
    place, table : the source's place in the site file, and its table.
    findings : mistakes are added.
    """
    if table.report == BY_EXCEPTION:
        _check_stamp(place, table, findings)
        _leave_out(place, table, findings)
        return _by_exception(place, table, findings)
    findings.duration((*place, "maximum_silence"), table.maximum_silence)
    if "maximum_gap" not in table.model_fields_set:
        findings.add((*place, "maximum_gap"), "missing", "this key is needed")
    gap = findings.duration((*place, "maximum_gap"), table.maximum_gap)
    age = gap
    if table.maximum_age is not None:
        age = findings.duration((*place, "maximum_age"), table.maximum_age, positive=False)
    if gap is None or age is None:
        return None
    return Reach(Between(table.between or "hold"), gap, age)


def cell_reach(
    source: Place, table: SourceTable, place: Place, cell: CellTable, findings: Findings
) -> Reach | None:
    """Return what holds for one column or tag of a source.

    Parameters
    ----------
    source, table : the source's place in the site file, and its table.
    place, cell : the column's or tag's.
    findings : mistakes are added.
    """
    tag = cell if isinstance(cell, TagTable) else TagTable.model_construct()
    if (tag.report or table.report) == BY_EXCEPTION:
        _check_stamp(place if tag.report else source, table, findings)
        _leave_out(place, cell, findings)
        if tag.maximum_silence is not None:
            return _by_exception(place, tag, findings)
        return _by_exception(place if tag.report else source, table, findings)
    if tag.maximum_silence is not None:
        findings.add(
            (*place, "maximum_silence"),
            f"'{tag.maximum_silence}' of a tag that does not report by exception",
            "leave it out, or say report = 'by_exception'",
        )
    if cell.between == "linear" and table.stamp not in {None, "instant"}:
        findings.add(
            (*place, "between"),
            f"'linear' in a source with stamp '{table.stamp}'",
            "an interval's value holds over it: say 'hold' or leave it out",
        )
    if table.report == BY_EXCEPTION:
        for key in {"between", "maximum_gap"} - cell.model_fields_set:
            allowed = "the tag is periodic, but its source reports by exception and gives none"
            findings.add((*place, key), "missing", allowed)
    gap = findings.duration(
        (*(place if cell.maximum_gap else source), "maximum_gap"),
        cell.maximum_gap or table.maximum_gap,
    )
    age = gap
    stated = cell.maximum_age or table.maximum_age
    if stated is not None:
        at = place if cell.maximum_age else source
        age = findings.duration((*at, "maximum_age"), stated, positive=False)
    if gap is None or age is None:
        return None
    return Reach(Between(cell.between or table.between or "hold"), gap, age)


def _by_exception(place: Place, table: SourceTable | TagTable, findings: Findings) -> Reach | None:
    """Return the reach of a value that holds until the next one is written.

    Silence beyond the stated one is a gap like any other: nobody knows when it began to matter.
    """
    at = (*place, "maximum_silence")
    if "maximum_silence" not in table.model_fields_set:
        findings.add(
            at,
            "missing with report 'by_exception'",
            "say how long a working logger may be silent, for example '1 h'",
        )
    silence = findings.duration(at, table.maximum_silence)
    return None if silence is None else Reach(Between.HOLD, silence, silence)


def _check_stamp(place: Place, table: SourceTable, findings: Findings) -> None:
    if table.stamp not in {None, "instant"}:
        findings.add(
            (*place, "report"),
            f"'by_exception' in a source with stamp '{table.stamp}'",
            "what is written when it changes stands at an instant: stamp = 'instant'",
        )


def _leave_out(place: Place, table: SourceTable | CellTable, findings: Findings) -> None:
    """Refuse the keys that say what reporting by exception says already."""
    for key in ("between", "maximum_gap", "maximum_age"):
        given = getattr(table, key)
        if given is not None:
            findings.add(
                (*place, key),
                f"'{given}' with report 'by_exception'",
                "leave it out: a value holds until the next one, for maximum_silence at most",
            )
