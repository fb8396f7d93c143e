"""From a site file to the model: read, check everything, and only then return a site."""

from __future__ import annotations

import hashlib
from pathlib import Path, PurePath

from meterfix.errors import SiteFileError
from meterfix.intake.site.device_uncertainty import DeviceVersion
from meterfix.intake.site.findings import Findings
from meterfix.intake.site.gases import build_gas
from meterfix.intake.site.meters import build_envelope, build_meter, check_use
from meterfix.intake.site.secrets import anchored, check_database
from meterfix.intake.site.shared_uncertainty import Known
from meterfix.intake.site.signals import build_signals, quantities
from meterfix.intake.site.sources import build_source
from meterfix.intake.site.structure import read_tables
from meterfix.intake.site.tables import SiteFile
from meterfix.intake.site.terms import (
    build_atmosphere,
    build_base_conditions,
    build_calendar,
    build_contract,
    build_energy,
)
from meterfix.intake.site.uncertainty import collect
from meterfix.model.site import Site


def read_site(path: Path) -> Site:
    """Return the site that a file describes, with paths made absolute beside it.

    Parameters
    ----------
    path : Path
        The site file, TOML in UTF-8.

    Returns
    -------
    Site
        `database_url` and `archive_folder` are absolute; references to secrets are kept as
        written. `digest` is the SHA-256 of the file's bytes.

    Raises
    ------
    SiteFileError
        If the file cannot be read or holds mistakes: all of them, each with its place, what was
        given and what is allowed.
    """
    try:
        content = path.read_bytes()
    except OSError as error:
        findings = Findings(path.name)
        reason = error.strerror or type(error).__name__
        findings.add((), f"cannot be read: {reason}", "name an existing, readable site file")
        raise SiteFileError(str(path), findings.mistakes) from error
    try:
        text = content.decode("utf-8")
    except UnicodeDecodeError as error:
        findings = Findings(path.name)
        line = content.count(b"\n", 0, error.start) + 1
        findings.add((), f"line {line}: bytes that are not UTF-8", "save the file as UTF-8")
        raise SiteFileError(str(path), findings.mistakes) from error
    return anchored(site_from_text(text, str(path)), path.parent)


def site_from_text(text: str, path: str) -> Site:
    """Return the site that a stored text describes; paths stay as written.

    Parameters
    ----------
    text : str
        The site file's content, its line ends included.
    path : str
        What messages call the file.

    Raises
    ------
    SiteFileError
        As `read_site`.
    """
    findings = Findings(PurePath(path).name or path)
    file = read_tables(text, findings)
    site = None if file is None else _build(file, text, findings)
    if site is None or findings.mistakes:
        raise SiteFileError(path, findings.mistakes)
    return site


def _build(file: SiteFile, text: str, findings: Findings) -> Site | None:
    """Return the site, or None where something had to be left out; then `findings` says what."""
    measured = quantities(file)
    energy = build_energy(file.contract, findings)
    contract = build_contract(file.contract, energy, findings)
    sources = [build_source(name, t, findings) for name, t in (file.source or {}).items()]
    signals = build_signals(file, findings)
    gases = [build_gas(name, t, energy, findings) for name, t in (file.gas or {}).items()]
    devices: list[DeviceVersion] = []
    meters = [
        build_meter(name, t, file, measured, devices, findings)
        for name, t in (file.meter or {}).items()
    ]
    calendar = None if file.site is None else build_calendar(file.site, findings)
    envelopes = [
        build_envelope(name, t, file, calendar, findings)
        for name, t in (file.envelope or {}).items()
    ]
    good_gases = tuple(gas for gas in gases if gas is not None)
    good_meters = tuple(meter for meter in meters if meter is not None)
    check_use(good_meters, signals, good_gases, findings)
    table = file.site
    atmosphere = None if table is None else build_atmosphere(table, measured, findings)
    known = Known(
        measured=measured,
        signals={signal.name: signal for signal in signals},
        gases={gas.name: gas for gas in good_gases},
        meters=good_meters,
        devices=devices,
        atmosphere=atmosphere,
    )
    collected, repeatability = collect(file, known, findings)
    if table is None:
        return None
    base = build_base_conditions(table, calendar, findings)
    if table.database is not None:
        check_database(("site", "database"), table.database, findings)
    for key in ("name", "archive"):
        if getattr(table, key) == "":
            findings.add(("site", key), "empty", "text is needed")
    if findings.mistakes:
        return None
    # no mistake: then nothing may have been left out
    assert calendar is not None
    assert base is not None
    assert atmosphere is not None
    assert contract is not None
    assert None not in {*sources, *gases, *meters, *envelopes}
    assert len(signals) == len(file.signal)
    return Site(
        name=table.name,
        calendar=calendar,
        base_conditions=base,
        atmosphere=atmosphere,
        sources=tuple(source for source in sources if source is not None),
        signals=signals,
        gases=good_gases,
        meters=good_meters,
        envelopes=tuple(envelope for envelope in envelopes if envelope is not None),
        contract=contract,
        uncertainty=collected.sources,
        repeatability=repeatability,
        database_url=table.database,
        archive_folder=table.archive,
        notes=(*findings.notes, *([] if collected.note is None else [collected.note])),
        digest=hashlib.sha256(text.encode("utf-8")).hexdigest(),
        text=text,
    )
