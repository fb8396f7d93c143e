"""What the columns of an hourly record's sensitivities are, and what they do not depend on."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from meterfix.calc.disturbance import Disturbance
from meterfix.calc.gas.properties import GasLibrary
from meterfix.calc.totals import hourly_records
from meterfix.calc.uncertainty import hourly_contributions
from meterfix.frames import PARAMETERS, SENSITIVE
from meterfix.model.site import Thermometer
from meterfix.model.uncertainty import Part, UncertaintySource


def column(record, name, subject):
    return record.sensitivities[:, record.parameters.index((name, subject))]


def some_day(lab, seed):
    """Return a short day at random: gaps, zero flow, signals at their own rates, two eras."""
    draw = np.random.default_rng(seed)
    seconds = np.arange(-60, 7320, 60)
    kept = draw.random(len(seconds)) > 0.1
    dp = np.maximum(draw.uniform(-4_000.0, 9_000.0, len(seconds)), 0.0)[kept]
    device = lab.devices[list(lab.devices)[seed % 11]]
    names = ("PDT-1", "PT-1", "TT-1") if seed % 3 else ("PDT-2", "PT-1", "TT-2")
    far = Thermometer.DOWNSTREAM if seed % 2 else Thermometer.UPSTREAM
    first = lab.era(device, hours=0.8, thermometer=far)
    second = lab.era(device, start=0.8, hours=2.0, thermometer=far, signals=names)
    return lab.meter_day(
        [first, second],
        lab.series(seconds[kept], dp, gap=130),
        lab.series(
            seconds[::4], draw.uniform(0.9e6, 4.5e6, len(seconds[::4])), linear=seed % 5 > 0
        ),
        lab.series(seconds[::7], draw.uniform(270.0, 300.0, len(seconds[::7]))),
        meter=f"FT-{seed}",
    )


def bits(record):
    return (
        record.parameters,
        record.statistics.tobytes(),
        record.sensitivities.tobytes(),
        record.random_variance.tobytes(),
    )


def test_columns_are_the_parameters_of_the_meter_sorted(lab):
    """Each parameter stands once for each of its subjects, in order."""
    one = lab.era(barometer="PB-1", device=replace(lab.devices["orifice, flange"], label="P-7"))
    record = lab.compute([lab.minute_day(one)], components={"gas": ("nitrogen", "methane")})[0]
    assert record.parameters == tuple(sorted(record.parameters))
    assert set(record.parameters) == {
        ("differential_pressure_zero", "PDT-1"),
        ("differential_pressure_span", "PDT-1"),
        ("static_pressure_zero", "PT-1"),
        ("static_pressure_span", "PT-1"),
        ("temperature_zero", "TT-1"),
        ("atmospheric_pressure", "barometer PB-1"),
        ("bore", "FT-1 P-7"),
        ("pipe_diameter", "FT-1 P-7"),
        ("discharge_coefficient", "FT-1 P-7"),
        ("expansibility", "FT-1 P-7"),
        ("dynamic_viscosity", "gas"),
        ("isentropic_exponent", "gas"),
        ("line_density", "gas"),
        ("base_density", "gas"),
        ("calorific_value", "gas"),
        ("fraction:methane", "gas"),
        ("fraction:nitrogen", "gas"),
    }
    assert record.sensitivities.shape == (2, len(record.parameters), len(SENSITIVE))


def test_a_site_without_barometer_names_the_site(lab):
    """The stated atmospheric pressure belongs to the site; absolute pressure has none."""
    stated = lab.compute([lab.minute_day(lab.era())])[0]
    assert ("atmospheric_pressure", "site") in stated.parameters
    absolute = lab.compute([lab.minute_day(lab.era(gauge=False))])[0]
    assert "atmospheric_pressure" not in {name for name, _ in absolute.parameters}


def test_gas_without_energy_has_no_calorific_parameters(lab):
    """Where energy is not reckoned its sensitivities are 0 and its parameters left out."""
    record = lab.compute([lab.minute_day(replace(lab.era(), energy=None))])[0]
    assert not {name for name, _ in record.parameters if name.startswith("calorific")}
    assert np.all(record.sensitivities[:, :, 2] == 0.0)
    assert np.all(record.random_variance[:, 2] == 0.0)


def test_zero_flow_hours_give_zeros(lab):
    """An hour without flow has sensitivities and variance of exactly 0, unstated ones too."""
    seconds = np.arange(0, 7260, 60)
    dp = np.where(seconds <= 3660, 0.0, 8_000.0)
    day = lab.meter_day(
        [lab.era()],
        lab.series(seconds, dp, linear=False),
        lab.series(seconds, 3e6),
        lab.series(seconds, 277.0),
    )
    record = lab.compute([day], components={"gas": lab.components})[0]
    assert np.all(record.sensitivities[0] == 0.0)
    assert np.all(record.random_variance[0] == 0.0)
    assert np.all(record.sensitivities[1, :, 2] != 0.0)
    assert np.all(record.random_variance[1] > 0.0)


def test_hours_without_readings_give_zeros(lab):
    """Where nothing was measured there is nothing to be sensitive."""
    nothing = lab.series([], [])
    record = lab.compute([lab.meter_day([lab.era()], nothing, nothing, nothing)])[0]
    assert record.parameters
    assert np.all(record.sensitivities == 0.0)
    assert np.all(record.random_variance == 0.0)


def test_two_transmitters_and_plates_have_columns_of_their_own(lab):
    """A transmitter or plate replaced at 00:30 gives two columns; each knows its own half hour.

    What is not replaced is one column with the sum.
    """
    plate = lab.devices["orifice, flange"]
    halves = [
        lab.era(plate, hours=0.5),
        lab.era(
            replace(plate, bore=0.11, label="P-2"),
            start=0.5,
            hours=1.0,
            signals=("PDT-2", "PT-1", "TT-1"),
        ),
    ]
    seconds = np.arange(-60, 3720, 60)
    dp, p, t = (lab.series(seconds, values) for values in lab.curves(seconds))
    later = replace(dp)  # the new transmitter's own readings
    day = lab.meter_day(halves, (dp, later), p, t)
    record = lab.compute([day])[0]
    whole = column(record, "temperature_zero", "TT-1")
    parts = []
    for signal, device, one, hours in (
        ("PDT-1", "FT-1", halves[0], (0.0, 0.5)),
        ("PDT-2", "FT-1 P-2", halves[1], (0.5, 1.0)),
    ):
        alone = lab.compute(
            [lab.meter_day([replace(one)], dp, p, t)] if hours[0] == 0.0 else [day]
        )[0]
        if hours[0] == 0.0:
            assert np.allclose(
                column(alone, "bore", device), column(record, "bore", device), rtol=1e-12
            )
            parts.append(column(alone, "temperature_zero", "TT-1"))
        theirs = lab.disturbed(day, {("differential_pressure_zero", signal): 1.0})
        ours = column(record, "differential_pressure_zero", signal)
        assert np.allclose(theirs - lab.totals(record), ours, rtol=1e-3)
    assert np.all(np.abs(whole) > np.abs(parts[0]))


def test_two_meters_share_what_they_share(lab):
    """Meters on one pressure transmitter and one gas have those columns under one name."""
    first = lab.minute_day(lab.era())
    second = replace(first, meter="FT-2")
    records = lab.compute([first, second])
    shared = set(records[0].parameters) & set(records[1].parameters)
    assert ("static_pressure_zero", "PT-1") in shared
    assert ("line_density", "gas") in shared
    assert ("bore", "FT-1") not in shared


def test_no_stated_uncertainty_is_not_known(lab):
    """Below the limits of Re_D the standard states nothing for C: NaN, and the rest stands."""
    thick = lab.era(terms=lab.gas(viscosity=1.1e-4))
    record = lab.compute([lab.minute_day(thick, dp=30.0, p=0.01e6)])[0]
    assert np.isnan(column(record, "discharge_coefficient", "FT-1")).any()
    assert np.isfinite(column(record, "bore", "FT-1")).all()
    assert np.isfinite(record.random_variance).all()


def test_bits_do_not_depend_on_the_batch(lab, gases):
    """Alone, among 7 and among 1,000 meter-days: the same bits in every figure."""
    asked = {"components": {"gas": ("methane", "nitrogen")}, "repeatability": {"PT-1": 900.0}}
    wanted = [some_day(lab, seed) for seed in range(11)]
    alone = [bits(hourly_records([day], GasLibrary(), **asked)[0]) for day in wanted[:3]]
    alone += [bits(hourly_records([day], gases, **asked)[0]) for day in wanted[3:]]
    for size in (7, 1_000):
        records = hourly_records([wanted[n % 11] for n in range(size)], gases, **asked)
        assert all(bits(record) == alone[n % 11] for n, record in enumerate(records))


@pytest.mark.parametrize("seed", range(6))
def test_totals_have_the_same_bits_with_and_without_sensitivities(lab, seed):
    """Sensitivities touch no figure; nor does a disturbance that changes nothing."""
    day = some_day(lab, seed)
    plain = lab.compute([day], sensitive=False)[0]
    assert plain.sensitivities is None
    assert plain.random_variance is None
    assert plain.parameters == ()
    beside = lab.compute([day], components={"gas": lab.components})[0]
    assert beside.statistics.tobytes() == plain.statistics.tobytes()
    elsewhere = lab.compute([day], disturbances={("bore", "another meter"): 0.1})[0]
    assert elsewhere.statistics.tobytes() == plain.statistics.tobytes()
    assert elsewhere.sensitivities is None


def test_a_disturbance_knows_every_parameter():
    """Every parameter can be disturbed, those in stated uncertainties relatively as well."""
    names = set(Disturbance.__dataclass_fields__)
    assert {name for name, _, _ in PARAMETERS} <= names
    assert {f"{name}_relative" for name, _, unit in PARAMETERS if "stated standard" in unit} <= (
        names | {"calorific_method_relative"}
    )


def test_stated_multiples_are_the_relative_change(lab):
    """One standard uncertainty of density (0.05 % here) is the same as 0.05 % of it."""
    day = lab.minute_day(lab.era())
    for name, subject, size in (
        ("line_density", "gas", 0.0005),
        ("base_density", "gas", 0.0005),
        ("discharge_coefficient", "FT-1", 0.0025),
    ):
        stated = lab.disturbed(day, {(name, subject): 2.0})
        relative = lab.disturbed(day, {(f"{name}_relative", subject): 2.0 * size})
        assert np.allclose(stated, relative, rtol=1e-13)


def test_a_disturbance_may_change_from_record_to_record(lab, gases):
    """Per-record arrays are what Monte Carlo and replays of a drift need."""
    from meterfix.calc.correct import EraRecords, correct

    dp, p, t = lab.curves(np.arange(0, 600, 60))
    records = [EraRecords(lab.era(), dp, p, t, None)]
    drift = np.linspace(0.0, 200.0, len(dp))
    moved = correct(records, gases, [Disturbance(differential_pressure_zero=drift)])
    same = correct([replace(records[0], differential_pressure=dp + drift)], gases)
    assert moved.mass_flow.tobytes() == same.mass_flow.tobytes()


@settings(max_examples=20, deadline=None)
@given(
    sizes=st.lists(st.floats(-3.0, 3.0).filter(lambda x: abs(x) > 1e-3), min_size=1, max_size=5),
    which=st.lists(st.integers(0, 14), min_size=5, max_size=5, unique=True),
)
def test_twice_the_parts_is_twice_the_contribution(lab, sizes, which):
    """A source's contribution is linear in the sizes of its parts, and their sum."""
    record = lab.compute([lab.minute_day(lab.era())])[0]
    parts = [Part(*record.parameters[n], size) for n, size in zip(which, sizes, strict=False)]

    def contribution(*parts):
        source = UncertaintySource("one", "transmitter", tuple(parts))
        return hourly_contributions(record, [source])["one"]

    once = contribution(*parts)
    twice = contribution(*(replace(part, size=2.0 * part.size) for part in parts))
    assert np.array_equal(twice, 2.0 * once)
    apart = [contribution(part) for part in parts]
    assert np.allclose(sum(apart), once, rtol=1e-12, atol=1e-12 * np.abs(apart).max())


