"""Sources of uncertainty of primary devices: diameters, discharge coefficient, expansibility."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

from meterfix.intake.site.collected import Collected, joined
from meterfix.model.device import Device, Nozzle, OrificePlate
from meterfix.model.uncertainty import Part

LARGEST_BORE_UNCERTAINTY = 0.0007
LARGEST_PIPE_UNCERTAINTY = 0.004
"""Relative, k = 2: what ISO 5167-1:2003, 8.2.2.2, allows for at most, taken where the site file
states nothing."""
_BY_STANDARD_K = 2.0


@dataclass(frozen=True, slots=True)
class DeviceVersion:
    """A meter's device from an instant on, with what is stated of its diameters."""

    meter: str
    start: int | None
    device: Device
    bore_uncertainty: float | None
    """Relative standard uncertainty [-]; None: not stated."""
    pipe_uncertainty: float | None

    @property
    def subject(self) -> str:
        """What parameters of the device are called by."""
        return f"{self.meter} {self.device.label}".strip()


def _standard_of(device: Device) -> str:
    if isinstance(device, OrificePlate):
        return "ISO 5167-2"
    return "ISO 5167-3" if isinstance(device, Nozzle) else "ISO 5167-4"


def collect_devices(devices: Sequence[DeviceVersion], collected: Collected) -> None:
    """Add the sources of every device: diameters, discharge coefficient, expansibility.

    Devices that name one certificate share its error, whatever meter they are of.
    """
    certificates: dict[str, dict[str, Part]] = {}
    by_standard: dict[tuple[str, str], dict[str, Part]] = {}
    expansibility: dict[tuple[str, str], dict[str, Part]] = {}
    by_meter: dict[str, list[DeviceVersion]] = {}
    for version in devices:
        by_meter.setdefault(version.meter, []).append(version)
        subject, standard = version.subject, _standard_of(version.device)
        calibration = version.device.calibration
        coefficient = (
            by_standard.setdefault((version.meter, standard), {})
            if calibration is None
            else certificates.setdefault(calibration.certificate, {})
        )
        coefficient[subject] = Part("discharge_coefficient", subject, 1.0)
        expansibility.setdefault((version.meter, standard), {})[subject] = Part(
            "expansibility", subject, 1.0
        )
    for versions in by_meter.values():
        _collect_diameters(versions, collected)
    for (meter, standard), parts in by_standard.items():
        name = f"{meter} discharge coefficient, {standard}"
        collected.add((), name, "discharge coefficient", tuple(parts.values()), numbered=True)
    for certificate, parts in certificates.items():
        name = f"certificate {certificate}"
        collected.add((), name, "certificate", tuple(parts.values()), numbered=True)
    for (meter, standard), parts in expansibility.items():
        name = f"{meter} expansibility, {standard}"
        collected.add((), name, "expansibility", tuple(parts.values()), numbered=True)


def _collect_diameters(versions: Sequence[DeviceVersion], collected: Collected) -> None:
    """Add the sources of a meter's bores and pipe diameters.

    A pipe that stays while the plate is changed is one cause, and so is a plate that comes back.
    """
    bores: dict[tuple[float, str], list[int]] = {}
    pipes: dict[float, list[int]] = {}
    for n, version in enumerate(versions):
        device = version.device
        serial = "" if device.label.startswith("from ") else device.label
        bores.setdefault((device.bore, serial), []).append(n)
        pipes.setdefault(device.pipe_diameter, []).append(n)
    for which in bores.values():
        name = f"{versions[which[0]].subject} bore"
        _collect_diameter(
            name, "bore", "plate", LARGEST_BORE_UNCERTAINTY, versions, which, collected
        )
    for which in pipes.values():
        name = f"{versions[0].meter} pipe diameter"
        _collect_diameter(
            name, "pipe_diameter", "pipe", LARGEST_PIPE_UNCERTAINTY, versions, which, collected
        )


def _collect_diameter(
    name: str,
    parameter: str,
    kind: str,
    largest: float,
    versions: Sequence[DeviceVersion],
    which: Sequence[int],
    collected: Collected,
) -> None:
    """Add one diameter's source: a part for each subject, or each time of one that changes."""
    parts: list[Part] = []
    assumed = False
    for n in which:
        version = versions[n]
        size = version.bore_uncertainty if parameter == "bore" else version.pipe_uncertainty
        assumed = assumed or size is None
        start = version.start if n > 0 else None
        end = versions[n + 1].start if n + 1 < len(versions) else None
        one = largest / _BY_STANDARD_K if size is None else size
        parts.append(Part(parameter, version.subject, one, start=start, end=end))
    sizes: dict[str, set[float]] = {}
    for part in parts:
        sizes.setdefault(part.subject, set()).add(part.size)
    # a subject of one size needs no limits of time: its parameter has them
    kept = dict.fromkeys(
        replace(part, start=None, end=None) if len(sizes[part.subject]) == 1 else part
        for part in joined(parts)
        if part.size != 0.0
    )
    full = f"{name}, ISO 5167-1 maximum" if assumed else name
    collected.add((), full, kind, tuple(kept), numbered=True)
