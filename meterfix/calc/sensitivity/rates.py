"""The mass rate's derivatives of many records at once; symbols in the package's docstring."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, fields

import numpy as np

from meterfix.calc.correct import Corrected, EraRecords
from meterfix.calc.disturbance import (
    discharge_standard_uncertainty,
    expansibility_standard_uncertainty,
)
from meterfix.calc.elementary import power
from meterfix.calc.gas.batch import GasBatch
from meterfix.calc.gas.properties import LineSlopes
from meterfix.calc.primary.devices import Devices, devices_of
from meterfix.calc.primary.forms import pressure_loss
from meterfix.calc.sensitivity.expansibility import expansibility_slopes
from meterfix.calc.sensitivity.geometry import DischargeSlopes, discharge_slopes
from meterfix.frames import Floats, Integers, Truths
from meterfix.model.site import Tapping, Thermometer

_CHUNK = 8192
"""Records worked on at a time, so that arrays stay in the processor's cache."""
_STEP = 1e-5
"""Relative step of the pressure loss's differences by C and beta."""


@dataclass(frozen=True, slots=True)
class MassSensitivities:
    """Derivatives of the mass rate [kg/s], (n,) arrays over all records; 0 where none flows."""

    differential_pressure: Floats
    """Per Pa, the upstream pressure's part included where the tapping is downstream."""
    static_pressure: Floats
    """Per Pa."""
    temperature: Floats
    """Per K of the thermometer."""
    bore: Floats
    """Per relative change, as the others without a unit of their own."""
    pipe_diameter: Floats
    discharge_coefficient: Floats
    """Per stated standard uncertainty; NaN where none is stated."""
    expansibility: Floats
    """Per stated standard uncertainty; NaN where none is stated."""
    dynamic_viscosity: Floats
    isentropic_exponent: Floats
    """Per unit of the exponent."""
    log_density: Floats
    line_density: Floats
    """Per stated standard uncertainty; NaN where none is stated."""
    joule_thomson_coefficient: Floats
    """Per K/Pa; 0 where the thermometer is upstream."""


_NAMES = tuple(field.name for field in fields(MassSensitivities))


@dataclass(frozen=True, slots=True)
class _Records:
    """Flowing records, (n,) arrays; see `Corrected`."""

    differential_pressure: Floats
    static_pressure_absolute: Floats
    temperature_upstream: Floats
    mass_flow: Floats
    discharge_coefficient: Floats
    expansibility: Floats
    reynolds_number: Floats
    isentropic_exponent: Floats
    compression_factor: Floats


def mass_sensitivities(
    records: Sequence[EraRecords], corrected: Corrected, gases: GasBatch
) -> MassSensitivities:
    """Return the derivatives of the mass rate of corrected records.

    Parameters
    ----------
    records : sequence of EraRecords
        What was corrected.
    corrected : Corrected
        What came of it, undisturbed.
    gases : GasBatch
        The gases of the batch.

    Returns
    -------
    MassSensitivities
        Element-wise: a record's bits depend on its own readings and constants only.
    """
    eras = [entry.era for entry in records]
    number = np.array([gases.number(era.gas) for era in eras], dtype=np.int64)
    slopes = discharge_slopes(
        devices_of([era.meter.device for era in eras], np.ones(len(eras), dtype=np.int64))
    )
    far = np.array([era.meter.thermometer is Thermometer.DOWNSTREAM for era in eras])
    below = np.array([era.meter.static_pressure_tapping is Tapping.DOWNSTREAM for era in eras])
    columns = {name: np.zeros(int(corrected.offsets[-1])) for name in _NAMES}
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        for low, high, first, last in _chunks(corrected.offsets):
            flowing = low + np.flatnonzero(corrected.mass_flow[low:high] > 0.0)
            if len(flowing) == 0:
                continue
            counts = np.diff(np.searchsorted(flowing, corrected.offsets[first : last + 1]))
            where: Integers | slice = slice(low, high) if len(flowing) == high - low else flowing
            found = _chunk(
                _Records(*(getattr(corrected, field.name)[where] for field in fields(_Records))),
                devices_of([era.meter.device for era in eras[first:last]], counts),
                slopes.of(first, last),
                counts,
                np.repeat(number[first:last], counts),
                gases,
                far=np.repeat(far[first:last], counts) if far[first:last].any() else None,
            )
            if below[first:last].any():
                added = np.where(
                    np.repeat(below[first:last], counts), found["static_pressure"], 0.0
                )
                found["differential_pressure"] = found["differential_pressure"] + added
            for name, values in found.items():
                columns[name][where] = values
    return MassSensitivities(**columns)


