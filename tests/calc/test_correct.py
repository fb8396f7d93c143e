"""Readings to corrected rates: tappings, thermometers, gauges, roots, zeros, reasons, flags, bits.

A gas of the tests' own stands in where its properties must be known in closed form.
"""

from __future__ import annotations

from dataclasses import dataclass, fields, replace

import numpy as np
import pytest

from meterfix.calc import correct as correction
from meterfix.calc.correct import (
    FLAG_BITS,
    MEASURED,
    MISSING_CODES,
    Corrected,
    EraRecords,
    correct,
)
from meterfix.calc.primary.flow import device_flow
from meterfix.calc.primary.orifice import pressure_loss
from meterfix.frames import FLAGS, MISSING, Era
from meterfix.model.device import OrificePlate, Tappings
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
ENERGY = EnergyTerms(CalorificBasis.VOLUME, CalorificKind.GROSS, 288.15)
HEAT = CalorificValue(38.9e6, CalorificBasis.VOLUME, CalorificKind.GROSS, 288.15, BASE)
GAS = GasTerms(
    composition=Composition("mole", (("methane", 1.0),), 1.0),
    line_model=DensityModel(StateModel.IDEAL),
    base_model=DensityModel(StateModel.IDEAL),
    dynamic_viscosity=PropertyChoice(value=1.1e-5),
    isentropic_exponent=PropertyChoice(value=1.3),
    calorific_value=HEAT,
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
    static_pressure_tapping=Tapping.UPSTREAM,
    thermometer=Thermometer.UPSTREAM,
    low_flow_cut_off=100.0,
)
ERA = Era(
    start=0,
    end=3_600_000_000,
    meter=METER,
    gas=GAS,
    base=BASE,
    energy=ENERGY,
    atmospheric_pressure=100_000.0,
    static_pressure_gauge=False,
    differential_pressure_rooted=False,
    differential_pressure_range=Transmitter(0.0, 25_000.0),
    static_pressure_range=None,
    temperature_range=None,
)
RATES = ("mass_flow", "line_volume_flow", "base_volume_flow", "energy_flow")


@dataclass
class State:
    density: np.ndarray
    compression_factor: np.ndarray
    isentropic_exponent: np.ndarray
    joule_thomson_coefficient: np.ndarray
    dynamic_viscosity: np.ndarray
    outside_range: np.ndarray
    no_gas: np.ndarray


class KnownGas:
    """rho = p / (500 T) and mu_JT = 4.5e-6 K/Pa falling 1 % per K; no gas below 200 K."""

    def __init__(self, library: KnownLibrary, terms: GasTerms) -> None:
        self.gases = library
        self.terms = terms
        self.simplified = terms.line_model.model is StateModel.FIXED

    def line_state(self, static_pressure: np.ndarray, temperature: np.ndarray) -> State:
        self.gases.calls.append(len(static_pressure))
        no_gas = ~(temperature >= 200.0)
        ones = np.where(no_gas, np.nan, 1.0)
        return State(
            density=ones * static_pressure / (500.0 * temperature),
            compression_factor=0.95 * ones,
            isentropic_exponent=1.3 * ones,
            joule_thomson_coefficient=4.5e-6 * (1.0 - 0.01 * (temperature - 300.0)) * ones,
            dynamic_viscosity=1.1e-5 * ones,
            outside_range=temperature > 350.0,
            no_gas=no_gas,
        )

    def base_density(self, base: BaseConditions) -> float:
        return base.base_pressure / (500.0 * base.base_temperature)

    def energy_factor(
        self, base: BaseConditions, energy: EnergyTerms
    ) -> tuple[float, CalorificBasis]:
        value = self.terms.calorific_value
        assert value is not None
        assert (base, energy) == (BASE, ENERGY)
        return value.value, value.basis


class KnownLibrary:
    """Gives a KnownGas for any terms, and remembers what it was asked."""

    def __init__(self) -> None:
        self.calls: list[int] = []
        self.asked: list[GasTerms] = []

    def properties(self, terms: GasTerms) -> KnownGas:
        self.asked.append(terms)
        return KnownGas(self, terms)


def meter(**changes: object) -> Era:
    return replace(ERA, meter=replace(METER, **changes))


def plate(**changes: object) -> Era:
    return meter(device=replace(PLATE, **changes))


