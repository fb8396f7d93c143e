"""Sources with a row per tag and time: what the site file says of them, and its mistakes."""

from __future__ import annotations

import re
import tomllib

import pytest

from meterfix.errors import SiteFileError
from meterfix.intake.site import schema, site_from_text
from meterfix.model.source import Between, LayoutKind, Origin, Quality, Quantity, Use

SECOND = 1_000_000
HEADING = "# The other layout:"


@pytest.fixture(scope="module")
def text(example_path) -> str:
    """Return the commented example with its tag source in force."""
    whole = example_path.read_text(encoding="utf-8")
    start = whole.index("# [source.historian]")
    end = whole.index("# --- Signals")
    assert HEADING in whole[:start]
    return whole[:start] + re.sub("(?m)^# ?", "", whole[start:end]) + whole[end:]


@pytest.fixture(scope="module")
def edited_tags(text):
    """Return the example with its tag source and some of its text replaced."""

    def edit(*edits: tuple[str, str]) -> str:
        changed = text
        for old, new in edits:
            assert old in changed, f"the example no longer holds {old!r}"
            changed = changed.replace(old, new, 1)
        return changed

    return edit


def test_the_tag_source_of_the_example(text):
    """Both layouts stand side by side; tags keep their names, units, codes and rules."""
    site = site_from_text(text, "site.toml")
    station, historian = site.sources
    assert station.layout.kind is LayoutKind.WIDE
    assert (station.layout.tag_column, station.layout.qualities) == ("", ())
    layout = historian.layout
    assert layout.kind is LayoutKind.TAGS
    assert (layout.tag_column, layout.value_column, layout.quality_column) == (
        "tag",
        "value",
        "quality",
    )
    assert layout.qualities == (
        Quality("GOOD", Use.GOOD, ""),
        Quality("192", Use.GOOD, ""),
        Quality("UNCERTAIN", Use.DOUBTFUL, "last usable value"),
        Quality("BAD", Use.BAD, "transmitter fault"),
        Quality("0", Use.BAD, "no connection"),
    )
    assert layout.ignored_tags == ("FIC-301.SP",)
    dp, p, t = layout.columns
    assert (dp.header, dp.quantity, dp.scale) == (
        "PDT-301.PV",
        Quantity.DIFFERENTIAL_PRESSURE,
        100.0,
    )
    assert (p.header, p.gauge, p.scale) == ("PT-301.PV", True, 1e5)
    assert (t.header, t.offset) == ("TT-301.PV", 273.15)
    assert not any(column.required for column in layout.columns)


def test_how_the_tags_of_the_example_reach_a_dp(text):
    """A tag's own rule outranks its source's; by exception is hold, silence its gap and age."""
    site = site_from_text(text, "site.toml")
    signals = {signal.name: signal for signal in site.signals}
    dp, p, t = signals["PDT-301"], signals["PT-301"], signals["TT-301"]
    assert dp.origins == (Origin("historian", "", "PDT-301.PV"),)
    assert (dp.between, dp.maximum_gap) == (Between.LINEAR, 300 * SECOND)
    assert (p.between, p.maximum_age) == (Between.HOLD, 900 * SECOND)
    assert (t.between, t.maximum_gap, t.maximum_age) == (
        Between.HOLD,
        3600 * SECOND,
        3600 * SECOND,
    )


def test_a_whole_source_that_reports_by_exception(edited_tags):
    """Its tags hold for its silence; a periodic one among them says its own rule."""
    plain = '\nbetween = "hold"                     # of tags that say nothing else\n'
    text = edited_tags(
        (plain, '\nreport = "by_exception"\nmaximum_silence = "2 h"\n'),
        ('maximum_gap = "5 min"\nmaximum_age = "15 min"               # how long', "# how long"),
        (
            'between = "linear"\n\n',
            'report = "periodic"\nbetween = "linear"\nmaximum_gap = "90 s"\n',
        ),
    )
    site = site_from_text(text, "site.toml")
    source = site.sources[1]
    assert (source.between, source.maximum_gap) == (Between.HOLD, 7200 * SECOND)
    signals = {signal.name: signal for signal in site.signals}
    dp, p, t = signals["PDT-301"], signals["PT-301"], signals["TT-301"]
    assert (dp.between, dp.maximum_gap, dp.maximum_age) == (
        Between.LINEAR,
        90 * SECOND,
        90 * SECOND,
    )
    assert (p.between, p.maximum_gap, p.maximum_age) == (Between.HOLD, *[7200 * SECOND] * 2)
    assert t.maximum_gap == 3600 * SECOND, "a tag's own silence outranks its source's"