def _chunks(offsets: Integers) -> list[tuple[int, int, int, int]]:
    """Return [low, high) of consecutive records, and [first, last) of the eras they belong to."""
    lows = np.arange(0, int(offsets[-1]), _CHUNK)
    highs = np.minimum(lows + _CHUNK, int(offsets[-1]))
    firsts = np.searchsorted(offsets, lows, side="right") - 1
    lasts = np.searchsorted(offsets, highs, side="left")
    return list(zip(lows.tolist(), highs.tolist(), firsts.tolist(), lasts.tolist(), strict=True))


def _chunk(
    records: _Records,
    devices: Devices,
    slopes: DischargeSlopes,
    counts: Integers,
    gas: Integers,
    gases: GasBatch,
    *,
    far: Truths | None,
) -> dict[str, Floats]:
    """Return the derivatives of flowing records by name."""
    dp, p1, T1 = (
        records.differential_pressure,
        records.static_pressure_absolute,
        records.temperature_upstream,
    )
    q, kappa, C = records.mass_flow, records.isentropic_exponent, records.discharge_coefficient
    state = gases.line_slopes(gas, p1, T1, records.compression_factor, throttled=far is not None)

    bore, pipe_diameter = devices.diameters_at(T1)
    bore_T = devices.bore_expansion * devices.bore / bore
    pipe_T = devices.pipe_expansion * devices.pipe_diameter / pipe_diameter
    beta = bore / pipe_diameter
    epsilon = expansibility_slopes(
        dp,
        p1,
        kappa,
        diameter_ratio=beta,
        form=devices.form,
        expansibility=records.expansibility,
    )
    u = power(records.reynolds_number, -0.1)
    by_Re, by_beta, by_D = (values / C for values in slopes.at(u, T1, counts))

    # ln K: what multiplies C in the flow equation
    beta2 = beta * beta
    beta4 = beta2 * beta2
    K_dp = 0.5 / dp + epsilon.by_differential_pressure
    K_kappa = epsilon.by_isentropic_exponent
    K_beta = 2.0 * beta4 / (1.0 - beta4) + epsilon.by_log_diameter_ratio

    # ln q at constant T1 and line state
    w = 1.0 / (1.0 - by_Re)
    q_dp, q_kappa, q_rho, q_mu = K_dp * w, K_kappa * w, 0.5 * w, -by_Re * w
    q_beta = (K_beta + by_beta) * w
    q_bore = 2.0 * w + q_beta
    q_pipe = (by_D - by_Re) * w - q_beta
    q_p = (
        epsilon.by_static_pressure * w
        + q_rho * state.log_density_by_pressure
        + q_kappa * state.isentropic_exponent_by_pressure
        + q_mu * state.log_viscosity_by_pressure
    )
    q_T = (
        q_rho * state.log_density_by_temperature
        + q_kappa * state.isentropic_exponent_by_temperature
        + q_mu * state.log_viscosity_by_temperature
        + q_bore * bore_T
        + q_pipe * pipe_T
    )
    found = {
        "differential_pressure": q_dp,
        "static_pressure": q_p,
        "temperature": q_T,
        "bore": q_bore,
        "pipe_diameter": q_pipe,
        "discharge_coefficient": w,
        "expansibility": w,
        "dynamic_viscosity": q_mu,
        "isentropic_exponent": q_kappa,
        "log_density": q_rho,
    }
    if far is not None:
        found = _through_temperature(
            found,
            K_dp,
            K_kappa,
            K_beta,
            epsilon.by_static_pressure,
            bore_T,
            pipe_T,
            records,
            devices,
            beta,
            state,
            far,
        )
    found["line_density"] = found["log_density"] * gases.line_density_uncertainty(gas, p1, T1)
    found["discharge_coefficient"] = found[
        "discharge_coefficient"
    ] * discharge_standard_uncertainty(devices, records.reynolds_number)
    found["expansibility"] = found["expansibility"] * expansibility_standard_uncertainty(
        devices, dp, p1, kappa
    )
    return {name: values * q for name, values in found.items()}


