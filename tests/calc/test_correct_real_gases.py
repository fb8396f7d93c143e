"""The whole correction on real gases: reference libraries, thermometer passes, bits."""

from __future__ import annotations

from dataclasses import fields, replace

import numpy as np
import pytest
from fluids.flow_meter import differential_pressure_meter_solver, dP_orifice

from meterfix.calc import correct as correction
from meterfix.calc.correct import MEASURED, Corrected, EraRecords, correct
from meterfix.calc.gas.properties import GasLibrary
from meterfix.frames import Era
from meterfix.model.device import (
    Calibration,
    Device,
    Nozzle,
    NozzleForm,
    OrificePlate,
    Tappings,
    VenturiForm,
    VenturiTube,
)
from meterfix.model.gas import (
    BaseConditions,
    CalorificBasis,
    CalorificKind,
    CalorificValue,
    Composition,
    DensityModel,
    GasTerms,
    PropertyChoice,
    StateModel,
)
from meterfix.model.site import EnergyTerms, MeterTerms, Tapping, Thermometer
from meterfix.model.source import Transmitter

BASE = BaseConditions(101_325.0, 288.15)
MOLE_FRACTIONS = {
    "methane": 0.9312,
    "ethane": 0.0385,
    "propane": 0.0092,
    "nitrogen": 0.0102,
    "carbon_dioxide": 0.0109,
}
HEAT = CalorificValue(38.9e6, CalorificBasis.VOLUME, CalorificKind.GROSS, 288.15, BASE)
NATURAL_GAS = GasTerms(
    composition=Composition("mole", tuple(MOLE_FRACTIONS.items()), 1.0),
    line_model=DensityModel(StateModel.AGA8_DETAIL),
    base_model=DensityModel(StateModel.AGA8_DETAIL),
    dynamic_viscosity=PropertyChoice(value=1.11e-5),
    isentropic_exponent=PropertyChoice(method="equation_of_state"),
    calorific_value=HEAT,
)
AIR = GasTerms(
    composition=Composition("mole", (("air", 1.0),), 1.0),
    line_model=DensityModel(StateModel.REFERENCE),
    base_model=DensityModel(StateModel.REFERENCE),
    dynamic_viscosity=PropertyChoice(value=1.82e-5),
    isentropic_exponent=PropertyChoice(method="equation_of_state"),
    calorific_value=None,
)
PLATE = OrificePlate(
    bore=0.0924,
    pipe_diameter=0.154,
    tappings=Tappings.FLANGE,
    bore_expansion=16e-6,
    pipe_expansion=11e-6,
    bore_reference_temperature=293.15,
    pipe_reference_temperature=293.15,
)
METER = MeterTerms(
    device=PLATE,
    gas="gas",
    differential_pressure="PDT-1",
    static_pressure="PT-1",
    temperature="TT-1",
    static_pressure_tapping=Tapping.DOWNSTREAM,
    thermometer=Thermometer.DOWNSTREAM,
    low_flow_cut_off=100.0,
)
ERA = Era(
    start=0,
    end=3_600_000_000,
    meter=METER,
    gas=NATURAL_GAS,
    base=BASE,
    energy=EnergyTerms(CalorificBasis.VOLUME, CalorificKind.GROSS, 288.15),
    atmospheric_pressure=None,
    static_pressure_gauge=True,
    differential_pressure_rooted=False,
    differential_pressure_range=Transmitter(0.0, 100_000.0),
    static_pressure_range=None,
    temperature_range=None,
)


@pytest.fixture(scope="module")
def library() -> GasLibrary:
    return GasLibrary()


def readings(count: int, seed: int, era: Era = ERA, highest_dp: float = 100e3) -> EraRecords:
    draw = np.random.default_rng(seed)
    return EraRecords(
        era,
        draw.uniform(200.0, highest_dp, count),
        draw.uniform(4e5, 6e6, count),
        draw.uniform(273.0, 313.0, count),
        draw.uniform(9.8e4, 1.03e5, count),
    )


