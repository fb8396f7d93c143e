"""The site file of the simulated works, written from the works' own description."""

from __future__ import annotations

from datetime import date

from meterfix.demo.logs import air_header
from meterfix.demo.plate import Plate
from meterfix.demo.transmitters import DP, PRESSURE, TEMPERATURE
from meterfix.demo.works import (
    AFTER,
    AIR,
    BALANCES,
    BEFORE,
    COMPRESSED_AIR,
    KILN_CONTROL,
    NATURAL_GAS,
    RUNS,
    SITE_NAME,
    SUPPLY,
    TIME_ZONE,
    WORKS,
    ZERO_CELSIUS,
    ZONE,
    Feed,
    Month,
    Run,
)
from meterfix.model.calendar import from_microseconds

_CALORIFIC_VALUES = ("38.74 MJ/m3", "38.95 MJ/m3")
"""Gross, 15 degC, of the two compositions, by hand from ISO 6976:2016, Tables 2 and 3."""

_ISO_TIME = '["time"]\ntime_format = "%Y-%m-%dT%H:%M:%SZ"\ntime_zone = "UTC"'
_BAD_VALUES = 'bad_values = { "BAD" = "transmitter fault", "-9999" = "no reading" }'


def site_text(month: Month) -> str:
    """Return the site file of the works for a month; TOML, ending in a line end."""
    parts = [
        _head(month),
        _run_source(SUPPLY, "dp", "the supply station's own loggers"),
        _run_source(WORKS, "dp", "the works' loggers"),
        _run_source(KILN_CONTROL, "q", "the shuttle kiln's controller takes the root itself"),
        _air_source(),
        _weather_source(),
        "# --- Signals: one measuring point each "
        + "-" * 58
        + "\n\n"
        + "\n\n".join(_signals(run, month) for run in RUNS),
        _gases(month),
        "# --- Meters " + "-" * 85 + "\n\n" + "\n\n".join(_meter(run, month) for run in RUNS),
        "# --- Envelopes: in = out + vented + imbalance " + "-" * 51 + "\n\n" + _envelopes(),
    ]
    return "\n\n".join(parts) + "\n"


def _instant(instant: int) -> str:
    return from_microseconds(instant).astimezone(ZONE).isoformat()


def _head(month: Month) -> str:
    day: date = month.first_day
    return f"""\
# The example site: an invented tile works and its month {day:%Y-%m}. Its logs are simulated; no
# real place, company or meter is meant. config/site.toml explains every key.
# Gas under pressure and flammable gas are dangerous: isolating a transmitter or exchanging a
# plate is work for authorised people under the site's own rules. The results are for
# accounting, never for safety functions.

[site]
name = "{SITE_NAME}"
time_zone = "{TIME_ZONE}"
gas_day_start = "06:00"
database = "sqlite:///meterfix.sqlite"
archive = "archive"

[site.base_conditions]
pressure = "101.325 kPa"
temperature = "15 degC"

[site.atmospheric_pressure]
barometer = "BT-001"

[contract]
currency = "EUR"
price = "38.50 per MWh"
provisional_after = "12 h"

[contract.energy]
way = "volume"
kind = "gross"
combustion_reference_temperature = "15 degC"

# --- Logs {"-" * 87}"""


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
from = [{{ source = "weather", column = "barometer" }}]"""


def _signals(run: Run, month: Month) -> str:
    feed = run.feed

    def origin(kind: str, header: str) -> str:
        if feed is COMPRESSED_AIR:
            return f'[{{ source = "{feed.name}", column = "{air_header(kind, run.name)}" }}]'
        return f'[{{ source = "{feed.name}", binding = "{run.name}", column = "{header}" }}]'

    excluded = [
        f'  {{ from = "{_instant(out.start)}", to = "{_instant(out.end)}", '
        f'reason = "{out.reason}" }},'
        for out in month.out_of_service
        if out.run == run.name
    ]
    lines = [
        f"[signal.PDT-{run.number}]",
        f"from = {origin(DP, 'q' if feed.dp_unit == '%' else 'dp')}",
        f'range = ["0 mbar", "{run.dp_range / 100.0:g} mbar"]',
    ]
    if excluded:
        lines += ["excluded = [", *excluded, "]"]
    low, high = (kelvin - ZERO_CELSIUS for kelvin in run.temperature_range)
    lines += [
        "",
        f"[signal.PT-{run.number}]",
        f"from = {origin(PRESSURE, 'p')}",
        f'range = ["0 bar", "{run.pressure_range / 1e5:g} bar"]',
        "",
        f"[signal.TT-{run.number}]",
        f"from = {origin(TEMPERATURE, 't')}",
        f'range = ["{low:g} degC", "{high:g} degC"]',
    ]
    return "\n".join(lines)


def _composition(fractions: dict[str, float], since: str) -> str:
    lines = ["[[gas.natural_gas.composition]]"]
    if since:
        lines.append(f'since = "{since}"')
    lines += ['basis = "mole"', 'unit = "%"']
    lines += [f"{name} = {100.0 * x:.2f}" for name, x in fractions.items()]
    return "\n".join(lines)


def _calorific(value: str, since: str) -> str:
    lines = ["[[gas.natural_gas.calorific_value]]"]
    if since:
        lines.append(f'since = "{since}"')
    lines += [
        f'value = "{value}"',
        'kind = "gross"',
        'combustion_reference_temperature = "15 degC"',
        'volume_base = { pressure = "101.325 kPa", temperature = "15 degC" }',
    ]
    return "\n".join(lines)


def _gases(month: Month) -> str:
    change = _instant(month.composition_change)
    return f"""\
