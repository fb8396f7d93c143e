"""The site file of the simulated works, written from the works' own description."""

from __future__ import annotations

from datetime import date

from meterfix.demo.device import Device
from meterfix.demo.flow import VENTURI_PRESSURE_LOSS
from meterfix.demo.logs import air_header, tag_of
from meterfix.demo.sitefile_sources import sources_text
from meterfix.demo.transmitters import (
    CALIBRATOR,
    CALIBRATOR_SPAN,
    REPEATABILITY,
    STATED_ACCURACY,
)
from meterfix.demo.works import (
    AFTER,
    AIR,
    BALANCES,
    BEFORE,
    COMPRESSED_AIR,
    DP,
    NATURAL_GAS,
    PRESSURE,
    RUNS,
    SITE_NAME,
    TAG_DEAD_BAND_K,
    TEMPERATURE,
    TIME_ZONE,
    ZERO_CELSIUS,
    ZONE,
    Month,
    Run,
)
from meterfix.model.calendar import from_microseconds

_ANALYSIS = {
    # component: repeatability of the chromatograph, its calibration gas; both [%] at k = 2
    "methane": (0.06, 0.05),
    "nitrogen": (0.02, -0.01),
    "carbon_dioxide": (0.02, -0.01),
    "ethane": (0.03, -0.02),
    "propane": (0.015, -0.01),
    "isobutane": (0.004, 0.0),
    "n_butane": (0.004, 0.0),
    "n_pentane": (0.003, 0.0),
}


