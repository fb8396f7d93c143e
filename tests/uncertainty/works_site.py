"""The simulated works on paper: a site file in the trade's terms, and the same errors to be drawn.

A supply through a flange-tapped orifice plate feeds nine consumers, one for every other device.
Meters share two headers' pressures and temperatures, a gas, a barometric pressure, a pressure
calibrator and a bore gauge. `site_text` states what is not known; `errors` says, worked out
here by hand, how large one standard deviation of it is, and what it moves in truth.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime
from functools import cache

import numpy as np
from works_physics import COMPONENTS, Throat

from meterfix.intake.site import site_from_text
from meterfix.run.signals import SiteIndex

ROOT3 = 3.0**0.5
DESIGNS = 10
SUPPLY = "FT-1"
# table of the site file, form, pipe [mm], diameter ratio, dp range [mbar], pressure, temperature
METERS = {
    "FT-1": ("orifice", "flange", 300.0, 0.62, (0.0, 250.0), "PT-1", "TT-1"),
    "FT-2": ("orifice", "corner", 150.0, 0.60, (0.0, 100.0), "PT-2", "TT-2"),
    "FT-3": ("orifice", "D_and_D/2", 150.0, 0.62, (0.0, 100.0), "PT-2", "TT-2"),
    "FT-4": ("nozzle", "ISA_1932", 150.0, 0.52, (0.0, 100.0), "PT-2", "TT-2"),
    "FT-5": ("nozzle", "long_radius", 150.0, 0.50, (0.0, 100.0), "PT-2", "TT-2"),
    "FT-6": ("nozzle", "Venturi_nozzle", 150.0, 0.52, (0.0, 100.0), "PT-3", "TT-3"),
    "FT-7": ("venturi_tube", "as_cast", 150.0, 0.50, (0.0, 100.0), "PT-3", "TT-3"),
    "FT-8": ("venturi_tube", "machined", 150.0, 0.45, (0.0, 100.0), "PT-8", "TT-2"),
    "FT-9": ("venturi_tube", "rough_welded", 220.0, 0.43, (-10.0, 100.0), "PT-3", "TT-3"),
    "FT-10": ("venturi_tube", "machined", 150.0, 0.45, (0.0, 100.0), "PT-3", "TT-3"),
}
CONSUMERS = tuple(name for name in METERS if name != SUPPLY)
ROOTED, DOWNSTREAM, SHORT, ABOVE_ZERO = "FT-4", "FT-8", "FT-3", "FT-9"
CALIBRATED, CERTIFICATE, CERTIFIED, CERTIFIED_UNCERTAINTY = "FT-10", "K-204", 0.9938, 0.0015
WITHOUT_STATED_DIAMETERS = "FT-5"
PRESSURES = {"PT-1": 16e5, "PT-2": 6e5, "PT-3": 6e5, "PT-8": 6e5}
"""Upper range values [Pa]; from 0 up, gauge."""
TEMPERATURES = ("TT-1", "TT-2", "TT-3")
CALIBRATION = "2026-01-10T10:00:00+01:00"
CALIBRATED_AT = datetime.fromisoformat(CALIBRATION).timestamp()
CUT_OFF = 100.0
ATMOSPHERE, VISCOSITY, EXPONENT, STATED_VALUE = 100_800.0, 1.08e-5, 1.30, 38.9e6
BY_GAUGE = ("FT-1", "FT-2", "FT-3", "FT-4")
BY_CALIBRATOR = ("PDT-1", "PDT-2", "PDT-3", "PDT-4", "PDT-5", "PDT-6")
FRACTION_SPREAD = {
    "methane": 0.10,
    "nitrogen": 0.05,
    "carbon_dioxide": 0.04,
    "ethane": 0.08,
    "propane": 0.03,
    "n_butane": 0.01,
}
"""Percent by volume, k = 2."""
CORRELATION = -0.6
"""Of methane and ethane."""
NOISE = {
    **{f"P{name.replace('F', 'D')}": 0.0015 / 2.0 * 1e4 for name in METERS},
    "PDT-1": 0.0015 / 2.0 * 2.5e4,
    "PDT-9": 0.0015 / 2.0 * 1.1e4,
    **{name: 0.0003 / 2.0 * upper for name, upper in PRESSURES.items()},
    **dict.fromkeys(TEMPERATURES, 0.1),
}
"""Standard deviation of one reading [Pa], [K]; as `repeatability` states it."""

GROUPS = {
    "dp zero": r"PDT-\d+ zero",
    "dp span": r"PDT-\d+ span",
    "dp zero, ambient temperature": r"PDT-\d+ zero, ambient temperature",
    "dp drift": r"PDT-\d+ zero drift",
    "static pressure zero": r"PT-\d zero",
    "static pressure span": r"PT-\d span",
    "temperature": r"TT-\d zero",
    "atmospheric pressure": r"atmospheric pressure",
    "bore": r"FT-\d+ bore.*",
    "pipe diameter": r"FT-\d+ pipe diameter.*",
    "discharge coefficient": r"FT-\d+ discharge coefficient, .*|certificate K-204",
    "expansibility": r"FT-\d+ expansibility, .*",
    "line density": r"natural_gas line density, AGA8 DETAIL",
    "base density": r"natural_gas base density, AGA8 DETAIL",
    "composition": r"natural_gas composition: .*",
    "calorific value": r"natural_gas calorific value(, ISO 6976:2016)?",
    "dynamic viscosity": r"natural_gas dynamic viscosity",
    "isentropic exponent": r"natural_gas isentropic exponent",
    "shared calibrator and gauge": r"pressure calibrator PC-1|bore gauge BG-1",
}
"""Names of the statement's sources, by what is made five times as large together."""
NOISE_GROUP = "noise of readings"
RECTANGULAR = ("dp zero, ambient temperature", "dp drift", "atmospheric pressure")