# --- Gases {"-" * 86}

[gas.natural_gas]
line_model = "aga8_detail"
base_model = "aga8_detail"
dynamic_viscosity = "{NATURAL_GAS.dynamic_viscosity * 1e3:.4f} mPa s"
isentropic_exponent = {NATURAL_GAS.isentropic_exponent}

{_calorific(_CALORIFIC_VALUES[0], "")}

{_calorific(_CALORIFIC_VALUES[1], change)}

{_composition(BEFORE, "")}

{_composition(AFTER, change)}

[gas.compressed_air]                   # dry
line_model = "reference_equation"
base_model = "reference_equation"
dynamic_viscosity = "{AIR.dynamic_viscosity * 1e3:.4f} mPa s"
isentropic_exponent = {AIR.isentropic_exponent}

[[gas.compressed_air.composition]]
basis = "mole"
unit = "%"
air = 100.0"""


def _meter(run: Run, month: Month) -> str:
    plate: Plate = run.plate
    text = f"""\
[meter.{run.name}]
description = "{run.description}"
gas = "{run.medium.name}"
differential_pressure = "PDT-{run.number}"
static_pressure = "PT-{run.number}"
temperature = "TT-{run.number}"
static_pressure_tapping = "{"downstream" if run.pressure_downstream else "upstream"}"
thermometer = "{"downstream" if run.thermometer_downstream else "upstream"}"
low_flow_cut_off = "{run.cut_off / 100.0:g} mbar"

[meter.{run.name}.orifice]
tappings = "{plate.tappings}"
bore = "{plate.bore * 1e3:.3f} mm"
pipe_diameter = "{plate.pipe_diameter * 1e3:.3f} mm"
bore_expansion = "{plate.bore_expansion * 1e6:g}e-6 / K"
pipe_expansion = "{plate.pipe_expansion * 1e6:g}e-6 / K"
reference_temperature = "{plate.reference_temperature - ZERO_CELSIUS:g} degC\""""
    if run.new_bore is not None:
        text += f"""

[[meter.{run.name}.change]]                # the plate was exchanged
since = "{_instant(month.plate_exchange)}"
orifice = {{ bore = "{run.new_bore * 1e3:.3f} mm" }}"""
    return text


def _envelopes() -> str:
    def names(meters: tuple[str, ...]) -> str:
        return "[" + ", ".join(f'"{name}"' for name in meters) + "]"

    return "\n\n".join(
        f"""\
[envelope.{balance.name}]
description = "{balance.description}"
in = {names(balance.inflow)}
out = {names(balance.outflow)}
vented = []
quantities = {names(balance.quantities)}
tolerance = "1.5 %\""""
        for balance in BALANCES
    )