def _through_temperature(
    direct: dict[str, Floats],
    K_dp: Floats,
    K_kappa: Floats,
    K_beta: Floats,
    K_p1: Floats,
    bore_T: Floats,
    pipe_T: Floats,
    records: _Records,
    devices: Devices,
    beta: Floats,
    state: LineSlopes,
    far: Truths,
) -> dict[str, Floats]:
    """Return the derivatives with those through the upstream temperature, where it is far.

    `direct` is at constant T1; what C changes by is what q changes by less what K does.
    """
    loss, loss_dp, loss_C, loss_beta = _loss_slopes(
        records.differential_pressure, records.discharge_coefficient, beta, devices
    )
    J = state.joule_thomson_coefficient
    JC = J * loss_C
    K_p = (
        K_p1 + 0.5 * state.log_density_by_pressure + K_kappa * state.isentropic_exponent_by_pressure
    )
    K_T = (
        0.5 * state.log_density_by_temperature
        + K_kappa * state.isentropic_exponent_by_temperature
        + (2.0 + K_beta) * bore_T
        - K_beta * pipe_T
    )
    moved = {
        "differential_pressure": J * loss_dp + JC * (direct["differential_pressure"] - K_dp),
        "static_pressure": loss * state.joule_thomson_by_pressure
        + JC * (direct["static_pressure"] - K_p),
        "bore": J * loss_beta + JC * (direct["bore"] - 2.0 - K_beta),
        "pipe_diameter": -J * loss_beta + JC * (direct["pipe_diameter"] + K_beta),
        "discharge_coefficient": JC * direct["discharge_coefficient"],
        "expansibility": JC * (direct["expansibility"] - 1.0),
        "dynamic_viscosity": JC * direct["dynamic_viscosity"],
        "isentropic_exponent": JC * (direct["isentropic_exponent"] - K_kappa),
        "log_density": JC * (direct["log_density"] - 0.5),
        "joule_thomson_coefficient": loss,
    }
    own = (
        loss * state.joule_thomson_by_temperature
        + J * loss_beta * (bore_T - pipe_T)
        + JC * (direct["temperature"] - K_T)
    )
    q_T = np.where(far, direct["temperature"] / (1.0 - own), direct["temperature"])
    by_T1 = np.where(far, q_T, 0.0)
    found = {name: direct.get(name, 0.0) + by_T1 * change for name, change in moved.items()}
    return {**found, "temperature": q_T}


def _loss_slopes(
    dp: Floats, C: Floats, beta: Floats, devices: Devices
) -> tuple[Floats, Floats, Floats, Floats]:
    """Return the pressure loss [Pa] and its derivatives by dp, ln C and ln beta.

    The loss is proportional to dp; the others are central differences: with the
    Joule-Thomson coefficient the loss is some hundredths of a kelvin.
    """

    def loss(of_C: float, of_beta: float) -> Floats:
        return pressure_loss(
            dp, C * of_C, diameter_ratio=beta * of_beta, stated_ratio=devices.pressure_loss_ratio
        )

    at = loss(1.0, 1.0)
    by_C = (loss(1.0 + _STEP, 1.0) - loss(1.0 - _STEP, 1.0)) / (2.0 * _STEP)
    by_beta = (loss(1.0, 1.0 + _STEP) - loss(1.0, 1.0 - _STEP)) / (2.0 * _STEP)
    return at, at / dp, by_C, by_beta