@dataclass(frozen=True)
class Error:
    """An independent cause: what one standard deviation of it moves in truth."""

    group: str
    acts: tuple[tuple[str, str, float], ...]
    """Effect, subject, size in SI or relative; a drift's size is per second."""


@dataclass(frozen=True)
class Design:
    """What is written of one works; the sites of a campaign take turns with the designs."""

    throats: dict[str, Throat]
    """As stated; diameters [m] as floats."""
    composition: dict[str, float]
    computed_value: bool
    """The calorific value is by ISO 6976, not stated."""


def transmitter(meter):
    return f"P{meter.replace('F', 'D')}"


@cache
def design(number: int) -> Design:
    """Return design `number`, diameters and composition varied by a fixed seed."""
    draw = np.random.default_rng([7, number])
    throats = {}
    for name, (_, form, pipe, ratio, *_rest) in METERS.items():
        D = round(pipe * draw.uniform(0.97, 1.03), 2)
        throats[name] = Throat(
            form,
            round(D * ratio * draw.uniform(0.96, 1.04), 3) / 1000.0,
            D / 1000.0,
            calibrated=CERTIFIED if name == CALIBRATED else None,
            certificate_uncertainty=CERTIFIED_UNCERTAINTY,
            short_straight_lengths=name == SHORT,
        )
    lesser = {
        "nitrogen": (0.6, 3.0),
        "carbon_dioxide": (0.5, 2.0),
        "ethane": (2.5, 6.0),
        "propane": (0.7, 1.5),
        "n_butane": (0.25, 0.5),
    }
    percent = {name: round(draw.uniform(*limits), 3) for name, limits in lesser.items()}
    percent = {"methane": round(100.0 - sum(percent.values()), 3), **percent}
    return Design(throats, {name: percent[name] / 100.0 for name in COMPONENTS}, number % 2 == 1)


def errors(of: Design) -> tuple[Error, ...]:
    """Return every independent cause of a design, in the same order for all of them."""
    found = []

    def add(group, *acts):
        found.append(Error(group, acts))

    for meter, (*_rest, (low, high), _, _) in METERS.items():
        signal, span = transmitter(meter), 100.0 * (high - low)
        add("dp zero", ("dp zero", signal, 0.0008 * span / 2.0))
        if meter == ABOVE_ZERO:  # of span, nothing at the lower range value
            add(
                "dp span",
                ("dp span", signal, 0.0012 / 2.0),
                ("dp zero", signal, -0.0012 / 2.0 * 100.0 * low),
            )
        else:
            add("dp span", ("dp span", signal, 0.0012 / 2.0))
        add(
            "dp zero, ambient temperature",
            ("dp zero", signal, 0.0003 * span * 20.0 / 10.0 / ROOT3),
        )
        limit = 62_000.0 if meter == SUPPLY else 25_000.0
        add("dp drift", ("dp drift", signal, 0.0012 * limit / ROOT3 / (5.0 * 365.25 * 86_400.0)))
    for signal, upper in PRESSURES.items():
        add("static pressure zero", ("p zero", signal, 0.0006 * upper / 2.0))
        add("static pressure span", ("p span", signal, 0.0008 / 2.0))
    for signal in TEMPERATURES:
        add("temperature", ("T zero", signal, 0.25))
    add("atmospheric pressure", ("atmosphere", "site", 2000.0 / ROOT3))
    for meter in METERS:
        stated = meter != WITHOUT_STATED_DIAMETERS
        add("bore", ("bore", meter, (0.0008 if stated else 0.0007) / 2.0))
        add("pipe diameter", ("pipe", meter, (0.003 if stated else 0.004) / 2.0))
        add("discharge coefficient", ("coefficient", meter, 1.0))
        add("expansibility", ("expansibility", meter, 1.0))
    add("line density", ("line density", "gas", 0.0005))
    add("base density", ("base density", "gas", 0.0005))
    covariance = np.diag([(0.01 * FRACTION_SPREAD[name] / 2.0) ** 2 for name in COMPONENTS])
    i, j = COMPONENTS.index("methane"), COMPONENTS.index("ethane")
    covariance[i, j] = covariance[j, i] = CORRELATION * (covariance[i, i] * covariance[j, j]) ** 0.5
    for column in np.linalg.cholesky(covariance).T:
        add("composition", *(("fraction", n, s) for n, s in zip(COMPONENTS, column, strict=True)))
    stated = 0.0 if of.computed_value else 0.005 / 2.0
    add("calorific value", ("calorific value", "gas", stated))
    for name in COMPONENTS:
        by_table = 1.0 if of.computed_value else 0.0
        add("calorific value", ("table heat", name, by_table))
        add("calorific value", ("table factor", name, by_table))
    add("dynamic viscosity", ("viscosity", "gas", 0.01))
    add("isentropic exponent", ("exponent", "gas", 0.01))
    add(
        "shared calibrator and gauge",
        *(("p span", signal, 0.0005 / 2.0) for signal in PRESSURES),
        *(("dp span", signal, 0.0006 / 2.0) for signal in BY_CALIBRATOR),
    )
    add("shared calibrator and gauge", *(("bore", meter, 0.0005 / 2.0) for meter in BY_GAUGE))
    return tuple(found)


