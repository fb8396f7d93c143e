"""Simulated works: every error drawn, the truth made, and what the transmitters log of it.

The truth's total is the integral of the true rates by straight lines between the very instants
of the log, so that nothing between readings adds to what is compared.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import date, timedelta

import numpy as np
from works_physics import (
    COMPONENTS,
    Gas,
    Strangeness,
    Throat,
    TrueGas,
    flow_behind,
    gross_calorific_value,
    pressure_across,
    reynolds_number,
)
from works_site import (
    ATMOSPHERE,
    CALIBRATED_AT,
    CONSUMERS,
    CUT_OFF,
    DESIGNS,
    DOWNSTREAM,
    EXPONENT,
    METERS,
    NOISE,
    NOISE_GROUP,
    PRESSURES,
    RECTANGULAR,
    ROOT3,
    ROOTED,
    STATED_VALUE,
    SUPPLY,
    TEMPERATURES,
    VISCOSITY,
    design,
    errors,
    transmitter,
)

QUANTITIES = ("mass", "base_volume", "energy")
SECONDS_OF_A_DAY = 86_400
EVERY_THIRD = 3
"""Temperatures are logged at every third instant of dp and run straight between."""


@dataclass(frozen=True)
class Period:
    """Gas days and how often the works log."""

    first: date
    days: int
    start: int
    """UTC s; no clock change inside."""
    interval: int
    """s between readings of dp and static pressure."""

    @property
    def instants(self):
        """Return the instants of dp [UTC s]: one before the start, two after the end."""
        count = self.days * SECONDS_OF_A_DAY // self.interval
        steps = np.arange(-1, count + 1 + (-count) % EVERY_THIRD + EVERY_THIRD)
        steps = steps[: len(steps) - (len(steps) - 1) % EVERY_THIRD]
        return self.start + steps * self.interval

    @property
    def gas_days(self):
        return [self.first + timedelta(days=n) for n in range(self.days)]


DAY = Period(date(2026, 9, 15), 1, 1_789_444_800, 300)
MONTH = Period(date(2026, 9, 1), 30, 1_788_235_200, 3600)


@dataclass(frozen=True)
class Simulated:
    """What many sites log, and the truth."""

    sites: tuple[int, ...]
    """Seeds."""
    period: Period
    logs: Mapping[str, np.ndarray]
    """By signal: (sites, readings) as logged."""
    truth: Mapping[str, np.ndarray]
    """By meter: (sites, 3) totals, kg, m3, J."""


class Campaign:
    """The sites of a campaign: their draws are made once, true gases once a composition.

    Parameters
    ----------
    sites : sequence of int
        Seeds. Site n is of design n modulo 10.
    period : Period
    balanced : bool
        The draws (but not the noise) are turned so that over the sites each cause has mean 0 and
        variance 1 and no two correlate: fewer sites then show as much as many. There must be
        more sites than causes.
    """

    def __init__(self, sites: Sequence[int], period: Period, *, balanced: bool = False) -> None:
        self.sites = tuple(sites)
        self.period = period
        self._designs = [design(n % DESIGNS) for n in self.sites]
        self.causes = [errors(of) for of in self._designs]
        generators = [np.random.default_rng(n) for n in self.sites]
        first = self.causes[0]
        self.drawn = np.array([g.normal(size=len(first)) for g in generators])
        for number, cause in enumerate(first):
            if cause.group in RECTANGULAR:
                self.drawn[:, number] = [g.uniform(-ROOT3, ROOT3) for g in generators]
        if balanced:
            turned, _ = np.linalg.qr(self.drawn - self.drawn.mean(axis=0))
            self.drawn = turned * len(self.sites) ** 0.5
        self._level = np.array([g.uniform(-1.0, 1.0, 64) for g in generators])
        self._noise_seeds = [g.integers(1 << 62) for g in generators]
        self._gases: dict[tuple[float, ...], tuple[TrueGas, np.ndarray, np.ndarray]] = {}

    def simulate(self, factors: Mapping[str, float]) -> Simulated:
        """Return logs and truth with each group's errors so many times as large as stated.

        Parameters
        ----------
        factors : mapping
            By group of `works_site.GROUPS` and 'noise of readings'.
        """
        moved = self._moved(factors)
        seconds = self.period.instants
        nodes = seconds[::EVERY_THIRD]
        gas, base_density, energy_per_volume = self._gas(moved, factors)
        base_density = base_density * (1.0 + moved("base density", "gas"))
        viscosity = VISCOSITY * (1.0 + moved("viscosity", "gas"))
        exponent = EXPONENT * (1.0 + moved("exponent", "gas"))
        atmosphere = ATMOSPHERE + moved("atmosphere", "site")
        denser = 1.0 + moved("line density", "gas")

        pressure = {
            name: self._wandering(seconds, number, middle, spread, 0.02)
            for number, (name, middle, spread) in enumerate(
                (("PT-1", 9.6e5, 0.12), ("PT-2", 3.8e5, 0.1), ("PT-3", 4.0e5, 0.1))
            )
        }
        at_nodes = {
            name: self._wandering(nodes, 8 + number, middle, 0.012, 0.004)
            for number, (name, middle) in enumerate(
                (("TT-1", 283.0), ("TT-2", 286.0), ("TT-3", 286.0))
            )
        }
        temperature = {name: _between(values) for name, values in at_nodes.items()}
        densities: dict[tuple[str, str], np.ndarray] = {}
        dp: dict[str, np.ndarray] = {}
        flows: dict[str, np.ndarray] = {}
        for number, meter in enumerate([*CONSUMERS, SUPPLY]):
            header = "PT-2" if meter == DOWNSTREAM else METERS[meter][5]
            thermometer = METERS[meter][6]
            if (header, thermometer) not in densities:
                densities[header, thermometer] = denser * gas.density(
                    pressure[header], temperature[thermometer]
                )
            stream = Gas(
                densities[header, thermometer],
                pressure[header],
                temperature[thermometer],
                viscosity,
                exponent,
            )
            throat = self._throat(meter, moved)
            strange = Strangeness(moved("coefficient", meter), moved("expansibility", meter))
            if meter == SUPPLY:
                flows[meter] = sum(flows[one] for one in CONSUMERS)
                dp[meter] = pressure_across(throat, stream, strange, flows[meter])
            else:
                dp[meter] = self._wandering(seconds, 16 + 2 * number, 5000.0, 0.25, 0.25)
                flows[meter] = flow_behind(throat, stream, strange, dp[meter])
            _within_limits(meter, throat, stream, flows[meter], dp[meter])
            assert np.all(
                dp[meter] - CUT_OFF > 5.0 * self._dp_uncertainty(meter, factors, dp[meter])
            )
        weight = np.zeros(len(seconds))
        count = self.period.days * SECONDS_OF_A_DAY // self.period.interval
        weight[1 : count + 2] = self.period.interval
        weight[[1, count + 1]] *= 0.5
        truth = {}
        for meter, flow in flows.items():
            mass = (flow * weight).sum(axis=1)
            volume = mass / base_density[:, 0]
            truth[meter] = np.stack([mass, volume, volume * energy_per_volume], axis=1)
        logs = self._logged(moved, factors, dp, pressure, at_nodes, atmosphere)
        return Simulated(self.sites, self.period, logs, truth)

    def _moved(self, factors):
        """Return what finds the sum of the errors that act on something, (sites, 1)."""
        sums: dict[tuple[str, str], np.ndarray] = {}
        for site, causes in enumerate(self.causes):
            for number, cause in enumerate(causes):
                z = factors[cause.group] * self.drawn[site, number]
                for effect, subject, size in cause.acts:
                    one = sums.setdefault((effect, subject), np.zeros((len(self.sites), 1)))
                    one[site, 0] += z * size
        return lambda effect, subject: sums.get((effect, subject), np.zeros((len(self.sites), 1)))

    def _dp_uncertainty(self, meter, factors, dp):
        """Return the standard uncertainty of a reading of dp [Pa]."""
        name = transmitter(meter)
        variance = (factors[NOISE_GROUP] * NOISE[name]) ** 2
        for cause in self.causes[0]:  # of every design
            by = {effect: size for effect, subject, size in cause.acts if subject == name}
            moved = (
                by.get("dp zero", 0.0)
                + by.get("dp span", 0.0) * dp
                + by.get("dp drift", 0.0) * (self.period.instants - CALIBRATED_AT)
            )
            variance = variance + (factors[cause.group] * moved) ** 2
        return np.sqrt(variance)

    def _throat(self, meter, moved):
        stated = [of.throats[meter] for of in self._designs]
        bore, pipe = (
            np.array([[getattr(one, name)] for one in stated]) for name in ("bore", "pipe")
        )
        return Throat(
            stated[0].form,
            bore * (1.0 + moved("bore", meter)),
            pipe * (1.0 + moved("pipe", meter)),
            stated[0].calibrated,
            stated[0].certificate_uncertainty,
            stated[0].short_straight_lengths,
        )

    def _gas(self, moved, factors):
        """Return the true gases, and true base density and energy per volume by composition."""
        key = (factors["composition"], factors["calorific value"])
        if key not in self._gases:
            compositions, values = [], []
            for site, of in enumerate(self._designs):
                stated = {
                    name: of.composition[name] + moved("fraction", name)[site, 0]
                    for name in COMPONENTS
                }
                total = sum(stated.values())
                true = {name: x / total for name, x in stated.items()}
                assert min(true.values()) > 0.0
                compositions.append(true)
                if of.computed_value:
                    tables = (
                        {name: moved(effect, name)[site, 0] for name in COMPONENTS}
                        for effect in ("table heat", "table factor")
                    )
                    values.append(gross_calorific_value(true, *tables))
                else:
                    values.append(STATED_VALUE * (1.0 + moved("calorific value", "gas")[site, 0]))
            gas = TrueGas(compositions)
            self._gases[key] = (gas, gas.base_density, np.array(values))
        return self._gases[key]

    def _wandering(self, seconds, place, middle, spread, swing):
        """Return something at each site's own level, with a daily and a weekly swing."""
        level, phase, other, size = (self._level[:, place + 2 * n, np.newaxis] for n in range(4))
        day = np.sin(2.0 * np.pi * (seconds / SECONDS_OF_A_DAY + phase))
        week = np.sin(2.0 * np.pi * (seconds / (7.0 * SECONDS_OF_A_DAY) + other))
        return (
            middle
            * (1.0 + spread * level)
            * (1.0 + swing * (0.6 + 0.2 * size) * (day + week) / 2.0)
        )

    def _logged(self, moved, factors, dp, pressure, temperature, atmosphere):
        """Return what the transmitters log of the truth."""
        seconds = self.period.instants
        true: dict[str, np.ndarray] = {}
        for meter in METERS:
            name = transmitter(meter)
            since = moved("dp drift", name) * (seconds - CALIBRATED_AT)
            true[name] = dp[meter] * (1.0 + moved("dp span", name)) + moved("dp zero", name) + since
        pressure = {**pressure, "PT-8": pressure["PT-2"] - dp[DOWNSTREAM]}
        for name in PRESSURES:
            gauge = pressure[name] - atmosphere
            true[name] = gauge * (1.0 + moved("p span", name)) + moved("p zero", name)
        for name in TEMPERATURES:
            true[name] = temperature[name] + moved("T zero", name)
        generators = [np.random.default_rng(seed) for seed in self._noise_seeds]
        logs = {}
        for name, values in true.items():
            noise = np.array([g.normal(size=values.shape[1]) for g in generators])
            logs[name] = values + factors[NOISE_GROUP] * NOISE[name] * noise
        rooted = transmitter(ROOTED)
        full = 100.0 * METERS[ROOTED][4][1]
        logs[rooted] = np.sqrt(logs[rooted] / full)
        return logs


