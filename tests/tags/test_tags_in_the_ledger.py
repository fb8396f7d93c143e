"""Fates, judgements and proofs of tag logs: the whole way from a file to a stored figure."""

from __future__ import annotations

import csv
import io
from dataclasses import replace

import pytest
from click.testing import CliRunner

from meterfix.faces.commands import main


def fates(hall, site):
    """Return the fates of the historian's files by judgement."""
    delivered = {r["sequence"] for r in hall.rows_of(site, "delivery", source="historian")}
    return {
        row["judgement"]: row
        for row in hall.rows_of(site, "fate")
        if row["delivery_sequence"] in delivered
    }


def check_counts(fate):
    """Assert that lines and cells add up, and that each line that is a row is one cell."""
    parts = ("used", "set_aside", "duplicate")
    assert fate["lines_read"] == sum(fate[f"lines_{p}"] for p in (*parts, "skipped"))
    assert fate["cells_read"] == sum(fate[f"cells_{p}"] for p in parts)
    for part in ("used", "duplicate"):
        assert fate[f"lines_{part}"] == fate[f"cells_{part}"]


def test_a_tag_that_is_declared_later_is_judged_again(hall, tagged, tmp_path):
    """Unknown, its lines are set aside; declared, the stored file is read again: nothing is lost.

    The figures are then those of a site that knew the tag from the beginning.
    """
    known = hall.tag_text()
    table = hall.tag_table("TT-303")
    early = known.replace(table, "").replace(
        'from = [{ source = "historian", tag = "007" }]',
        'from = [{ source = "historian", tag = "TT-303.OLD" }]',
    )
    early = early.replace(
        '[source.historian.tag."NA"]',
        table.replace('"007"', '"TT-303.OLD"') + '\n[source.historian.tag."NA"]',
    )
    site = hall.processed(tmp_path / "site", early, hall.mixed_files(hall.METERS, hall.tag_rows()))
    count = sum(row.tag == "007" for row in hall.tag_rows())
    fate = fates(hall, site)[1]
    check_counts(fate)
    assert (fate["lines_set_aside"], fate["cells_set_aside"]) == (count, count)
    assert fate["warning"] == "unknown tags not read: '007'"
    (aside,) = hall.rows_of(site, "set_aside")
    assert (aside["cell"], bytes(aside["text"])) == ("007", b"007")
    assert f"{count} lines from this one on are kept" in aside["reason"]
    # measured is only the time without flow, for which no temperature is needed
    assert hall.day(site, "FT-303")["flow_time_s"] == 0.0
    site.write_text(known)
    hall.run(site)
    again = fates(hall, site)[2]
    check_counts(again)
    assert again["lines_set_aside"] == 0
    assert hall.figures(site) == hall.figures(tagged)
    assert hall.day(site, "FT-303")["revision"] == 2
    assert not hall.prove(site).findings


def test_a_declared_tag_that_no_signal_takes(hall, tmp_path):
    """Its cells are set aside and told once, and read as soon as a signal takes them."""
    rows = [*hall.tag_rows(), hall.Row("2026-10-01T08:00:00Z", "PT-9.PV", "1.5")]
    rows.append(replace(rows[-1], time="2026-10-01T09:00:00Z"))
    table = '[source.historian.tag."PT-9.PV"]\nquantity = "static_pressure"\nreference = "gauge"\n'
    text = hall.tag_text().replace("# --- Signals", table + 'unit = "bar"\n\n# --- Signals', 1)
    site = hall.processed(tmp_path / "site", text, hall.mixed_files(hall.METERS, rows))
    fate = fates(hall, site)[1]
    check_counts(fate)
    assert fate["lines_set_aside"] == fate["cells_set_aside"] == 2
    (aside,) = hall.rows_of(site, "set_aside")
    assert aside["reason"].startswith("no signal of the site file takes tag 'PT-9.PV'; 2 cells")
    signal = '[signal.PT-9]\nfrom = [{ source = "historian", tag = "PT-9.PV" }]\n\n[signal.PDT-202]'
    site.write_text(text.replace("[signal.PDT-202]", signal, 1))
    hall.run(site)
    assert fates(hall, site)[2]["lines_set_aside"] == 0