def records(
    dp: object, p: object = 2e6, T: object = 300.0, era: Era = ERA, barometer: object = None
) -> EraRecords:
    dp, p, T = (np.array(a, dtype=float) for a in np.broadcast_arrays(np.atleast_1d(dp), p, T))
    given = None if barometer is None else np.array(np.broadcast_to(barometer, dp.shape), float)
    return EraRecords(era, dp, p, T, given)


def run(*entries: EraRecords) -> Corrected:
    return correct(entries, KnownLibrary())


def reasons(result: Corrected) -> list[str]:
    return ["" if m == MEASURED else MISSING[m][0] for m in result.missing]


def flagged(result: Corrected) -> list[set[str]]:
    return [{name for name, bit in FLAG_BITS.items() if mask & bit} for mask in result.flags]


def rates(result: Corrected) -> np.ndarray:
    return np.stack([getattr(result, name) for name in RATES])


def same_bits(a: Corrected, b: Corrected) -> bool:
    return all(
        getattr(a, field.name).tobytes() == getattr(b, field.name).tobytes()
        for field in fields(Corrected)
    )


def test_codes_follow_the_frames() -> None:
    """Flag bits and missing codes are the order of frames.FLAGS and frames.MISSING."""
    assert [int(bit) for bit in FLAG_BITS.values()] == [2**n for n in range(len(FLAGS))]
    assert [MISSING[code][0] for code in MISSING_CODES.values()] == list(MISSING_CODES)


def test_plain_record_is_the_flow_equation() -> None:
    """Upstream tapping, upstream thermometer, absolute: ISO 5167 at p, T and warm diameters."""
    result = run(records([10_000.0, 20_000.0], p=2e6, T=310.0))
    warm = 310.0 - 293.15
    density = 2e6 / (500.0 * 310.0)
    expected = device_flow(
        differential_pressure=np.array([10_000.0, 20_000.0]),
        static_pressure=np.full(2, 2e6),
        density=np.full(2, density),
        dynamic_viscosity=np.full(2, 1.1e-5),
        isentropic_exponent=np.full(2, 1.3),
        bore=np.full(2, 0.0924 * (1 + 16e-6 * warm)),
        pipe_diameter=np.full(2, 0.154 * (1 + 11e-6 * warm)),
        form=np.full(2, 2),
    )
    assert result.mass_flow == pytest.approx(expected.mass_flow, rel=1e-14)
    assert result.discharge_coefficient == pytest.approx(expected.discharge_coefficient, rel=1e-14)
    assert result.line_volume_flow == pytest.approx(expected.mass_flow / density, rel=1e-14)
    base_density = 101_325.0 / (500.0 * 288.15)
    assert result.base_volume_flow == pytest.approx(expected.mass_flow / base_density, rel=1e-14)
    assert result.energy_flow == pytest.approx(result.base_volume_flow * 38.9e6, rel=1e-14)
    assert result.line_density == pytest.approx(density, rel=1e-15)
    assert (result.missing == MEASURED).all()
    assert (result.flags == 0).all()


def test_gauge_plus_atmosphere_is_absolute() -> None:
    """A gauge reading plus the era's atmosphere, or plus the barometer's, is the absolute one."""
    absolute = run(records([9e3], p=2.1e6))
    by_value = replace(ERA, static_pressure_gauge=True)
    by_barometer = replace(by_value, atmospheric_pressure=None)
    assert same_bits(run(records([9e3], p=2.0e6, era=by_value)), absolute)
    assert same_bits(run(records([9e3], p=2.0e6, era=by_barometer, barometer=1e5)), absolute)
    moved = run(records([9e3, 9e3], p=2.0e6, era=by_barometer, barometer=[1e5, 1.02e5]))
    assert moved.static_pressure_absolute.tolist() == [2.1e6, 2.102e6]


def test_missing_barometer() -> None:
    """A missing barometric pressure is missed by gauge transmitters only."""
    gauge = replace(ERA, static_pressure_gauge=True, atmospheric_pressure=None)
    absolute = replace(ERA, atmospheric_pressure=None)
    result = run(
        records([9e3, 9e3], era=gauge, barometer=[1e5, np.nan]),
        records([9e3], era=gauge),
        records([9e3], era=absolute),
        records([50.0], era=gauge),
    )
    lost = "missing_barometric_pressure"
    assert reasons(result) == ["", lost, lost, "", ""]


