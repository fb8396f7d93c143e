"""The two layouts, given the same truth: identical, or within what sampling allows."""

from __future__ import annotations

import gzip
import random

import pytest


def test_the_same_instants_give_identical_figures(hall, wide, tagged):
    """A tag log and wide logs of the same values: every stored figure is the same to the bit."""
    one, other = hall.figures(wide), hall.figures(tagged)
    assert one == other
    assert hall.day(wide, "FT-301")["mass_kg"] > 0


def by_tag(rows):
    """Order rows tag after tag, as some exports come."""
    return {"export_1.csv": sorted(rows, key=lambda row: (row.tag, row.time))}


def shuffled(rows):
    """Order rows at random."""
    rows = list(rows)
    random.Random(3).shuffle(rows)  # noqa: S311 - rows of a file, no secret
    return {"export_1.csv": rows}


def file_per_tag(rows):
    """Write a file per tag."""
    return {
        f"export_{n}.csv": [row for row in rows if row.tag == tag]
        for n, tag in enumerate(sorted({row.tag for row in rows}))
    }


def dealt_and_doubled(rows):
    """Deal rows out to three files, and give every seventh to a fourth one too."""
    rows = list(shuffled(rows)["export_1.csv"])
    files = {f"export_{n}.csv": rows[n::3] for n in range(3)}
    return {**files, "export_4.csv": rows[::7]}


@pytest.mark.parametrize("order", [by_tag, shuffled, file_per_tag, dealt_and_doubled])
def test_any_interleaving_of_tags_gives_identical_bits(order, hall, tagged, tmp_path):
    """However the rows are ordered and spread over files, every stored figure is the same."""
    files = {
        f"historian/{name}": hall.written(rows) for name, rows in order(hall.tag_rows()).items()
    }
    weather = {n: c for n, c in hall.wide_files().items() if n.startswith("weather")}
    site = hall.processed(tmp_path / "site", hall.tag_text(), {**files, **weather})
    assert hall.figures(site) == hall.figures(tagged)


def test_one_site_may_use_both(hall, wide, tmp_path):
    """Two meters by tags and two by wide logs: every figure, the balance too, is the same."""
    meters = ("FT-301", "FT-302")
    rows = hall.some(hall.tag_rows(), lambda row: row.tag in hall.tags_of(meters))
    site = hall.processed(tmp_path / "site", hall.tag_text(meters), hall.mixed_files(meters, rows))
    assert hall.figures(site) == hall.figures(wide)
    assert any(key.startswith("balance_revision") for key in hall.figures(site))


def test_a_packed_log_of_tags(hall, tagged, tmp_path):
    """A tag log packed by gzip says what it says unpacked."""
    files = hall.mixed_files(hall.METERS, hall.tag_rows())
    files["historian/export_1.csv.gz"] = gzip.compress(files.pop("historian/export_1.csv"))
    site = hall.processed(tmp_path / "site", hall.tag_text(), files)
    assert hall.figures(site) == hall.figures(tagged)