def test_sensitivities_follow_dimensions(lab):
    """Mass is homogeneous: dp, p and density changed together leave expansibility alone.

    With a density proportional to p (ideal gas) and dp and absolute p up by a fraction, the mass
    flow goes up by that fraction, but for Re_D; a viscosity up by it as well takes care of that.
    """
    from meterfix.model.gas import StateModel

    terms = lab.gas(StateModel.IDEAL, kappa=1.3)
    record = lab.compute([lab.minute_day(lab.era(terms=terms, gauge=False))])[0]
    together = (
        column(record, "differential_pressure_span", "PDT-1")
        + column(record, "static_pressure_span", "PT-1")
        + column(record, "dynamic_viscosity", "gas")
    )
    assert np.allclose(together[:, 0], lab.totals(record)[:, 0], rtol=1e-12)


def test_diameters_together_scale_the_mass(lab):
    """Bore and pipe up by a fraction: the area, and Re_D with a wider pipe of the same speed.

    Corner tappings know no absolute length: with the viscosity up by the fraction Re_D stays.
    """
    record = lab.compute([lab.minute_day(lab.era(lab.devices["orifice, corner"]))])[0]
    together = (
        column(record, "bore", "FT-1")
        + column(record, "pipe_diameter", "FT-1")
        + column(record, "dynamic_viscosity", "gas")
    )
    assert np.allclose(together[:, 0], 2.0 * lab.totals(record)[:, 0], rtol=1e-9)
