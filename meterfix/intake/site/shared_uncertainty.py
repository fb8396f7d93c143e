"""Causes that several signals, devices or gases share: [uncertainty.NAME] of a site file."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from meterfix.intake.site.accuracy import divisor
from meterfix.intake.site.accuracy_tables import SharedPartTable, SharedTable
from meterfix.intake.site.collected import Collected
from meterfix.intake.site.device_uncertainty import DeviceVersion
from meterfix.intake.site.findings import Findings, Place
from meterfix.intake.site.gas_tables import COMPONENTS
from meterfix.intake.site.tables import SiteFile
from meterfix.intake.site.transmitters import absolute_dimension, read_effect, signal_parts
from meterfix.model.gas import Gas
from meterfix.model.site import Atmosphere, Meter
from meterfix.model.source import Quantity, Signal
from meterfix.model.uncertainty import Part
from meterfix.model.versions import Versions


@dataclass(frozen=True, slots=True)
class Known:
    """What has been built of the site: what could not be is missing, and told elsewhere."""

    measured: Mapping[str, Quantity | None]
    signals: Mapping[str, Signal]
    gases: Mapping[str, Gas]
    meters: Sequence[Meter]
    devices: Sequence[DeviceVersion]
    atmosphere: Versions[Atmosphere] | None


_ON_SIGNALS = ("zero", "span")
_ON_METERS = ("bore", "pipe_diameter")
_ON_SITE = ("atmospheric_pressure",)


def collect_shared(
    name: str,
    table: SharedTable,
    file: SiteFile,
    known: Known,
    limits: Mapping[str, float | None],
    collected: Collected,
    findings: Findings,
) -> None:
    """Add one shared cause; mistakes go to `findings`.

    Parameters
    ----------
    name, table
        Of [uncertainty.NAME].
    file, known
        What the parts can name, as written and as built.
    limits
        Upper range limits by signal, SI.
    collected
        Where the source is added.
    findings
        Mistakes are added.
    """
    place: Place = ("uncertainty", name)
    covered = divisor(place, table, findings)
    parts: list[Part] = []
    before = len(findings.mistakes)
    for n, entry in enumerate(table.part or []):
        at: Place = (*place, "part", n)
        if entry.acts_on is None or not _subject_fits(at, entry, file, findings):
            continue
        if entry.acts_on in _ON_SIGNALS:
            found = _signal_parts(at, entry, known, limits, covered, findings)
        elif entry.acts_on in _ON_METERS:
            found = _diameter_parts(at, entry, known, covered, findings)
        else:
            found = _plain_parts(at, entry, covered, findings)
        parts += found or ()
    if len(findings.mistakes) == before and table.kind is not None:
        collected.add(place, name, table.kind, tuple(parts))


def _subject_fits(at: Place, entry: SharedPartTable, file: SiteFile, findings: Findings) -> bool:
    """Return whether the part names what it acts on, and nothing else, and that exists."""
    before = len(findings.mistakes)
    wanted = {"gas"}
    if entry.acts_on in _ON_SIGNALS:
        wanted = {"signal"}
    elif entry.acts_on in _ON_METERS:
        wanted = {"meter"}
    elif entry.acts_on in _ON_SITE:
        wanted = set()
    elif entry.acts_on == "fraction":
        wanted = {"gas", "component"}
    given = entry.model_fields_set & {"signal", "meter", "gas", "component"}
    for key in sorted(given - wanted):
        findings.add((*at, key), f"given, though it acts on '{entry.acts_on}'", "leave it out")
    for key in sorted(wanted - given):
        findings.add((*at, key), "missing", f"'{entry.acts_on}' needs to know whose")
    findings.reference((*at, "signal"), entry.signal, "signal", file.signal or {})
    findings.reference((*at, "meter"), entry.meter, "meter", file.meter or {})
    findings.reference((*at, "gas"), entry.gas, "gas", file.gas or {})
    if entry.component is not None:
        findings.reference((*at, "component"), entry.component, "component", COMPONENTS)
    return len(findings.mistakes) == before


def _signal_parts(
    at: Place,
    entry: SharedPartTable,
    known: Known,
    limits: Mapping[str, float | None],
    covered: float | None,
    findings: Findings,
) -> tuple[Part, ...] | None:
    name = entry.signal or ""
    quantity, signal = known.measured.get(name), known.signals.get(name)
    if quantity is None:
        return None
    effect = read_effect(at, entry, absolute_dimension(quantity), findings)
    if effect is None or signal is None or covered is None:
        return None
    return signal_parts(at, signal, limits.get(name), entry.acts_on, effect, covered, findings)


def _diameter_parts(
    at: Place,
    entry: SharedPartTable,
    known: Known,
    covered: float | None,
    findings: Findings,
) -> tuple[Part, ...] | None:
    """Return a part for each device that the meter ever has."""
    effect = read_effect(at, entry, "length", findings)
    if effect is None or covered is None:
        return None
    if effect.size.base is not None:
        findings.add((*at, "size"), f"'{entry.size}'", "give a percentage, or a length")
        return None
    found: dict[str, Part] = {}
    for version in known.devices:
        if version.meter != entry.meter or version.subject in found:
            continue
        diameter = version.device.bore if entry.acts_on == "bore" else version.device.pipe_diameter
        amount = effect.size.amount if effect.size.relative else effect.size.amount / diameter
        found[version.subject] = effect.part(entry.acts_on, version.subject, amount / covered)
    return tuple(found.values())


def _plain_parts(
    at: Place, entry: SharedPartTable, covered: float | None, findings: Findings
) -> tuple[Part, ...] | None:
    """Return the part of a gas's property, a fraction or the atmosphere."""
    on_site = entry.acts_on in _ON_SITE
    effect = read_effect(at, entry, "pressure" if on_site else "fraction", findings)
    if effect is None or covered is None:
        return None
    fits = effect.size.relative != on_site or entry.acts_on == "fraction"
    if effect.size.base is not None or not fits:
        allowed = "give a pressure" if on_site else "give a percentage of the value"
        if entry.acts_on == "fraction":
            allowed = "give it as the fraction is given, such as '0.05 %'"
        findings.add((*at, "size"), f"'{entry.size}'", allowed)
        return None
    parameter = f"fraction:{entry.component}" if entry.acts_on == "fraction" else entry.acts_on
    subject = "site" if on_site else entry.gas or ""
    return (effect.part(parameter, subject, effect.size.amount / covered),)
