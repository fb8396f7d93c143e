"""Site-wide terms: calendar, base conditions, atmospheric pressure, contract."""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import TypeVar
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError, available_timezones

from meterfix import units
from meterfix.errors import UnitError
from meterfix.intake.site.findings import Findings, Place, instant_text, suggestion
from meterfix.intake.site.shapes import (
    AtmosphereTable,
    BaseTable,
    DatedAtmosphereTable,
    DatedBaseTable,
    DatedText,
)
from meterfix.intake.site.tables import ContractTable, SiteTable
from meterfix.model.calendar import GasDayCalendar
from meterfix.model.gas import BaseConditions, CalorificBasis, CalorificKind
from meterfix.model.site import Atmosphere, Contract, EnergyTerms
from meterfix.model.source import Quantity
from meterfix.model.versions import Versions, always

PRESETS: dict[str, BaseConditions] = {
    "ISO 13443": BaseConditions(101_325.0, 288.15),
    "normal": BaseConditions(101_325.0, 273.15),
}
"""ISO 13443:1996 standard reference conditions; normal conditions as in DIN 1343:1990."""

_CLOCK = re.compile(r"([01][0-9]|2[0-3]):([0-5][0-9])")
Value = TypeVar("Value")


def standard_atmosphere(elevation: float) -> float:
    """Return the pressure of the standard atmosphere at an elevation.

    Parameters
    ----------
    elevation : float
        Height above mean sea level, -2 km to 11 km. [m]

    Returns
    -------
    float
        Absolute pressure. [Pa]

    References
    ----------
    .. [1] ISO 2533:1975, Standard Atmosphere: geopotential height (nominal earth radius
       6 356 766 m) and the barometric formula for the layer with -6.5 K/km.
    """
    height = 6_356_766.0 * elevation / (6_356_766.0 + elevation)
    temperature_ratio = 1.0 - 0.0065 * height / 288.15
    pressure: float = 101_325.0 * temperature_ratio ** (9.80665 / (0.0065 * 287.05287))
    return pressure


def zone_known(place: Place, name: str | None, findings: Findings) -> bool:
    """Return whether a time zone is known, with a mistake if it is not."""
    if name is None:
        return False
    try:
        ZoneInfo(name)
    except (ZoneInfoNotFoundError, ValueError, OSError):
        near = suggestion(name, sorted(available_timezones()))
        findings.add(
            place,
            f"'{name}' is no time zone",
            near if near.startswith("did") else "use an IANA name such as 'Europe/Berlin' or 'UTC'",
        )
        return False
    return True


def texts_with_places(
    place: Place, given: str | list[DatedText] | None
) -> list[tuple[Place, str | None, str | None]]:
    """Return (place, since, text) of a single or dated text."""
    if given is None:
        return []
    if isinstance(given, str):
        return [(place, None, given)]
    return [((*place, n), entry.since, entry.value) for n, entry in enumerate(given)]


def value_place(place: Place) -> Place:
    """Return the place of a version's value: the list entry's own key, or the key itself."""
    return (*place, "value") if isinstance(place[-1], int) else place


def build_calendar(table: SiteTable, findings: Findings) -> GasDayCalendar | None:
    """Return the gas-day calendar."""
    zone = zone_known(("site", "time_zone"), table.time_zone, findings)
    if table.gas_day_start is None:
        return None
    entries: list[tuple[Place, str | None, int | None]] = []
    for at, since, text in texts_with_places(("site", "gas_day_start"), table.gas_day_start):
        clock = _CLOCK.fullmatch(text or "")
        if clock is None and text is not None:
            findings.add(
                value_place(at), f"'{text}'", "a local clock time such as '06:00' is needed"
            )
        seconds = int(clock[1]) * 3600 + int(clock[2]) * 60 if clock else None
        entries.append((at, since, seconds))
    starts = findings.versions(
        ("site", "gas_day_start"), entries, from_beginning=True, what="gas-day start"
    )
    if starts is None or not zone:
        return None
    calendar = GasDayCalendar(table.time_zone, starts)
    at_edges(("site", "gas_day_start"), starts, calendar, "gas-day start", findings)
    return calendar


def at_edges(
    place: Place,
    versions: Versions[Value],
    calendar: GasDayCalendar | None,
    what: str,
    findings: Findings,
) -> None:
    """Record every version that does not begin at a gas-day edge."""
    if calendar is None:
        return
    for n, version in enumerate(versions.entries):
        if version.since is None:
            continue
        edge = calendar.start(calendar.day_of(version.since))
        if edge != version.since:
            findings.add(
                (*place, n, "since"),
                f"the {what} would change at {instant_text(version.since)}",
                f"it changes only at a gas-day edge, for example {instant_text(edge)}",
            )


def base_conditions(
    place: Place, given: str | BaseTable | None, findings: Findings
) -> BaseConditions | None:
    """Return base conditions from a preset's name or a table."""
    if given is None:
        return None
    if isinstance(given, str):
        return PRESETS.get(given)
    if given.preset is not None:
        if given.pressure is not None or given.temperature is not None:
            findings.add(
                place,
                f"the preset '{given.preset}' and values of its own",
                "give either the preset or pressure and temperature",
            )
        return PRESETS.get(given.preset)
    if given.pressure is None or given.temperature is None:
        if {"pressure", "temperature"} - given.model_fields_set:
            findings.add(
                place,
                "pressure and temperature are not both given",
                "give both, or a preset: 'ISO 13443' or 'normal'",
            )
        return None
    pressure = findings.quantity(
        (*place, "pressure"),
        given.pressure,
        "pressure",
        above=1e3,
        below=1e7,
        limit="an absolute pressure between 1 kPa and 10 MPa is needed",
    )
    temperature = findings.quantity(
        (*place, "temperature"),
        given.temperature,
        "temperature",
        above=200.0,
        below=400.0,
        limit="a temperature between 200 K and 400 K is needed",
    )
    if pressure is None or temperature is None:
        return None
    return BaseConditions(pressure, temperature)


