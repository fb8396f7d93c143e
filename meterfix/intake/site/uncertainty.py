"""Every source of uncertainty of a site: what is stated, and what follows from standards."""

from __future__ import annotations

from collections.abc import Mapping

from meterfix import units
from meterfix.intake.site.accuracy import divisor, stated_size
from meterfix.intake.site.accuracy_tables import SpecificationTable
from meterfix.intake.site.collected import Collected, joined
from meterfix.intake.site.device_uncertainty import collect_devices
from meterfix.intake.site.findings import Findings, Place
from meterfix.intake.site.gas_uncertainty import collect_gas
from meterfix.intake.site.shapes import AtmosphereTable
from meterfix.intake.site.shared_uncertainty import Known, collect_shared
from meterfix.intake.site.tables import SiteFile
from meterfix.intake.site.transmitters import (
    absolute_dimension,
    build_repeatability,
    read_effect,
    signal_parts,
)
from meterfix.model.site import Atmosphere
from meterfix.model.source import Quantity
from meterfix.model.uncertainty import Part, Repeatability
from meterfix.model.versions import Versions


def collect(
    file: SiteFile, known: Known, findings: Findings
) -> tuple[Collected, tuple[Repeatability, ...]]:
    """Return every source of uncertainty of a site, and the stated repeatability of its signals.

    Parameters
    ----------
    file
        The site file's tables.
    known
        What was built of them.
    findings
        Mistakes are added.
    """
    collected = Collected(findings)
    limits = {
        name: _range_limit(("signal", name), known.measured.get(name), table, findings)
        for name, table in (file.signal or {}).items()
    }
    repeatability = _collect_signals(file, known, limits, collected, findings)
    for name, table in (file.uncertainty or {}).items():
        collect_shared(name, table, file, known, limits, collected, findings)
    collect_devices(known.devices, collected)
    for name, gas_table in (file.gas or {}).items():
        collect_gas(name, gas_table, known.gases.get(name), collected, findings)
    _collect_atmosphere(file, known.atmosphere, collected, findings)
    return collected, repeatability


# --- signals ---------------------------------------------------------------------------------


def _range_limit(
    place: Place, quantity: Quantity | None, table: object, findings: Findings
) -> float | None:
    text = getattr(table, "upper_range_limit", None)
    if text is None or quantity is None:
        return None
    dimension: units.Dimension = "temperature" if quantity is Quantity.TEMPERATURE else "pressure"
    return findings.quantity(
        (*place, "upper_range_limit"), text, dimension, above=0.0, limit="it must be above 0"
    )


def _collect_signals(
    file: SiteFile,
    known: Known,
    limits: Mapping[str, float | None],
    collected: Collected,
    findings: Findings,
) -> tuple[Repeatability, ...]:
    used = _used_signals(known)
    causes = (file.uncertainty or {}).values()
    shared = {part.signal for cause in causes for part in cause.part or []}
    repeatability: list[Repeatability] = []
    for name, table in (file.signal or {}).items():
        place: Place = ("signal", name)
        quantity, signal = known.measured.get(name), known.signals.get(name)
        if quantity is None:
            continue
        for n, entry in enumerate(table.uncertainty or []):
            at: Place = (*place, "uncertainty", n)
            covered = divisor(at, entry, findings)
            effect = read_effect(at, entry, absolute_dimension(quantity), findings)
            if effect is None or covered is None or signal is None:
                continue
            if effect.size.amount < 0.0:
                findings.add((*at, "size"), f"'{entry.size}'", "an uncertainty is at least 0")
                continue
            parts = signal_parts(at, signal, limits[name], entry.acts_on, effect, covered, findings)
            if parts is not None:
                collected.add(
                    at,
                    entry.name or _default_name(name, entry, effect.size.per),
                    "barometer" if quantity is Quantity.BAROMETRIC_PRESSURE else "transmitter",
                    parts,
                    numbered=entry.name is None,
                )
        stated = table.uncertainty or "uncertainty" in table.model_fields_set
        if name in used and name not in shared and not stated:
            collected.unstated_signal(name)
        if signal is not None:
            one = build_repeatability(
                (*place, "repeatability"), table.repeatability, signal, limits[name], findings
            )
            repeatability += [] if one is None else [one]
    return tuple(repeatability)


def _used_signals(known: Known) -> set[str]:
    used: set[str] = set()
    for meter in known.meters:
        for version in meter.terms.entries:
            terms = version.value
            used |= {terms.differential_pressure, terms.static_pressure, terms.temperature}
    for entry in known.atmosphere.entries if known.atmosphere else ():
        used |= {entry.value.signal} if entry.value.signal is not None else set()
    return used


def _default_name(signal: str, entry: SpecificationTable, per: object) -> str:
    dimension = getattr(per, "dimension", None)
    cause = {
        None: "",
        "time": " drift",
        "temperature_difference": ", ambient temperature",
        "pressure": ", static pressure",
    }[dimension]
    return f"{signal} {entry.acts_on}{cause}"


# --- atmosphere ------------------------------------------------------------------------------


def _collect_atmosphere(
    file: SiteFile,
    atmosphere: Versions[Atmosphere] | None,
    collected: Collected,
    findings: Findings,
) -> None:
    given = file.site.atmospheric_pressure if file.site is not None else None
    if given is None:
        return
    dated = [given] if isinstance(given, AtmosphereTable) else given
    complete = atmosphere is not None and len(atmosphere.entries) == len(dated)
    parts: list[Part] = []
    for n, entry in enumerate(dated):
        place: Place = ("site", "atmospheric_pressure")
        at: Place = place if given is entry else (*place, n)
        version = atmosphere.entries[n] if atmosphere is not None and complete else None
        if entry.barometer is not None:
            if entry.uncertainty is not None:
                findings.add(
                    (*at, "uncertainty"),
                    "given with a barometer",
                    f"give it as [[signal.{entry.barometer}.uncertainty]]",
                )
            continue
        if entry.uncertainty is None:
            if "uncertainty" not in entry.model_fields_set:
                collected.unstated("atmospheric pressure")
            continue
        covered = divisor((*at, "uncertainty"), entry.uncertainty, findings)
        size = stated_size(
            (*at, "uncertainty", "size"), entry.uncertainty.size, "pressure", findings
        )
        if size is None or covered is None:
            continue
        if size.relative or size.per is not None or size.amount < 0.0:
            findings.add(
                (*at, "uncertainty", "size"),
                f"'{entry.uncertainty.size}'",
                "give a pressure, at least 0, such as '15 mbar'",
            )
            continue
        if version is not None and atmosphere is not None:
            following = atmosphere.entries[n + 1].since if n + 1 < len(dated) else None
            parts.append(
                Part(
                    "atmospheric_pressure",
                    "site",
                    size.amount / covered,
                    start=version.since if n > 0 else None,
                    end=following,
                )
            )
    kept = tuple(part for part in joined(parts) if part.size != 0.0)
    if kept:
        collected.add(("site", "atmospheric_pressure"), "atmospheric pressure", "atmosphere", kept)