# --- the site file ---------------------------------------------------------------------------


def site_text(of: Design) -> str:
    """Return the site file of a design."""
    return "\n".join(
        [_SITE, _log("station", "dp"), _log("kilns", "root")]
        + [_dp_signal(meter) for meter in METERS]
        + [_pressure_signal(name, upper) for name, upper in PRESSURES.items()]
        + [_temperature_signal(name) for name in TEMPERATURES]
        + [_gas(of)]
        + [_meter(name, of.throats[name]) for name in METERS]
        + [_SHARED]
    )


@cache
def index_of(number: int) -> SiteIndex:
    """Return design `number` as the site file's reader understands it."""
    return SiteIndex(site_from_text(site_text(design(number)), "site.toml"))


_SITE = f"""
[site]
name = "Simulated works"
time_zone = "Europe/Berlin"
gas_day_start = "06:00"
database = "sqlite:///works.sqlite"
archive = "archive"
base_conditions = {{ pressure = "101.325 kPa", temperature = "15 degC" }}

[site.atmospheric_pressure]
value = "{ATMOSPHERE} Pa"
uncertainty = {{ size = "20 mbar", distribution = "rectangular" }}

[contract]
currency = "EUR"
provisional_after = "12 h"
energy = {{ way = "volume", kind = "gross", combustion_reference_temperature = "15 degC" }}
"""


def _log(source, header):
    rooted = header == "root"
    return f"""
[source.{source}]
folder = "{source}"
files = "{{binding}}_*.csv"
delivery = "whole"
stamp = "instant"
between = "linear"
maximum_gap = "4 h"
delimiter = ","
decimal_mark = "."
time_columns = ["time"]
time_format = "%Y-%m-%dT%H:%M:%SZ"
time_zone = "UTC"

[source.{source}.column.dp]
quantity = "differential_pressure"
unit = "{"1" if rooted else "Pa"}"
holds = "sample"
root = "{"taken" if rooted else "not_taken"}"

[source.{source}.column.p]
quantity = "static_pressure"
unit = "Pa"
reference = "gauge"

[source.{source}.column.t]
quantity = "temperature"
unit = "K"
"""


def _dp_signal(meter):
    name = transmitter(meter)
    low, high = METERS[meter][4]
    source = "kilns" if meter == ROOTED else "station"
    of_span = "of span" if meter == ABOVE_ZERO else "of reading"
    limit = "620 mbar" if meter == SUPPLY else "250 mbar"
    return f"""
[signal.{name}]
from = [{{ source = "{source}", binding = "{name}", column = "dp" }}]
range = ["{low} mbar", "{high} mbar"]
upper_range_limit = "{limit}"
repeatability = {{ size = "0.15 % of span", k = 2 }}

[[signal.{name}.uncertainty]]
acts_on = "zero"
size = "0.08 % of span"
k = 2

[[signal.{name}.uncertainty]]
acts_on = "span"
size = "0.12 % {of_span}"
k = 2

[[signal.{name}.uncertainty]]
acts_on = "zero"
size = "0.03 % of span per 10 K"
over = "20 K"
distribution = "rectangular"

[[signal.{name}.uncertainty]]
acts_on = "zero"
size = "0.12 % of upper range limit per 5 years"
since = "{CALIBRATION}"
distribution = "rectangular"
"""