def _between(nodes):
    """Return values at every instant from those at every third one."""
    share = np.arange(EVERY_THIRD) / EVERY_THIRD
    first, second = nodes[:, :-1, np.newaxis], nodes[:, 1:, np.newaxis]
    inner = (first + (second - first) * share).reshape(len(nodes), -1)
    return np.concatenate([inner, nodes[:, -1:]], axis=1)


def _within_limits(meter, throat, stream, flow, dp):
    """Assert that the standards' uncertainties hold throughout, with room for every error."""
    reynolds = reynolds_number(throat, stream, flow)
    lowest, highest = {
        "flange": (2e5, 1e9),
        "corner": (2e5, 1e9),
        "D_and_D/2": (2e5, 1e9),
        "ISA_1932": (8e4, 9e6),
        "long_radius": (2e4, 9e6),
        "Venturi_nozzle": (1.7e5, 1.9e6),
        "as_cast": (2.2e5, 1.9e6),
        "machined": (2.2e5, 0.95e6),
        "rough_welded": (2.2e5, 1.9e6),
    }[throat.form]
    assert lowest < reynolds.min(), (meter, reynolds.min())
    assert reynolds.max() < highest, (meter, reynolds.max())
    assert dp.max() < 0.98 * 100.0 * METERS[meter][4][1], (meter, dp.max())
