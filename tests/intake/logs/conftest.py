"""A source of logs, for the tests that look into folders and at bytes."""

from dataclasses import replace

import pytest

from meterfix.model.source import (
    Between,
    Column,
    Delivery,
    Holds,
    Layout,
    Quantity,
    RepeatedHour,
    Source,
    Stamp,
)

SECOND = 1_000_000

SOURCE = Source(
    name="station",
    folder="logs",
    file_pattern="{binding}_*.csv*",
    delivery=Delivery.WHOLE,
    stamp=Stamp.INSTANT,
    interval=None,
    between=Between.LINEAR,
    maximum_gap=300 * SECOND,
    maximum_age=300 * SECOND,
    settle_time=5 * SECOND,
    unfinished_wait=3600 * SECOND,
    precedence=1,
    layout=Layout(
        encoding="utf-8",
        delimiter=",",
        decimal_mark=".",
        thousands_mark="",
        time_columns=("time",),
        time_format="%Y-%m-%d %H:%M:%S",
        time_zone="Europe/Berlin",
        repeated_hour=RepeatedHour.FILE_ORDER,
        hour_24=False,
        columns=(
            Column(
                header="dp",
                quantity=Quantity.DIFFERENTIAL_PRESSURE,
                holds=Holds.SAMPLE,
                scale=100.0,
                offset=0.0,
                gauge=False,
                rooted=False,
                required=True,
                plausible_minimum=-1e4,
                plausible_maximum=1e5,
            ),
        ),
        ignored_columns=(),
        bad_values=(),
        final_line_end_required=True,
        earliest=946_684_800_000_000,
        size_limit=1_000_000,
    ),
)


@pytest.fixture(scope="session")
def source():
    """Return a function that gives a source with fields of it or of its layout changed."""

    def changed(layout: dict[str, object] | None = None, **fields) -> Source:
        return replace(SOURCE, layout=replace(SOURCE.layout, **(layout or {})), **fields)

    return changed
