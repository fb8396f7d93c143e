"""Totals: corrected records integrated over the hours of a gas day, and what later checks need.

The rules, exactly
------------------
*Time.* A gas day is [start, end) in UTC microseconds. Its hours count in elapsed time from the
start, so it has 23, 24 or 25 of them, or a short last one. All times are summed as integers and
converted to seconds once, so measured time and losses add up to the duration exactly.

*Stretches.* The day is cut into stretches in which era and signals stand still. Every stretch
is computed alone: its own signals, its own constants, at the records inside it and at the
neighbour on either side, so that a record beside the edge of an era is computed twice. No
interval runs from one transmitter's record to another's: at an edge each signal's own reading
beyond it serves, if there is one.

*Records* stand at the readings of differential pressure that are not inside an excluded
interval [start, end) of their signal. Static pressure, temperature and barometric pressure reach
a record by their own rule, excluded readings dropped beforehand:

- a reading at the very instant wins;
- linear: between the neighbours t_a < t < t_b if t_b - t_a <= maximum_gap;
- hold: the last reading if t - t_a <= maximum_age;
- interval-stamped: the reading whose own interval [t_a, t_a + interval) holds t;
- else not known.

*Between records.* For instants, the interval [t0, t1] of two successive records counts if
t1 - t0 <= maximum_gap, else it is lost whole to ``missing_differential_pressure``. Linear: the
computed *rates* of mass, line volume, base volume and energy run linearly; hold: the first
record's rates hold. The last record contributes nothing until there is a next one. Interval-
stamped: a record's rates hold over [t, min(t + interval, next t)) and nowhere else. A record
without a rate takes its interval with it (linear: either end, the first one's reason counts;
otherwise: the first record's reason).

*Pieces.* Intervals are cut at the edges of stretches, hours and excluded intervals of the
differential pressure. A piece [u, v] contributes (v - u) (r(u) + r(v)) / 2. A piece inside an
excluded interval is lost to ``excluded``, time outside every era to ``meter_not_in_service``.

*Per hour.* A total is the sum over the measured pieces in order of time; NaN where nothing was
measured or where the quantity does not exist in a measured part of the hour. Mass decides what
is measured. Flow time is the time of the measured pieces in which mass flows at either end. The
share of a flag is the flow time of the pieces whose record (linear: either end's record) carries
it, divided by the flow time; NaN without flow. ``disputed_readings`` counts the distinct disputed
readings of differential pressure, static pressure and temperature that a measured piece of the
hour uses, each at its record or through an interpolation.

*Flags set here.* ``disputed_reading``, ``implausible_value`` and ``doubtful_quality``: any
reading used at the record (the barometer's too) is so marked, either neighbour where it was
interpolated.
``carried_value``: static pressure or temperature has no reading at the record's own instant.
``mean_of_differential_pressure``: the cells are means and not yet rooted.

*Signals.* Statistics run over a signal's own readings in the hour, excluded ones left out. Pairs
are successive readings of one signal inside one hour. ``count_at_maximum`` counts readings at or
above the transmitter's upper range value (1 for a rooted signal); where no range is known, those
equal to the hour's maximum. The statistics of flowing records take each record once, with the
constants in force at its instant.

*Sensitivities.* A total is linear in its records' rates, so its derivative by a parameter is the
same integral over the same pieces of the rate's derivative (`calc.sensitivity`). Parameters are
named by whose they are: two transmitters, plates or gases of a day have columns of their own.
What of it is per hour and not per record stands in `composition`. *Random variance*: `noise`.

Nothing depends on what else is in the batch.
"""

from __future__ import annotations

from meterfix.calc.totals.hourly import hourly_records
from meterfix.calc.totals.periods import PeriodTotal, day_total, month_total

__all__ = ["PeriodTotal", "day_total", "hourly_records", "month_total"]