def test_downstream_tapping() -> None:
    """With the static pressure taken downstream, p1 = p2 + dp."""
    era = meter(static_pressure_tapping=Tapping.DOWNSTREAM)
    result = run(records([8e3, 20e3], p=[1.992e6, 1.98e6], era=era))
    assert same_bits(result, run(records([8e3, 20e3], p=2e6)))


def test_downstream_thermometer() -> None:
    """T1 = T + mu_JT(p1, T1) x pressure loss; a thermometer at T1 upstream gives that flow.

    Source: ISO 5167-1:2003, 5.4.4.1; ISO 5167-2:2003, 5.4.1.
    """
    era = meter(thermometer=Thermometer.DOWNSTREAM)
    dp = np.array([1e3, 25e3, 100e3])
    result = run(records(dp, p=2e6, T=300.0, era=era))
    T1 = result.temperature_upstream
    ratio = 0.0924 * (1 + 16e-6 * (T1 - 293.15)) / (0.154 * (1 + 11e-6 * (T1 - 293.15)))
    loss = pressure_loss(dp, result.discharge_coefficient, diameter_ratio=ratio)
    assert pytest.approx(300.0 + 4.5e-6 * (1 - 0.01 * (T1 - 300.0)) * loss, abs=1e-8) == T1
    assert (3e-6 * 0.5 * dp < T1 - 300.0).all()
    upstream = run(records(dp, p=2e6, T=T1))
    assert upstream.mass_flow.tobytes() == result.mass_flow.tobytes()


def test_thermometer_passes_suffice(monkeypatch: pytest.MonkeyPatch) -> None:
    """One more pass changes no mass by 1e-9, up to dp of 100 kPa and 8 MPa; two would not do."""
    era = meter(thermometer=Thermometer.DOWNSTREAM)
    draw = np.random.default_rng(5)
    given = records(
        draw.uniform(100.0, 100e3, 5000),
        p=draw.uniform(5e5, 8e6, 5000),
        T=draw.uniform(255.0, 330.0, 5000),
        era=era,
    )
    result = run(given).mass_flow
    assert not np.isnan(result).any()
    monkeypatch.setattr(correction, "_THERMOMETER_PASSES", 4)
    assert np.abs(run(given).mass_flow / result - 1.0).max() < 1e-9
    monkeypatch.setattr(correction, "_THERMOMETER_PASSES", 1)
    assert np.abs(run(given).mass_flow / result - 1.0).max() > 1e-7


def test_rooted_is_linear() -> None:
    """A rooted reading x means dp = lower + x^2 (upper - lower); full scale is exactly upper."""
    era = replace(ERA, differential_pressure_rooted=True)
    dp = np.array([900.0, 10e3, 25e3])
    result = run(records(np.sqrt(dp / 25e3), era=era))
    assert result.differential_pressure == pytest.approx(dp, rel=1e-15)
    assert result.differential_pressure[2] == 25e3
    assert result.mass_flow == pytest.approx(run(records(dp)).mass_flow, rel=1e-14)
    assert flagged(result) == [set(), set(), {"over_range"}]
    elevated = replace(era, differential_pressure_range=Transmitter(-5e3, 25e3))
    assert run(records([0.5], era=elevated)).differential_pressure[0] == -5e3 + 0.25 * 30e3


def test_negative_root_is_reverse_flow() -> None:
    """The sign of a rooted reading is kept: a square must not turn reverse flow forward."""
    era = replace(ERA, differential_pressure_rooted=True)
    result = run(records([-0.5, -0.01], era=era))
    assert result.differential_pressure.tolist() == [-6250.0, -2.5]
    assert reasons(result) == ["reverse_flow", ""]
    assert result.mass_flow[1] == 0.0


def test_low_flow_cut_off_is_exactly_zero() -> None:
    """|dp| below the cut-off is a measured flow of exactly +0.0; at the cut-off gas flows."""
    result = run(records([0.0, -0.0, 99.9, -99.9, 100.0]))
    assert rates(result)[:, :4].tobytes() == np.zeros((4, 4)).tobytes()
    assert (rates(result)[:, 4] > 0.0).all()
    assert (result.missing == MEASURED).all()
    assert (result.flags == 0).all()