def build_base_conditions(
    table: SiteTable, calendar: GasDayCalendar | None, findings: Findings
) -> Versions[BaseConditions] | None:
    """Return the site's base conditions, which change only at gas-day edges."""
    place: Place = ("site", "base_conditions")
    given = table.base_conditions
    if given is None:
        return None
    if not isinstance(given, list):
        single = base_conditions(place, given, findings)
        return None if single is None else always(single)
    entries: list[tuple[Place, str | None, BaseConditions | None]] = [
        ((*place, n), entry.since, base_conditions((*place, n), entry, findings))
        for n, entry in enumerate(given)
        if isinstance(entry, DatedBaseTable)
    ]
    versions = findings.versions(place, entries, from_beginning=True, what="pair of conditions")
    if versions is not None:
        at_edges(place, versions, calendar, "pair of base conditions", findings)
    return versions


def build_atmosphere(
    table: SiteTable, quantities: Mapping[str, Quantity | None], findings: Findings
) -> Versions[Atmosphere] | None:
    """Return the atmospheric pressure; `quantities` says what every signal measures."""
    place: Place = ("site", "atmospheric_pressure")
    given = table.atmospheric_pressure
    if given is None:
        return None
    if isinstance(given, AtmosphereTable):
        single = _atmosphere(place, given, quantities, findings)
        return None if single is None else always(single)
    entries = [
        ((*place, n), entry.since, _atmosphere((*place, n), entry, quantities, findings))
        for n, entry in enumerate(given)
        if isinstance(entry, DatedAtmosphereTable)
    ]
    return findings.versions(place, entries, from_beginning=True, what="atmospheric pressure")


def _atmosphere(
    place: Place,
    given: AtmosphereTable,
    quantities: Mapping[str, Quantity | None],
    findings: Findings,
) -> Atmosphere | None:
    keys = given.model_fields_set - {"since", "uncertainty"}
    if len(keys) != 1:
        found = " and ".join(f"'{key}'" for key in sorted(keys)) or "none of the three"
        findings.add(place, found, "give exactly one of 'value', 'elevation', 'barometer'")
        return None
    if given.value is not None:
        pressure = findings.quantity(
            (*place, "value"),
            given.value,
            "pressure",
            above=4e4,
            below=1.2e5,
            limit="an absolute atmospheric pressure between 400 mbar and 1 200 mbar is needed",
        )
        return None if pressure is None else Atmosphere(value=pressure)
    if given.elevation is not None:
        elevation = findings.quantity(
            (*place, "elevation"),
            given.elevation,
            "length",
            above=-500.0,
            below=6_000.0,
            limit="an elevation between -500 m and 6 000 m is needed",
        )
        if elevation is None:
            return None
        return Atmosphere(value=standard_atmosphere(elevation), elevation=elevation)
    at = (*place, "barometer")
    name = findings.reference(at, given.barometer, "signal", quantities)
    if name is not None and quantities[name] not in {None, Quantity.BAROMETRIC_PRESSURE}:
        measured = str(quantities[name]).replace("_", " ")
        findings.add(
            at, f"signal '{name}' measures a {measured}", "name a signal of barometric pressure"
        )
    return None if name is None else Atmosphere(signal=name)


def build_energy(table: ContractTable | None, findings: Findings) -> EnergyTerms | None:
    """Return how the contract reckons energy; None where it does not, or cannot be read."""
    given = table.energy if table is not None else None
    if given is None:
        return None
    reference = findings.quantity(
        ("contract", "energy", "combustion_reference_temperature"),
        given.combustion_reference_temperature,
        "temperature",
        above=250.0,
        below=320.0,
        limit="a temperature such as '15 degC' or '25 degC' is needed",
    )
    if reference is None or given.way is None or given.kind is None:
        return None
    return EnergyTerms(CalorificBasis(given.way), CalorificKind(given.kind), reference)


def build_contract(
    table: ContractTable | None, energy: EnergyTerms | None, findings: Findings
) -> Contract | None:
    """Return the commercial terms."""
    if table is None:
        return None
    place: Place = ("contract", "price")
    entries: list[tuple[Place, str | None, float | None]] = [
        (at, since, _price(value_place(at), text, findings))
        for at, since, text in texts_with_places(place, table.price)
    ]
    price: Versions[float] | None = Versions(())
    if table.price is not None:
        price = findings.versions(place, entries, what="price")
        if table.currency == "":
            findings.add(("contract", "currency"), "missing", "a price needs a currency")
        if table.energy is None and "energy" not in table.model_fields_set:
            findings.add(
                ("contract", "energy"), "missing", "a price per energy needs [contract.energy]"
            )
    wait = findings.duration(
        ("contract", "provisional_after"), table.provisional_after, positive=False
    )
    if price is None or wait is None:
        return None
    return Contract(
        energy=energy, price=price, currency=table.currency or "", provisional_after=wait
    )


def _price(place: Place, text: str | None, findings: Findings) -> float | None:
    if text is None:
        return None
    allowed = "a price is money per unit of energy, such as '38.50 per MWh'; never per m3"
    try:
        price = units.parse(text, "per_energy")
    except UnitError as error:
        findings.add(place, str(error).partition("; ")[0], allowed)
        return None
    if price < 0.0:
        findings.add(place, f"'{text}' is negative", allowed)
        return None
    return price