def test_natural_gas_against_reference_libraries(library: GasLibrary) -> None:
    """Gauge, downstream tapping and thermometer, AGA8 DETAIL: the flow of independent scalar code.

    Sources: pyaga8 (AGA Report No. 8) for density, kappa and Joule-Thomson coefficient; fluids
    for the flow and the pressure loss (ISO 5167-2); ISO 5167-1:2003, 5.4.4.1 for T1. Limit 5e-7:
    density and kappa come from tiles, good to 2e-7 and 2e-6.
    """
    pyaga8 = pytest.importorskip("pyaga8")
    composition = pyaga8.Composition()
    for name, fraction in MOLE_FRACTIONS.items():
        setattr(composition, name, fraction)

    def state(p: float, T: float) -> pyaga8.Detail:
        detail = pyaga8.Detail()
        detail.set_composition(composition)
        detail.pressure, detail.temperature = p / 1000.0, T
        detail.calc_density()
        detail.calc_properties()
        return detail

    given = readings(200, seed=1)
    assert given.barometric_pressure is not None
    result = correct([given], library)
    base = state(101.325e3, 288.15)
    for k in range(200):
        dp = float(given.differential_pressure[k])
        p1 = float(given.static_pressure[k] + given.barometric_pressure[k]) + dp
        measured = float(given.temperature[k])
        T1 = measured
        for _ in range(8):
            gas = state(p1, T1)
            density = gas.d * gas.mm
            d = 0.0924 * (1 + 16e-6 * (T1 - 293.15))
            D = 0.154 * (1 + 11e-6 * (T1 - 293.15))
            mass_flow = differential_pressure_meter_solver(
                D=D, D2=d, rho=density, mu=1.11e-5, k=gas.kappa, P1=p1, P2=p1 - dp,
                meter_type="ISO 5167 orifice", taps="flange",
            )  # fmt: skip
            C = float(result.discharge_coefficient[k])
            T1 = measured + gas.jt / 1000.0 * dP_orifice(D, d, p1, p1 - dp, C)
        assert result.temperature_upstream[k] == pytest.approx(T1, abs=2e-6)
        assert result.line_density[k] == pytest.approx(density, rel=5e-7)
        assert result.mass_flow[k] == pytest.approx(mass_flow, rel=5e-7)
        base_volume_flow = mass_flow / (base.d * base.mm)
        assert result.base_volume_flow[k] == pytest.approx(base_volume_flow, rel=5e-7)
        assert result.energy_flow[k] == pytest.approx(base_volume_flow * 38.9e6, rel=5e-7)


@pytest.mark.parametrize("gas", [NATURAL_GAS, AIR], ids=["natural gas", "air"])
def test_thermometer_passes_suffice(
    gas: GasTerms, library: GasLibrary, monkeypatch: pytest.MonkeyPatch
) -> None:
    """One more pass changes no mass by 1e-9 at dp to 100 kPa and 6 MPa."""
    given = readings(5000, seed=2, era=replace(ERA, gas=gas))
    result = correct([given], library)
    assert (result.missing == MEASURED).all()
    monkeypatch.setattr(correction, "_THERMOMETER_PASSES", 4)
    more = correct([given], library)
    assert np.abs(more.mass_flow / result.mass_flow - 1.0).max() < 1e-9


def test_downstream_thermometer_of_a_venturi_tube(library: GasLibrary) -> None:
    """Behind a Venturi tube the gas has cooled by mu_JT times the stated part of dp.

    ISO 5167-4:2003, 5.9, has a range for the loss and no equation; 5.5.3: C is 0.995.
    """
    device = device_of(3, 0.0924, 0.154)
    assert isinstance(device, VenturiTube)
    device = replace(device, form=VenturiForm.MACHINED, calibration=None)
    given = readings(200, seed=3, era=replace(ERA, meter=replace(METER, device=device)))
    result = correct([given], library)
    p1, T1 = result.static_pressure_absolute, result.temperature_upstream
    states = library.properties(NATURAL_GAS).line_state(p1, T1)
    cooling = states.joule_thomson_coefficient * 0.12 * given.differential_pressure
    assert pytest.approx(given.temperature + cooling, abs=1e-8) == T1
    assert (cooling > 1e-4).all()
    assert (result.discharge_coefficient == 0.995).all()


def test_a_calibrated_device_in_a_record(library: GasLibrary) -> None:
    """With a certificate C is the certificate's; beyond its range of Re_D the record says so."""
    era = replace(ERA, meter=replace(METER, device=device_of(3, 0.03, 0.154)))
    result = correct([readings(200, seed=4, era=era)], library)
    assert (result.discharge_coefficient == 0.97).all()
    outside = (result.flags & correction.FLAG_BITS["reynolds_number_outside_limits"]) != 0
    assert (outside == (result.reynolds_number > 1e6)).all()
    assert 0 < outside.sum() < 200
    geometry = (result.flags & correction.FLAG_BITS["geometry_outside_limits"]) != 0
    assert not geometry.any()


def device_of(k: int, bore: float, pipe_diameter: float) -> Device:
    """Return a device of the k-th form; some are calibrated."""
    common = {
        "bore": bore,
        "pipe_diameter": pipe_diameter,
        "bore_expansion": 16e-6,
        "pipe_expansion": 11e-6,
        "bore_reference_temperature": 293.15,
        "pipe_reference_temperature": 293.15,
        "calibration": Calibration(0.97, 0.002, "C-1", (1e4, 1e6)) if k % 11 == 3 else None,
    }
    if k % 2 == 0:
        return OrificePlate(**common, tappings=list(Tappings)[k % 3])
    if k % 4 == 1:
        return Nozzle(**common, form=list(NozzleForm)[k % 3], pressure_loss_ratio=0.1)
    return VenturiTube(**common, form=list(VenturiForm)[k % 3], pressure_loss_ratio=0.12)


