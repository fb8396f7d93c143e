"""The sources of logs in the site file of the simulated works."""

from __future__ import annotations

from meterfix.demo.flaws import BAD_CODES, DOUBTFUL_CODE, GOOD_CODE
from meterfix.demo.logs import air_header, tag_of
from meterfix.demo.transmitters import BAROMETER, REPEATABILITY, STATED_ACCURACY
from meterfix.demo.works import (
    COMPRESSED_AIR,
    DP,
    HISTORIAN,
    KILN_CONTROL,
    PRESSURE,
    RUNS,
    SUPPLY,
    TAG_PRESSURE_GAP_S,
    TAG_SILENCE_S,
    TEMPERATURE,
    TIME_ZONE,
    WORKS,
    Feed,
)

_ISO_TIME = '["time"]\ntime_format = "%Y-%m-%dT%H:%M:%SZ"\ntime_zone = "UTC"'
_BAD_VALUES = 'bad_values = { "BAD" = "transmitter fault", "-9999" = "no reading" }'


def sources_text() -> str:
    """Return the sources' part of the site file."""
    return "\n\n".join(
        (
            _run_source(SUPPLY, "dp", "the supply station's own loggers"),
            _run_source(WORKS, "dp", "the works' loggers"),
            _run_source(KILN_CONTROL, "q", "the shuttle kiln's controller takes the root itself"),
            _historian_source(),
            _air_source(),
            _weather_source(),
        )
    )


def _gap(seconds: int) -> str:
    return f'"{seconds // 60} min"'


def _run_source(feed: Feed, dp_header: str, comment: str) -> str:
    if feed.dp_unit == "%":
        dp_lines = 'unit = "%"\nroot = "taken"                         # % of full-scale flow'
    else:
        dp_lines = f'unit = "{feed.dp_unit}"\nroot = "not_taken"'
    return f"""\
[source.{feed.name}]                        # {comment}
folder = "logs/{feed.name}"
files = "{{binding}}_*.csv.gz"
delivery = "whole"
stamp = "instant"
between = "{feed.between}"
maximum_gap = {_gap(feed.maximum_gap_s)}
delimiter = ","
decimal_mark = "."
time_columns = {_ISO_TIME}
final_line_end = "required"
{_BAD_VALUES}

[source.{feed.name}.column.{dp_header}]
quantity = "differential_pressure"
{dp_lines}

[source.{feed.name}.column.p]
quantity = "static_pressure"
unit = "{feed.pressure_unit}"
reference = "gauge"

[source.{feed.name}.column.t]
quantity = "temperature"
unit = "degC\""""


def _historian_source() -> str:
    feed = HISTORIAN
    lines = [
        f"""\
[source.{feed.name}]                     # a row per tag and time, the tags at rates of their own
layout = "tags"
folder = "logs/{feed.name}"
files = "export_*.csv.gz"
delivery = "whole"
stamp = "instant"
between = "{feed.between}"
maximum_gap = {_gap(feed.maximum_gap_s)}
delimiter = ","
decimal_mark = "."
time_columns = {_ISO_TIME}
final_line_end = "required"
tag_column = "tag"
value_column = "value"
quality_column = "quality"

[source.{feed.name}.quality]
good = ["{GOOD_CODE}"]
doubtful = {{ "{DOUBTFUL_CODE}" = "last usable value" }}
bad = {{ "{BAD_CODES[0]}" = "no connection", "{BAD_CODES[1]}" = "communication lost" }}"""
    ]
    lines += [
        f"""\
[source.{feed.name}.tag."{tag_of(DP, run)}"]
quantity = "differential_pressure"
unit = "{feed.dp_unit}"

[source.{feed.name}.tag."{tag_of(PRESSURE, run)}"]   # every 10 min
quantity = "static_pressure"
unit = "{feed.pressure_unit}"
reference = "gauge"
maximum_gap = {_gap(TAG_PRESSURE_GAP_S)}

[source.{feed.name}.tag."{tag_of(TEMPERATURE, run)}"]   # outside its dead band, or half an hour old
quantity = "temperature"
unit = "degC"
report = "by_exception"
maximum_silence = {_gap(TAG_SILENCE_S)}"""
        for run in RUNS
        if run.feed is feed
    ]
    return "\n\n".join(lines)


def _air_source() -> str:
    feed = COMPRESSED_AIR
    columns = []
    for run in RUNS:
        if run.feed is not feed:
            continue
        columns.append(
            f"""\
[source.{feed.name}.column."{air_header(DP, run.name)}"]
quantity = "differential_pressure"
unit = "{feed.dp_unit}"

[source.{feed.name}.column."{air_header(PRESSURE, run.name)}"]
quantity = "static_pressure"
unit = "{feed.pressure_unit}"
reference = "gauge"

[source.{feed.name}.column."{air_header(TEMPERATURE, run.name)}"]
quantity = "temperature"
unit = "degC\""""
        )
    head = f"""\
[source.{feed.name}]                # one file a day for all air meters, in local time
folder = "logs/{feed.name}"
files = "air_*.csv.gz"
delivery = "whole"
stamp = "instant"
between = "{feed.between}"
maximum_gap = {_gap(feed.maximum_gap_s)}
delimiter = ";"
decimal_mark = ","
time_columns = ["date", "clock"]
time_format = "%d.%m.%Y %H:%M:%S"
time_zone = "{TIME_ZONE}"
repeated_hour = "file_order"           # when clocks go back, the hour's first run comes first
final_line_end = "required"
{_BAD_VALUES}"""
    return "\n\n".join([head, *columns])


def _weather_source() -> str:
    return f"""\
[source.weather]                       # the barometer, hourly
folder = "logs/weather"
files = "barometer_*.csv"
delivery = "whole"
stamp = "instant"
between = "linear"
maximum_gap = "150 min"
delimiter = ","
decimal_mark = "."
time_columns = {_ISO_TIME}
final_line_end = "required"

[source.weather.column.barometer]
quantity = "barometric_pressure"
unit = "hPa"

[signal.BT-001]
from = [{{ source = "weather", column = "barometer" }}]
repeatability = {{ size = "{REPEATABILITY[BAROMETER]:g} Pa", k = 1 }}
uncertainty = [{{ acts_on = "zero", size = "{STATED_ACCURACY[BAROMETER][0]:g} Pa", k = 2 }}]"""