def site_text(month: Month) -> str:
    """Return the site file of the works for a month; TOML, ending in a line end."""
    parts = [
        _head(month),
        sources_text(),
        "# --- Signals: one measuring point each "
        + "-" * 58
        + "\n\n"
        + "\n\n".join(_signals(run, month) for run in RUNS),
        _gases(month),
        "# --- Meters " + "-" * 85 + "\n\n" + "\n\n".join(_meter(run, month) for run in RUNS),
        "# --- Envelopes: in = out + vented + imbalance " + "-" * 51 + "\n\n" + _envelopes(),
        "# --- Causes that several share " + "-" * 66 + "\n\n" + _shared_causes(),
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


def _origin(run: Run, kind: str, header: str) -> str:
    feed = run.feed
    if feed.tags:
        return f'[{{ source = "{feed.name}", tag = "{tag_of(kind, run)}" }}]'
    if feed is COMPRESSED_AIR:
        return f'[{{ source = "{feed.name}", column = "{air_header(kind, run.name)}" }}]'
    return f'[{{ source = "{feed.name}", binding = "{run.name}", column = "{header}" }}]'


def _accuracy(run: Run, kind: str) -> list[str]:
    """Return what is stated of a transmitter: the figures that its errors are drawn from."""
    zero, span = STATED_ACCURACY[kind]
    noise = REPEATABILITY[kind]
    if kind == TEMPERATURE:
        entries = [f'  {{ acts_on = "zero", size = "{zero:g} K", k = 2 }},']
        if run.feed.tags:
            entries.append(
                f'  {{ acts_on = "zero", size = "{TAG_DEAD_BAND_K:g} K", '
                f'distribution = "rectangular", name = "{kind}-{run.number} dead band" }},'
            )
        return [
            f'repeatability = {{ size = "{noise:g} K", k = 1 }}',
            "uncertainty = [",
            *entries,
            "]",
        ]
    return [
        f'repeatability = {{ size = "{noise * 100.0:g} % of span", k = 1 }}',
        "uncertainty = [",
        f'  {{ acts_on = "zero", size = "{zero * 100.0:g} % of span", k = 2 }},',
        f'  {{ acts_on = "span", size = "{span * 100.0:g} % of reading", k = 2 }},',
        "]",
    ]


def _signals(run: Run, month: Month) -> str:
    excluded = [
        f'  {{ from = "{_instant(out.start)}", to = "{_instant(out.end)}", '
        f'reason = "{out.reason}" }},'
        for out in month.out_of_service
        if out.run == run.name
    ]
    lines = [
        f"[signal.PDT-{run.number}]",
        f"from = {_origin(run, DP, 'q' if run.feed.dp_unit == '%' else 'dp')}",
        f'range = ["0 mbar", "{run.dp_range / 100.0:g} mbar"]',
    ]
    if excluded:
        lines += ["excluded = [", *excluded, "]"]
    low, high = (kelvin - ZERO_CELSIUS for kelvin in run.temperature_range)
    lines += [
        *_accuracy(run, DP),
        "",
        f"[signal.PT-{run.number}]",
        f"from = {_origin(run, PRESSURE, 'p')}",
        f'range = ["0 bar", "{run.pressure_range / 1e5:g} bar"]',
        *_accuracy(run, PRESSURE),
        "",
        f"[signal.TT-{run.number}]",
        f"from = {_origin(run, TEMPERATURE, 't')}",
        f'range = ["{low:g} degC", "{high:g} degC"]',
        *_accuracy(run, TEMPERATURE),
    ]
    return "\n".join(lines)


def _composition(fractions: dict[str, float], since: str) -> str:
    lines = ["[[gas.natural_gas.composition]]"]
    if since:
        lines.append(f'since = "{since}"')
    lines += ['basis = "mole"', 'unit = "%"']
    lines += [f"{name} = {100.0 * x:.2f}" for name, x in fractions.items()]
    return "\n".join(lines)


def _gases(month: Month) -> str:
    change = _instant(month.composition_change)
    analysed = "\n".join(f"{name} = {own:g}" for name, (own, _) in _ANALYSIS.items())
    return f"""\
# --- Gases {"-" * 86}

[gas.natural_gas]
line_model = "aga8_detail"
base_model = "aga8_detail"
dynamic_viscosity = "{NATURAL_GAS.dynamic_viscosity * 1e3:.4f} mPa s"
isentropic_exponent = {NATURAL_GAS.isentropic_exponent}
dynamic_viscosity_uncertainty = {{ size = "5 %", k = 2 }}
isentropic_exponent_uncertainty = {{ size = "1.5 %", k = 2 }}

[gas.natural_gas.calorific_value]      # from the composition, whenever that changes
method = "ISO 6976:2016"
basis = "volume"
kind = "gross"
combustion_reference_temperature = "15 degC"
volume_base = {{ pressure = "101.325 kPa", temperature = "15 degC" }}

{_composition(BEFORE, "")}

[gas.natural_gas.composition.uncertainty] # by component, in both alike
k = 2
{analysed}

{_composition(AFTER, change)}

[gas.compressed_air]                   # dry
line_model = "reference_equation"
base_model = "reference_equation"
dynamic_viscosity = "{AIR.dynamic_viscosity * 1e3:.4f} mPa s"
isentropic_exponent = {AIR.isentropic_exponent}
dynamic_viscosity_uncertainty = {{ size = "3 %", k = 2 }}
isentropic_exponent_uncertainty = {{ size = "0.5 %", k = 2 }}

[[gas.compressed_air.composition]]
basis = "mole"
unit = "%"
air = 100.0"""


def _meter(run: Run, month: Month) -> str:
    device = run.device
    lines = [
        f"[meter.{run.name}]",
        f'description = "{run.description}"',
        f'gas = "{run.medium.name}"',
        f'differential_pressure = "PDT-{run.number}"',
        f'static_pressure = "PT-{run.number}"',
        f'temperature = "TT-{run.number}"',
        f'static_pressure_tapping = "{"downstream" if run.pressure_downstream else "upstream"}"',
        f'thermometer = "{"downstream" if run.thermometer_downstream else "upstream"}"',
        f'low_flow_cut_off = "{run.cut_off / 100.0:g} mbar"',
        "",
        f"[meter.{run.name}.{device.family}]",
        *_device(device),
    ]
    if run.spare is not None:
        lines += [
            "",
            f"[[meter.{run.name}.change]]                # the tube gave way to its spare",
            f'since = "{_instant(month.tube_exchange)}"',
            _spare(device.family, run.spare),
        ]
    return "\n".join(lines)


def _spare(family: str, device: Device) -> str:
    return f'{family} = {{ serial = "{device.serial}", bore = "{_mm(device.bore)}" }}'


def _mm(length: float) -> str:
    return f"{length * 1e3:.3f} mm"


def _device(device: Device) -> list[str]:
    lines = [
        f'{"tappings" if device.family == "orifice" else "form"} = "{device.form}"',
        f'bore = "{_mm(device.bore)}"',
        f'pipe_diameter = "{_mm(device.pipe_diameter)}"',
        'bore_uncertainty = { size = "0.05 %", k = 2 }',
        'pipe_diameter_uncertainty = { size = "0.2 %", k = 2 }',
        f'bore_expansion = "{device.bore_expansion * 1e6:g}e-6 / K"',
        f'pipe_expansion = "{device.pipe_expansion * 1e6:g}e-6 / K"',
        f'reference_temperature = "{device.reference_temperature - ZERO_CELSIUS:g} degC"',
    ]
    if device.serial:
        lines.insert(0, f'serial = "{device.serial}"')
    if device.family == "venturi_tube":
        lines.append(f'pressure_loss = "{VENTURI_PRESSURE_LOSS * 100.0:g} %"')
    certificate = device.certificate
    if certificate is not None:
        low, high = certificate.reynolds_number
        lines.append(
            f"discharge_coefficient = {{ value = {certificate.discharge_coefficient:.4f}, "
            f'certificate = "{certificate.number}", '
            f'uncertainty = {{ size = "{certificate.uncertainty}", k = 2 }}, '
            f"reynolds_number = [{low:g}, {high:g}] }}"
        )
    return lines


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


def _shared_causes() -> str:
    set_with_it = [
        f'  {{ signal = "{kind}-{run.number}", acts_on = "span", '
        f'size = "{CALIBRATOR_SPAN[kind] * 100.0:g} % of reading" }},'
        for run in RUNS
        for kind in (DP, PRESSURE)
    ]
    calibration_gas = [
        f'  {{ gas = "natural_gas", component = "{name}", acts_on = "fraction", '
        f'size = "{shared:g} %" }},'
        for name, (_, shared) in _ANALYSIS.items()
        if shared
    ]
    return "\n".join(
        (
            f'[uncertainty."{CALIBRATOR}"]',
            'kind = "calibration device"',
            "k = 2",
            "part = [",
            *set_with_it,
            "]",
            "",
            '[uncertainty."chromatograph GC-1, calibration gas"]',
            'kind = "chromatograph"',
            "k = 2",
            "part = [",
            *calibration_gas,
            "]",
        )
    )