def test_quality_codes_reach_the_figures(hall, tagged, tmp_path):
    """Doubtful values are used with a flag; bad ones are missing; the proof stands."""

    def marked(row):
        if row.tag == hall.tag_of("TT-301") and row.time < "2026-10-01T10:00:00Z":
            return replace(row, quality="UNC")
        if row.tag == hall.tag_of("PT-302") and row.time > "2026-10-01T09:0":
            return replace(row, quality="BAD") if row.time <= "2026-10-01T09:58:00Z" else row
        return row

    rows = [marked(row) for row in hall.tag_rows()]
    bad = sum(row.quality == "BAD" for row in rows)
    assert bad == 30
    site = hall.processed(tmp_path / "site", hall.tag_text(), hall.mixed_files(hall.METERS, rows))
    fate = fates(hall, site)[1]
    check_counts(fate)
    assert fate["cells_set_aside"] == bad
    asides = hall.rows_of(site, "set_aside")
    assert {row["cell"] for row in asides} == {"PT-302.PV"}
    assert all("quality 'BAD' stands for: not connected" in row["reason"] for row in asides)
    # FT-301: 6 of 24 hours, and the interval that ends them
    share = hall.shares(site, "FT-301")["doubtful_quality"]
    assert share == pytest.approx(0.25, abs=0.002)
    assert hall.day(site, "FT-301")["mass_kg"] == hall.day(tagged, "FT-301")["mass_kg"]
    assert "doubtful_quality" not in hall.shares(site, "FT-303")
    assert "doubtful_quality" not in hall.shares(tagged, "FT-301")
    # FT-302: from 08:58 to 10:00 the pressure has no reading, and 62 minutes are no 5
    lost = (
        hall.day(tagged, "FT-302")["measured_time_s"] - hall.day(site, "FT-302")["measured_time_s"]
    )
    assert lost == 62 * 60
    assert not hall.prove(site).findings


def test_a_tag_log_that_grows(hall, tagged, tmp_path):
    """Taken in tail by tail, cut in the middle of lines, it gives the figures of the whole."""
    source = hall.SOURCE.replace('delivery = "whole"', 'delivery = "appended"')
    files = hall.mixed_files(hall.METERS, hall.tag_rows())
    content = files.pop("historian/export_1.csv")
    site = hall.new_site(tmp_path / "site", hall.tag_text(source=source), files)
    for number, part in enumerate((0.1, 0.55, 1.0)):
        end = int(len(content) * part)
        hall.lay(site, "historian/export_1.csv", content[:end], hall.WRITTEN + number)
        with hall.open_site(site) as opened:
            hall.process(opened, hall.instant(hall.NOW))
    found = [
        row
        for row in hall.rows_of(site, "fate")
        if row["delivery_sequence"]
        in {r["sequence"] for r in hall.rows_of(site, "delivery", source="historian")}
    ]
    assert len(found) == 3
    assert sum(row["lines_read"] for row in found) == content.count(b"\n")
    assert hall.figures(site) == hall.figures(tagged)
    assert not hall.prove(site).findings


def test_lines_of_one_file_that_repeat_or_contradict_each_other(hall, tagged, tmp_path):
    """A repeated line is a duplicate; two values of one tag and instant are disputed."""
    rows = list(hall.tag_rows())
    rows += rows[100:140]
    other = next(row for row in rows if row.tag == hall.tag_of("PT-301"))
    rows.append(replace(other, value="999.5"))
    site = hall.processed(tmp_path / "site", hall.tag_text(), hall.mixed_files(hall.METERS, rows))
    fate = fates(hall, site)[1]
    check_counts(fate)
    assert fate["lines_duplicate"] == 40
    (conflict,) = hall.rows_of(site, "conflict")
    assert (conflict["signal"], conflict["chosen"]) == ("PT-301", float(other.value) * 1e3)
    assert hall.shares(site, "FT-301")["disputed_reading"] > 0.0
    assert hall.day(site, "FT-301")["mass_kg"] == hall.day(tagged, "FT-301")["mass_kg"]


def test_no_tag_becomes_a_formula_on_export(hall, tmp_path):
    """Whatever unknown or declared tags look like, no cell of a CSV begins like a formula."""
    odd = "=PT+301"
    rows = [
        replace(row, tag=odd) if row.tag == hall.tag_of("PT-301") else row
        for row in hall.tag_rows()
    ]
    rows += [hall.Row("2026-10-01T08:00:00Z", tag, "1") for tag in ("=1+1", "+1", "-1", "@SUM(A1)")]
    text = hall.tag_text().replace(f'"{hall.tag_of("PT-301")}"', f'"{odd}"')
    assert text.count(odd) == 2
    site = hall.processed(tmp_path / "site", text, hall.mixed_files(hall.METERS, rows))
    assert hall.day(site, "FT-301")["mass_kg"] > 0.0
    assert fates(hall, site)[1]["lines_set_aside"] == 4
    for what in ("files", "totals", "alerts"):
        shown = CliRunner().invoke(main, ["show", what, "--site", str(site), "--format", "csv"])
        assert shown.exit_code == 0, shown.output
        cells = [cell for row in csv.reader(io.StringIO(shown.stdout)) for cell in row]
        assert cells
        assert not [cell for cell in cells if cell[:1] in {"=", "+", "-", "@"}]
