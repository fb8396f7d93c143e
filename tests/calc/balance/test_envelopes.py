"""The balance of an envelope: figures, missing input, verdicts."""

from __future__ import annotations

from datetime import date

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from meterfix.calc.balance.envelopes import (
    BALANCE_COLUMNS,
    Answer,
    day_balance,
    significance,
)
from meterfix.frames import HOURLY_COLUMNS, HOURLY_INDEX, HourlyRecord
from meterfix.model.site import Envelope, Tolerance
from meterfix.model.versions import always

TOLERANCE = Tolerance(0.015)
WORKS = Envelope(
    "works",
    "",
    inflow=("A", "B"),
    outflow=("C",),
    vented=("V",),
    quantities=("mass",),
    tolerance=always(TOLERANCE),
)


def record(mass, *, measured=None, gas_day=date(2026, 1, 15)):
    """Make a record with the mass of each hour, measured throughout unless said."""
    statistics = np.full((len(mass), len(HOURLY_COLUMNS)), np.nan)
    for name in HOURLY_COLUMNS:
        if name.startswith("lost_") or name in ("flow_time", "disputed_readings"):
            statistics[:, HOURLY_INDEX[name]] = 0.0
    statistics[:, HOURLY_INDEX["duration"]] = 3600.0
    statistics[:, HOURLY_INDEX["measured_time"]] = 3600.0 if measured is None else measured
    statistics[:, HOURLY_INDEX["mass"]] = mass
    return HourlyRecord("", gas_day, 0, statistics)


def works(**changed):
    records = {
        "A": record([600.0, 500.0]),
        "B": record([400.0, 500.0]),
        "C": record([980.0, 1010.0]),
        "V": record([5.0, 0.0]),
    }
    return records | changed


def column(balance, name):
    return balance.hourly[:, BALANCE_COLUMNS.index(name)]


def test_a_complete_day_closes():
    """2,000 kg in, 1,990 out, 5 vented: 5 kg of imbalance, within 1.5 % of what went in."""
    balance = day_balance(WORKS, "mass", works(), TOLERANCE)
    assert (balance.inflow, balance.outflow, balance.vented) == (2000.0, 1990.0, 5.0)
    assert balance.imbalance == 5.0
    assert balance.tolerance == 30.0
    assert str(balance.beyond_tolerance) == "no"
    assert balance.measured_fraction == 1.0
    assert balance.reason == ""
    assert column(balance, "in").tolist() == [1000.0, 1000.0]
    assert column(balance, "out").tolist() == [980.0, 1010.0]
    assert column(balance, "vented").tolist() == [5.0, 0.0]
    assert column(balance, "imbalance").tolist() == [15.0, -10.0]
    assert column(balance, "measured_fraction").tolist() == [1.0, 1.0]


@pytest.mark.parametrize(
    ("out", "answer"), [(965.0, "no"), (964.0, "yes"), (1025.0, "no"), (1026.0, "yes")]
)
def test_beyond_tolerance_either_way(out, answer):
    """30 kg either way of 2,000 kg is within 1.5 %; one more is beyond."""
    records = works(C=record([out, 1000.0]), V=record([5.0, 0.0]))
    balance = day_balance(WORKS, "mass", records, TOLERANCE)
    assert balance.imbalance == 995.0 - out
    assert str(balance.beyond_tolerance) == answer


def test_no_verdict_where_none_can_be_given():
    """Hours lack storage, significance lacks an uncertainty, no tolerance is no verdict."""
    balance = day_balance(WORKS, "mass", works(), None)
    assert str(balance.hourly_verdict) == "cannot be judged: storage is not configured"
    assert str(balance.significant) == "cannot be judged: no source of uncertainty is stated"
    assert str(balance.beyond_tolerance) == "cannot be judged: no tolerance is stated"
    assert balance.storage_change is None
    assert balance.storage_reason == "storage is not configured"
    assert balance.tolerance is None


def test_missing_input_takes_the_imbalance_and_names_the_meter():
    """Meter C misses a second of hour 1: no imbalance there and none for the day, hour 0 stands."""
    records = works(C=record([980.0, 1010.0], measured=[3600.0, 3599.0]))
    balance = day_balance(WORKS, "mass", records, TOLERANCE)
    assert balance.imbalance is None
    assert balance.outflow == 1990.0
    assert str(balance.beyond_tolerance) == (
        "cannot be judged: missing input: C (99.9861 % measured)"
    )
    assert column(balance, "imbalance")[0] == 15.0
    assert np.isnan(column(balance, "imbalance")[1])
    assert column(balance, "out").tolist() == [980.0, 1010.0]
    assert balance.hourly_reasons == ("", "missing input: C (99.9722 % measured)")
    assert balance.measured_fraction == 7199.0 / 7200.0
    assert column(balance, "measured_fraction").tolist() == [1.0, 3599.0 / 3600.0]


def test_a_microsecond_is_not_rounded_to_all():
    """A meter that misses a microsecond says so: the reason cuts, and never rounds up."""
    records = works(A=record([600.0, 500.0], measured=[3600.0, 3599.999999]))
    balance = day_balance(WORKS, "mass", records, TOLERANCE)
    assert balance.reason == "missing input: A (99.9999 % measured)"
    assert balance.imbalance is None