def many_meters(count: int) -> list[EraRecords]:
    """Meters of every kind, with zeros, gaps, reverse flow and absurd readings among them."""
    draw = np.random.default_rng(11)
    entries = []
    for k in range(count):
        D = draw.uniform(0.05, 0.6)
        device = device_of(k, D * draw.uniform(0.2, 0.75), D)
        terms = replace(
            METER,
            device=device,
            static_pressure_tapping=list(Tapping)[k % 2],
            thermometer=list(Thermometer)[k // 2 % 2],
        )
        era = replace(
            ERA,
            meter=terms,
            gas=(NATURAL_GAS, AIR)[k % 5 == 4],
            static_pressure_gauge=k % 5 < 2,
            differential_pressure_rooted=k % 7 == 0,
            atmospheric_pressure=None if k % 5 == 0 else 1e5,
        )
        n = int(draw.integers(0, 30))
        dp = draw.uniform(-1e3, 25e3, n)
        if era.differential_pressure_rooted:
            dp = np.sign(dp) * np.sqrt(np.abs(dp) / 100e3)
        p, T = draw.uniform(2e5, 6e6, n), draw.uniform(270.0, 320.0, n)
        for values in (dp, p, T):
            values[draw.random(n) < 0.03] = np.nan
        p[draw.random(n) < 0.01] = -2e5
        entries.append(EraRecords(era, dp, p, T, draw.uniform(9.8e4, 1.03e5, n)))
    return entries


def test_bits_do_not_depend_on_the_batch(
    library: GasLibrary, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A meter alone, in a batch of 7, of 1,000, and across blocks of records: identical bits.

    The parts use another gas library: what was computed before decides nothing.
    """
    entries = many_meters(1000)
    whole = correct(entries, library)
    fresh = GasLibrary()
    names = [field.name for field in fields(Corrected) if field.name != "offsets"]
    for size, step in ((1, 17), (7, 7)):
        for first in range(0, 1000, step):
            part = correct(entries[first : first + size], fresh)
            last = min(first + size, 1000)
            inside = slice(whole.offsets[first], whole.offsets[last])
            for name in names:
                expected = getattr(whole, name)[inside]
                assert getattr(part, name).tobytes() == expected.tobytes(), name
    monkeypatch.setattr(correction, "_BLOCK", 100)
    blocks = correct(entries, library)
    assert blocks.offsets.tolist() == whole.offsets.tolist()
    assert all(getattr(blocks, n).tobytes() == getattr(whole, n).tobytes() for n in names)


def test_nan_is_never_zero(library: GasLibrary) -> None:
    """A missing record has rates of NaN; a measured one has finite rates, all +0 or all above.

    Air, which has no calorific value, has no energy at any time.
    """
    entries = many_meters(300)
    result = correct(entries, library)
    missing = result.missing != MEASURED
    fuel = np.repeat([entry.era.gas is NATURAL_GAS for entry in entries], np.diff(result.offsets))
    rates = np.stack([result.mass_flow, result.line_volume_flow, result.base_volume_flow])
    assert missing.any()
    assert np.isnan(rates[:, missing]).all()
    measured = rates[:, ~missing]
    assert ((measured == 0.0).all(axis=0) | (measured > 0.0).all(axis=0)).all()
    assert not np.signbit(measured).any()
    assert (measured == 0.0).any()
    assert (np.isnan(result.energy_flow) == (missing | ~fuel)).all()
    still = ~missing & (result.mass_flow == 0.0)
    assert ((result.energy_flow == 0.0) == (still & fuel)).all()


def test_absurd_states_are_values(library: GasLibrary) -> None:
    """Readings far outside any gas's range give a flag or a reason, no exception or warning."""
    p = np.array([1e-3, 1e3, 1e10, 1e300, 2e6, 2e6, 2e6, 2e6])
    T = np.array([290.0, 290.0, 290.0, 290.0, 1e-3, 60.0, 1e5, 1e300])
    for gas in (NATURAL_GAS, AIR):
        era = replace(ERA, gas=gas, static_pressure_gauge=False)
        result = correct([EraRecords(era, np.full(8, 9e3), p, T, None)], library)
        known = result.missing == MEASURED
        rates = np.stack([result.mass_flow, result.line_volume_flow, result.base_volume_flow])
        assert np.isfinite(rates[:, known]).all()
        assert (rates[:, known] > 0.0).all()
        assert np.isnan(rates[:, ~known]).all()
        assert (result.flags[known] != 0).all()
