"""Tag logs: what their columns are called, their tags, and what quality codes mean."""

from __future__ import annotations

from collections import Counter

from meterfix.intake.site.findings import Findings, Place
from meterfix.intake.site.tables import QualityTable, TagsTable
from meterfix.model.source import Quality, Use


def check_tags(place: Place, table: TagsTable, findings: Findings) -> None:
    """Check what is special to a source of tag logs.

    Parameters
    ----------
    place, table : the source's place in the site file, and its table.
    findings : mistakes are added.
    """
    named = [
        name
        for name in (
            *(table.time_columns or []),
            *(table.ignored_columns or []),
            *(table.tag_column, table.value_column, table.quality_column),
        )
        if name is not None
    ]
    for name in (name for name, times in Counter(named).items() if times > 1):
        findings.add(place, f"column '{name}' named twice", "each column has one meaning")
    for key in ("tag_column", "value_column", "quality_column"):
        if getattr(table, key) == "":
            findings.add((*place, key), "empty", "the header's text is needed")
    for tag in table.tag or {}:
        _check_text((*place, "tag", tag), tag, findings)
    for n, tag in enumerate(table.ignored_tags or []):
        _check_text((*place, "ignored_tags", n), tag, findings)
        if tag in (table.tag or {}):
            findings.add((*place, "ignored_tags"), f"'{tag}'", "it is declared; one or the other")
    if table.repeated_hour == "file_order":
        findings.add(
            (*place, "repeated_hour"),
            "'file_order' in a log of tags",
            "a tag's rows come irregularly, so that a step back of the clock need not show: "
            "say 'set_aside', and log times with an offset or in UTC",
        )


def _check_text(place: Place, text: str, findings: Findings, *, empty: bool = False) -> None:
    """Check a text that is compared with cells, which lose their surrounding blanks."""
    if (text != text.strip(" \t") or not text.isprintable() or not text) and not (
        empty and not text
    ):
        findings.add(
            place,
            repr(text),
            "no such cell is ever read: no blanks around it, no control characters, and not empty",
        )


def qualities(place: Place, table: TagsTable, findings: Findings) -> tuple[Quality, ...]:
    """Return the meaning of every declared quality code.

    Parameters
    ----------
    place, table : the source's place in the site file, and its table.
    findings : mistakes are added.
    """
    has_column = "quality_column" in table.model_fields_set
    has_codes = "quality" in table.model_fields_set
    if has_column != has_codes:
        key = "quality" if has_column else "quality_column"
        findings.add(
            (*place, key),
            "missing",
            "a quality column and the meaning of its codes belong together",
        )
    codes: QualityTable | None = table.quality
    if codes is None:
        return ()
    at: Place = (*place, "quality")
    found = [Quality(code, Use.GOOD, "") for code in codes.good or []]
    for use, given in ((Use.DOUBTFUL, codes.doubtful), (Use.BAD, codes.bad)):
        for code, meaning in (given or {}).items():
            found.append(Quality(code, use, meaning))
            if not meaning.strip():
                findings.add((*at, use.value, code), "no meaning", "say in words what it means")
    for quality in found:
        _check_text((*at, quality.use.value), quality.code, findings, empty=True)
    for code in (c for c, times in Counter(q.code for q in found).items() if times > 1):
        findings.add(at, f"'{code}' twice", "a code has one meaning")
    if all(quality.use is Use.BAD for quality in found):
        findings.add(at, "no code under which a value is used", "say which codes are good")
    return tuple(found)