def test_zero_flow_needs_neither_pressure_nor_temperature() -> None:
    """Below the cut-off a record is a measured zero even if p, T and barometer are missing."""
    gauge = replace(ERA, static_pressure_gauge=True, atmospheric_pressure=None)
    result = run(records([50.0, 50.0, 50.0], p=[np.nan, 2e6, np.nan], T=[300.0, np.nan, np.nan]))
    nothing = run(records([50.0], p=np.nan, T=np.nan, era=gauge))
    for found in (result, nothing):
        assert (rates(found) == 0.0).all()
        assert (found.missing == MEASURED).all()


def test_without_a_cut_off_only_zero_is_zero() -> None:
    """With a cut-off of 0, dp = 0 is no flow and the least negative dp is reverse."""
    result = run(records([0.0, -1e-3, 500.0], era=meter(low_flow_cut_off=0.0)))
    assert reasons(result) == ["", "reverse_flow", ""]
    assert result.mass_flow[0] == 0.0
    assert result.mass_flow[2] > 0.0


def test_reverse_flow() -> None:
    """A dp at or below minus the cut-off is reverse flow: not known, not zero, not negative."""
    result = run(records([-100.0, -5e3], p=[np.nan, 2e6]))
    assert reasons(result) == ["reverse_flow", "reverse_flow"]
    assert np.isnan(rates(result)).all()


@pytest.mark.parametrize(
    ("dp", "p", "T", "reason"),
    [
        (np.nan, 2e6, 300.0, "missing_differential_pressure"),
        (np.inf, 2e6, 300.0, "missing_differential_pressure"),
        (-np.inf, np.inf, 300.0, "missing_differential_pressure"),
        (9e3, np.nan, 300.0, "missing_static_pressure"),
        (9e3, np.inf, 300.0, "missing_static_pressure"),
        (9e3, np.nan, np.nan, "missing_static_pressure"),
        (9e3, 2e6, np.nan, "missing_temperature"),
        (9e3, 2e6, np.inf, "missing_temperature"),
        (9e3, 0.0, 300.0, "impossible_state"),
        (9e3, -1e5, 300.0, "impossible_state"),
        (9e3, 2e6, 0.0, "impossible_state"),
        (9e3, 2e6, -5.0, "impossible_state"),
        (9e3, 2e6, 150.0, "no_gas_state"),
    ],
)
@pytest.mark.parametrize("thermometer", list(Thermometer))
@pytest.mark.parametrize("tapping", list(Tapping))
def test_bad_reading_is_missing_with_its_reason(
    dp: float, p: float, T: float, reason: str, thermometer: Thermometer, tapping: Tapping
) -> None:
    """Each kind of bad reading is NaN with its reason, never zero, and spoils no neighbour."""
    era = meter(thermometer=thermometer, static_pressure_tapping=tapping)
    result = run(records([9e3, dp, 9e3], p=[2e6, p, 2e6], T=[300.0, T, 300.0], era=era))
    clean = run(records([9e3], era=era))
    assert reasons(result) == ["", reason, ""]
    assert np.isnan(rates(result)[:, 1]).all()
    assert (rates(result)[:, [0, 2]] == rates(clean)).all()
    assert result.flags[1] == 0


def test_dp_that_leaves_no_pressure_downstream() -> None:
    """A dp as large as p1 leaves no gas behind the plate; as large as p2 it is a flow."""
    result = run(
        records([9e3], p=9e3),
        records([9e3], p=9e3, era=meter(static_pressure_tapping=Tapping.DOWNSTREAM)),
    )
    assert reasons(result) == ["impossible_state", ""]
    assert flagged(result) == [set(), {"pressure_ratio_outside_limits"}]


def test_flow_that_does_not_converge() -> None:
    """Below Re_D = 500 there is no number: missing as not converged, either thermometer."""
    era = meter(low_flow_cut_off=0.0)
    far = meter(low_flow_cut_off=0.0, thermometer=Thermometer.DOWNSTREAM)
    result = run(records([1e-9], p=1e5, era=era), records([1e-9], p=1e5, era=far))
    assert reasons(result) == ["not_converged", "not_converged"]
    assert np.isnan(rates(result)).all()


def test_absurd_temperature_is_no_exception() -> None:
    """A reading of 1e9 K, at which the bore would outgrow the pipe, is a value, not an error."""
    era = plate(bore=0.115)
    result = run(records([9e3, 9e3], T=[300.0, 1e9], era=era))
    assert reasons(result) == ["", "not_converged"]


def test_impossible_plate_is_refused() -> None:
    """A bore not smaller than its pipe raises and names both."""
    with pytest.raises(ValueError, match="bore is 158 mm in a pipe of 154 mm"):
        run(records([9e3], era=plate(bore=0.158)))