def _pressure_signal(name, upper):
    return f"""
[signal.{name}]
from = [{{ source = "station", binding = "{name}", column = "p" }}]
range = ["0 bar", "{upper / 1e5} bar"]
repeatability = {{ size = "0.03 % of span", k = 2 }}
uncertainty = [
  {{ acts_on = "zero", size = "0.06 % of span", k = 2 }},
  {{ acts_on = "span", size = "0.08 % of reading", k = 2 }},
]
"""


def _temperature_signal(name):
    return f"""
[signal.{name}]
from = [{{ source = "station", binding = "{name}", column = "t" }}]
repeatability = {{ size = "0.2 K", k = 2 }}
uncertainty = [{{ acts_on = "zero", size = "0.5 K", k = 2 }}]
"""


def _gas(of):
    value = f'value = "{STATED_VALUE / 1e6} MJ/m3"\nuncertainty = {{ size = "0.5 %", k = 2 }}'
    if of.computed_value:
        value = 'method = "ISO 6976:2016"\nbasis = "volume"'
    fractions = "\n".join(f"{name} = {100.0 * x:.3f}" for name, x in of.composition.items())
    spread = "\n".join(f"{name} = {size}" for name, size in FRACTION_SPREAD.items())
    return f"""
[gas.natural_gas]
line_model = "aga8_detail"
base_model = "aga8_detail"
dynamic_viscosity = "{1000.0 * VISCOSITY} mPa s"
isentropic_exponent = {EXPONENT}
dynamic_viscosity_uncertainty = {{ size = "2 %", k = 2 }}
isentropic_exponent_uncertainty = {{ size = "2 %", k = 2 }}

[gas.natural_gas.calorific_value]
{value}
kind = "gross"
combustion_reference_temperature = "15 degC"
volume_base = {{ pressure = "101.325 kPa", temperature = "15 degC" }}

[[gas.natural_gas.composition]]
basis = "mole"
unit = "%"
sum_tolerance = "0.1 %"
{fractions}

[gas.natural_gas.composition.uncertainty]
k = 2
{spread}
correlation = [{{ between = ["methane", "ethane"], coefficient = {CORRELATION} }}]
"""


def _meter(name, throat):
    table, form, *_rest, pressure, temperature = METERS[name]
    lines = [
        f"[meter.{name}]",
        'description = "simulated"',
        'gas = "natural_gas"',
        f'differential_pressure = "{transmitter(name)}"',
        f'static_pressure = "{pressure}"',
        f'temperature = "{temperature}"',
        f'static_pressure_tapping = "{"downstream" if name == DOWNSTREAM else "upstream"}"',
        'thermometer = "upstream"',
        f'low_flow_cut_off = "{CUT_OFF} Pa"',
        f"[meter.{name}.{table}]",
        f'{"tappings" if table == "orifice" else "form"} = "{form}"',
        f'bore = "{1000.0 * throat.bore:.3f} mm"',
        f'pipe_diameter = "{1000.0 * throat.pipe:.2f} mm"',
        'bore_expansion = "16e-6 / K"',
        'pipe_expansion = "11e-6 / K"',
        'reference_temperature = "20 degC"',
    ]
    if name != WITHOUT_STATED_DIAMETERS:
        lines.append('bore_uncertainty = { size = "0.08 %", k = 2 }')
        lines.append('pipe_diameter_uncertainty = { size = "0.3 %", k = 2 }')
    if throat.short_straight_lengths:
        lines.append("short_straight_lengths = true")
    if throat.calibrated is not None:
        lines.append(
            f'discharge_coefficient = {{ value = {CERTIFIED}, certificate = "{CERTIFICATE}", '
            f'uncertainty = {{ size = "{200.0 * CERTIFIED_UNCERTAINTY} %", k = 2 }} }}'
        )
    return "\n".join(lines)


_SHARED = (
    """
[envelope.works]
description = "all gas"
"""
    + f'in = ["{SUPPLY}"]\nout = {list(CONSUMERS)}'.replace("'", '"')
    + """
vented = []
quantities = ["mass", "base_volume", "energy"]
tolerance = "1 %"

[uncertainty."pressure calibrator PC-1"]
kind = "calibration device"
k = 2
part = [
"""
    + "\n".join(
        [
            f'  {{ signal = "{n}", acts_on = "span", size = "0.05 % of reading" }},'
            for n in PRESSURES
        ]
        + [
            f'  {{ signal = "{n}", acts_on = "span", size = "0.06 % of reading" }},'
            for n in BY_CALIBRATOR
        ]
    )
    + """
]

[uncertainty."bore gauge BG-1"]
kind = "other common cause"
k = 2
part = [
"""
    + "\n".join(f'  {{ meter = "{n}", acts_on = "bore", size = "0.05 %" }},' for n in BY_GAUGE)
    + "\n]\n"
)