def test_tags_are_taken_verbatim(edited_tags):
    """NA, 007 and a tag that begins like a formula may be declared, and are what they are."""
    for tag in ("NA", "007", "=SUM(A1)", "+1", "-PT", "@x", "null", "Ä 1"):
        text = edited_tags(
            ('tag."PT-301.PV"', f'tag."{tag}"'), ('tag = "PT-301.PV"', f'tag = "{tag}"')
        )
        site = site_from_text(text, "site.toml")
        assert [column.header for column in site.sources[1].layout.columns] == [
            "PDT-301.PV",
            tag,
            "TT-301.PV",
        ]


HISTORIAN = "[source.historian]"
CODES = """\
[source.historian.quality]           # every code, verbatim; a value with another is set aside
good = ["GOOD", "192"]
doubtful = { "UNCERTAIN" = "last usable value" } # used, with a flag
bad = { "BAD" = "transmitter fault", "0" = "no connection" } # set aside
"""
TAG = '[source.historian.tag."PT-301.PV"]'
MISTAKES = {
    "no tag column": (
        (('tag_column = "tag"\n', ""),),
        f"{HISTORIAN} tag_column",
        "missing",
        "this key is needed",
    ),
    "no value column": (
        (('value_column = "value"\n', ""),),
        f"{HISTORIAN} value_column",
        "missing",
        "this key is needed",
    ),
    "another layout": (
        (('layout = "tags"', 'layout = "long"'),),
        f"{HISTORIAN} layout",
        "'long'",
        "use 'wide' or 'tags'",
    ),
    "a key of the other layout": (
        (("ignored_tags = [", "ignored_tag = ["),),
        f"{HISTORIAN} ignored_tag",
        "unknown key",
        "did you mean 'ignored_tags'?",
    ),
    "a column's key": (
        (
            (
                'reference = "gauge"\n\n[source.historian.tag."TT',
                'reference = "gauge"\nrequired = true\n[source.historian.tag."TT',
            ),
        ),
        f"{TAG} required",
        "unknown key",
        "",
    ),
    "a quality column without codes": (
        (
            (
                CODES,
                "",
            ),
        ),
        f"{HISTORIAN} quality",
        "missing",
        "belong together",
    ),
    "codes without a quality column": (
        (('quality_column = "quality"', 'value_column_ = "x"'),),
        f"{HISTORIAN} quality_column",
        "missing",
        "belong together",
    ),
    "a code twice": (
        (('"0" = "no connection"', '"GOOD" = "no connection"'),),
        f"{HISTORIAN} quality",
        "'GOOD' twice",
        "one meaning",
    ),
    "no good code": (
        (
            ('good = ["GOOD", "192"]\n', ""),
            ('doubtful = { "UNCERTAIN" = "last usable value" }', "doubtful = {}"),
        ),
        f"{HISTORIAN} quality",
        "no code under which a value is used",
        "say which codes are good",
    ),
    "a bad code without a meaning": (
        (('"0" = "no connection"', '"0" = " "'),),
        "[source.historian.quality.bad] 0",
        "no meaning",
        "what it means",
    ),
    "a code with a blank before it": (
        (('"192"]', '" 192"]'),),
        "[source.historian.quality] good",
        "' 192'",
        "no such cell is ever read",
    ),
    "a tag with a blank behind it": (
        (('tag."PT-301.PV"', 'tag."PT-301.PV "'), ('tag = "PT-301.PV"', 'tag = "PT-301.PV "')),
        "[source.historian.tag] PT-301.PV",
        "'PT-301.PV '",
        "no such cell is ever read",
    ),
    "a tag that is ignored too": (
        (('ignored_tags = ["FIC-301.SP"]', 'ignored_tags = ["PT-301.PV"]'),),
        f"{HISTORIAN} ignored_tags",
        "'PT-301.PV'",
        "one or the other",
    ),
    "a column with two meanings": (
        (('value_column = "value"', 'value_column = "tag"'),),
        HISTORIAN,
        "column 'tag' named twice",
        "one meaning",
    ),
    "file order in a log of tags": (
        (('tag_column = "tag"\n', 'tag_column = "tag"\nrepeated_hour = "file_order"\n'),),
        f"{HISTORIAN} repeated_hour",
        "'file_order' in a log of tags",
        "set_aside",
    ),
    "an origin that names a column": (
        (
            (
                'from = [{ source = "historian", tag = "PT-301.PV" }]',
                'from = [{ source = "historian", column = "PT-301.PV" }]',
            ),
        ),
        "[signal.PT-301.from #1] column",
        "source 'historian' has tags",
        "name a tag",
    ),
    "an origin of a wide log that names a tag": (
        (('binding = "FT-101", column = "p"', 'binding = "FT-101", tag = "p"'),),
        "[signal.PT-101.from #1] tag",
        "source 'station' has columns",
        "name a column",
    ),
    "an origin that names neither": (
        (('{ source = "historian", tag = "PT-301.PV" }', '{ source = "historian" }'),),
        "[signal.PT-301.from #1] tag",
        "missing",
        "this key is needed",
    ),
    "an unknown tag": (
        (('tag = "PT-301.PV" }', 'tag = "PT-301" }'),),
        "[signal.PT-301.from #1] tag",
        "'PT-301' is no tag of this file",
        "did you mean 'PT-301.PV'?",
    ),
    "a tag of two signals": (
        (('tag = "TT-301.PV" }', 'tag = "PT-301.PV" }'),),
        "[signal.TT-301.from #1]",
        "tag 'PT-301.PV' in source 'historian' is read by signal 'PT-301' already",
        "a tag belongs to one signal",
    ),
    "by exception without a silence": (
        (('maximum_silence = "1 h"', ""),),
        '[source.historian.tag."TT-301.PV"] maximum_silence',
        "missing with report 'by_exception'",
        "how long",
    ),
    "a silence without by exception": (
        (('report = "by_exception"', ""),),
        '[source.historian.tag."TT-301.PV"] maximum_silence',
        "'1 h' of a tag that does not report by exception",
        "leave it out",
    ),
    "a gap beside by exception": (
        (('report = "by_exception"', 'report = "by_exception"\nmaximum_gap = "1 h" #'),),
        '[source.historian.tag."TT-301.PV"] maximum_gap',
        "'1 h' with report 'by_exception'",
        "leave it out",
    ),
    "linear by exception": (
        (('report = "by_exception"', 'report = "by_exception"\nbetween = "linear" #'),),
        '[source.historian.tag."TT-301.PV"] between',
        "'linear' with report 'by_exception'",
        "leave it out",
    ),
    "by exception over intervals": (
        (
            (
                'stamp = "instant"\nbetween = "hold"',
                'stamp = "interval_end"\ninterval = "1 min"\nbetween = "hold"',
            ),
            ('between = "linear"\n\n', "\n"),
        ),
        '[source.historian.tag."TT-301.PV"] report',
        "'by_exception' in a source with stamp 'interval_end'",
        "stamp = 'instant'",
    ),
    "a periodic source without a gap": (
        (('maximum_gap = "5 min"\nmaximum_age = "15 min"               # how', "# how"),),
        f"{HISTORIAN} maximum_gap",
        "missing",
        "this key is needed",
    ),
}