@pytest.mark.parametrize(
    ("flag", "entry"),
    [
        ("pressure_ratio_outside_limits", records([10e3], p=39e3)),
        ("reynolds_number_outside_limits", records([150.0], p=1.1e3)),
        ("geometry_outside_limits", records([9e3], era=plate(bore=0.1156))),
        ("gas_model_outside_range", records([9e3], T=351.0)),
        (
            "gas_model_simplified",
            records(
                [9e3],
                era=replace(ERA, gas=replace(GAS, line_model=DensityModel(StateModel.FIXED, 0.95))),
            ),
        ),
        ("over_range", records([25e3])),
        (
            "signal_outside_range",
            records([9e3], p=2.1e6, era=replace(ERA, static_pressure_range=Transmitter(0.0, 2e6))),
        ),
        (
            "signal_outside_range",
            records([9e3], T=260.0, era=replace(ERA, temperature_range=Transmitter(263.0, 333.0))),
        ),
    ],
)
def test_flags_are_raised_and_the_flow_computed(flag: str, entry: EraRecords) -> None:
    """Outside limits, models or ranges a record is flagged, that flag alone, and computed."""
    result = run(entry, records([9e3]))
    assert flagged(result) == [{flag}, set()]
    assert (rates(result) > 0.0).all()


def test_flags_need_a_flow() -> None:
    """Neither zero flow nor a missing record carries a flag: there is no flow to flag."""
    narrow = replace(ERA, static_pressure_range=Transmitter(0.0, 1e6))
    result = run(records([50.0, -9e3, 9e3, 30e3], T=[300.0, 300.0, 150.0, np.nan], era=narrow))
    assert (result.flags == 0).all()
    assert reasons(result) == ["", "reverse_flow", "no_gas_state", "missing_temperature"]


def test_geometry_is_judged_at_the_reference_temperature() -> None:
    """A bore of exactly 12.5 mm is inside on a cold day too."""
    era = plate(bore=0.0125, pipe_diameter=0.05)
    assert flagged(run(records([9e3], T=260.0, era=era))) == [set()]


def test_energy_by_volume_by_mass_and_none() -> None:
    """Energy is base volume or mass times the calorific value; without either it is not known."""
    by_mass = replace(GAS, calorific_value=replace(HEAT, value=50e6, basis=CalorificBasis.MASS))
    result = run(
        records([9e3, 0.0]),
        records([9e3, 0.0], era=replace(ERA, gas=by_mass)),
        records([9e3, 0.0], era=replace(ERA, energy=None)),
        records([9e3, 0.0], era=replace(ERA, gas=replace(GAS, calorific_value=None))),
    )
    energy, mass = result.energy_flow, result.mass_flow
    assert energy[:4].tolist() == [
        result.base_volume_flow[0] * 38.9e6, 0.0, mass[2] * 50e6, 0.0,
    ]  # fmt: skip
    assert np.isnan(energy[4:]).all()
    assert (mass[::2] > 0.0).all()


def test_no_records() -> None:
    """No eras, and eras without records, give empty arrays and honest offsets."""
    nothing = run()
    assert nothing.offsets.tolist() == [0]
    assert len(nothing.mass_flow) == 0
    result = run(records([]), records([9e3, 0.0]), records([]), records([9e3]))
    assert result.offsets.tolist() == [0, 0, 2, 2, 3]
    assert len(result.mass_flow) == len(result.flags) == len(result.missing) == 3
    assert len(run(records([]), records([])).mass_flow) == 0


def test_each_gas_is_evaluated_once() -> None:
    """A hundred meters on two gases ask for two line states, equal terms being one gas."""
    twin = replace(GAS)
    other = replace(GAS, isentropic_exponent=PropertyChoice(value=1.2))
    library = KnownLibrary()
    gases = (GAS, other, twin)
    correct([records([9e3, 1e4], era=replace(ERA, gas=gases[k % 3])) for k in range(99)], library)
    assert library.asked == [GAS, other]
    assert sorted(library.calls) == [66, 132]


def test_inputs_are_left_alone() -> None:
    """The readings given are not written to."""
    entry = records([9e3], era=meter(thermometer=Thermometer.DOWNSTREAM))
    run(entry)
    assert entry.temperature.tolist() == [300.0]
    assert entry.static_pressure.tolist() == [2e6]