@pytest.mark.parametrize("records", [works(B=None), {k: v for k, v in works().items() if k != "B"}])
def test_a_meter_without_a_record_leaves_no_sum(records):
    """Without any record of B, what went in is not known and its reason names B."""
    balance = day_balance(WORKS, "mass", records, TOLERANCE)
    assert balance.inflow is None
    assert balance.outflow == 1990.0
    assert (balance.imbalance, balance.tolerance) == (None, None)
    assert balance.measured_fraction == 0.0
    assert balance.beyond_tolerance.answer is Answer.CANNOT_BE_JUDGED
    assert balance.reason == "missing input: B (no record)"
    assert np.isnan(column(balance, "in")).all()
    assert column(balance, "measured_fraction").tolist() == [0.0, 0.0]


def test_a_quantity_that_a_meter_does_not_have_is_named():
    """Measured throughout but without energy: cannot be judged, every meter is named."""
    balance = day_balance(WORKS, "energy", works(), TOLERANCE)
    assert (balance.inflow, balance.imbalance) == (None, None)
    lack = "no energy for 7200.0 s of the measured time"
    assert balance.reason == f"missing input: A ({lack}), B ({lack}), C ({lack}), V ({lack})"


def test_energy_of_a_part_of_the_day_is_no_input():
    """A has energy in hour 1 only and misses a second of it: nothing goes in, both are named."""
    records = works(A=record([600.0, 500.0], measured=[3600.0, 3599.0]))
    for one in records.values():
        one.statistics[:, HOURLY_INDEX["energy"]] = 40e6
    records["A"].statistics[0, HOURLY_INDEX["energy"]] = np.nan
    balance = day_balance(WORKS, "energy", records, TOLERANCE)
    assert (balance.inflow, balance.imbalance, balance.tolerance) == (None, None, None)
    assert balance.outflow == 80e6
    lack = "no energy for 3600.0 s of the measured time"
    assert balance.reason == f"missing input: A (99.9861 % measured, {lack})"
    assert balance.hourly_reasons[0] == f"missing input: A ({lack})"
    assert np.isnan(column(balance, "in")[0])
    assert column(balance, "in")[1] == 80e6


def test_a_day_with_missing_input_has_no_tolerance():
    """1.5 % of a part of what went in is not the contract's figure: there is none."""
    records = works(A=record([600.0, np.nan], measured=[3600.0, 0.0]))
    balance = day_balance(WORKS, "mass", records, TOLERANCE)
    assert balance.inflow == 1500.0
    assert balance.tolerance is None


def test_an_hour_without_a_number_is_missing_input():
    """A has mass in hour 0 only: the day's sum holds what there is, and is not judged."""
    records = works(A=record([600.0, np.nan], measured=[3600.0, 0.0]))
    balance = day_balance(WORKS, "mass", records, TOLERANCE)
    assert balance.inflow == 600.0 + 900.0
    assert balance.imbalance is None
    assert balance.reason == "missing input: A (50.0 % measured)"
    assert np.isnan(column(balance, "in")[1])


def test_an_envelope_without_any_record_has_no_hours():
    """Nothing at all: no gas day, no hours, no figures, no verdict."""
    balance = day_balance(WORKS, "mass", {}, TOLERANCE)
    assert balance.hourly.shape == (0, len(BALANCE_COLUMNS))
    assert (balance.gas_day, balance.inflow, balance.imbalance) == (None, None, None)
    assert balance.beyond_tolerance.answer is Answer.CANNOT_BE_JUDGED


def test_records_of_different_gas_days_are_refused():
    """The message names the envelope."""
    records = works(A=record([600.0, 500.0], gas_day=date(2026, 1, 16)))
    with pytest.raises(ValueError, match="envelope works: records of different gas days"):
        day_balance(WORKS, "mass", records, TOLERANCE)


def test_an_unknown_quantity_is_refused():
    """The message names what is allowed."""
    with pytest.raises(ValueError, match="'volume'; it must be one of mass, base_volume, energy"):
        day_balance(WORKS, "volume", works(), TOLERANCE)


hourly_masses = st.lists(st.floats(0.0, 1e9), min_size=3, max_size=3)


@given(a=hourly_masses, b=hourly_masses, c=hourly_masses, v=hourly_masses)
def test_the_balance_closes(a, b, c, v):
    """The imbalance is in - out - vented to the last bit, per hour and for the day."""
    records = {"A": record(a), "B": record(b), "C": record(c), "V": record(v)}
    balance = day_balance(WORKS, "mass", records, TOLERANCE)
    assert balance.imbalance == balance.inflow - balance.outflow - balance.vented
    hours = {name: column(balance, name) for name in BALANCE_COLUMNS}
    np.testing.assert_array_equal(hours["imbalance"], hours["in"] - hours["out"] - hours["vented"])
    assert not np.signbit(balance.hourly[balance.hourly == 0.0]).any()
    swapped = day_balance(
        Envelope("works", "", ("B", "A"), ("C",), ("V",), ("mass",), always(TOLERANCE)),
        "mass",
        records,
        TOLERANCE,
    )
    assert swapped.imbalance == balance.imbalance
    assert swapped.hourly.tobytes() == balance.hourly.tobytes()


def test_significance_compares_the_imbalance_with_its_own_expanded_uncertainty():
    """An imbalance of 5 is significant beside 4.9 and not beside 5.1; unknown beside None."""
    assert str(significance(5.0, 4.9, "")) == "yes"
    assert str(significance(-5.0, 4.9, "")) == "yes"
    assert str(significance(5.0, 5.1, "")) == "no"
    assert str(significance(5.0, None, "")).startswith("cannot be judged: no source")
    unstated = str(significance(5.0, None, "", ("A C", "B C")))
    assert unstated.startswith("cannot be judged: no uncertainty is stated for A C, B C (outside")
    assert str(significance(5.0, 4.9, "A (no record)")) == "cannot be judged: A (no record)"
    assert str(significance(None, 4.9, "")).startswith("cannot be judged")