@pytest.mark.parametrize("name", MISTAKES)
def test_mistakes_in_a_tag_source(name, edited_tags, mistakes_of):
    """Each mistake is told once at its place, with what was given and what is allowed."""
    edits, place, given, allowed = MISTAKES[name]
    found = [m for m in mistakes_of(edited_tags(*edits)) if m.where == f"site.toml, {place}"]
    assert [(given in m.given, allowed in m.allowed) for m in found] == [(True, True)]


def test_a_missing_silence_of_a_source_is_told_once(edited_tags):
    """Not again for each of its tags."""
    text = edited_tags(
        ('\nbetween = "hold"                     # of', '\nreport = "by_exception" # of'),
        ('maximum_gap = "5 min"\nmaximum_age = "15 min"               # how', "# how"),
        ('between = "linear"\n\n', "\n"),
        ('report = "by_exception"              # written', "# written"),
        ('maximum_silence = "1 h"              # it', "# it"),
    )
    with pytest.raises(SiteFileError) as caught:
        site_from_text(text, "site.toml")
    assert [m.where for m in caught.value.mistakes] == [
        "site.toml, [source.historian] maximum_silence"
    ]


def test_the_schema_knows_both_layouts(text):
    """The published schema has a form for each, and says which keys each needs."""
    forms = schema()["$defs"]
    assert "column" in forms["WideTable"]["required"]
    assert {"layout", "tag_column", "value_column", "tag"} <= set(forms["TagsTable"]["required"])
    assert forms["WideTable"]["properties"]["layout"]["const"] == "wide"
    assert forms["TagsTable"]["properties"]["layout"]["const"] == "tags"
    assert not set(tomllib.loads(text)["source"]["historian"]) - set(
        forms["TagsTable"]["properties"]
    )
