"""Which signals a meter reads, and when: lookups over a site."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from functools import cached_property

from meterfix.model.site import Meter, MeterTerms, Site
from meterfix.model.source import Origin, Signal, Source
from meterfix.model.uncertainty import UncertaintySource


@dataclass(frozen=True)
class SiteIndex:
    """A site with its parts found by name."""

    site: Site

    @cached_property
    def signals(self) -> dict[str, Signal]:
        """Signals by name."""
        return {signal.name: signal for signal in self.site.signals}

    @cached_property
    def sources(self) -> dict[str, Source]:
        """Sources by name."""
        return {source.name: source for source in self.site.sources}

    @cached_property
    def meters(self) -> dict[str, Meter]:
        """Meters by name."""
        return {meter.name: meter for meter in self.site.meters}

    @cached_property
    def by_origin(self) -> dict[Origin, str]:
        """Signal name by where its readings come from."""
        return {origin: signal.name for signal in self.site.signals for origin in signal.origins}

    @cached_property
    def barometers(self) -> tuple[str, ...]:
        """Signals that give the atmospheric pressure at any time."""
        names = (version.value.signal for version in self.site.atmosphere.entries)
        return tuple(sorted({name for name in names if name is not None}))

    @cached_property
    def meters_of(self) -> dict[str, tuple[str, ...]]:
        """Meters that read a signal at any time, by signal."""
        found: dict[str, set[str]] = {}
        for meter in self.site.meters:
            for name in self.signals_of(meter):
                found.setdefault(name, set()).add(meter.name)
        return {name: tuple(sorted(meters)) for name, meters in found.items()}

    @cached_property
    def components(self) -> dict[str, tuple[str, ...]]:
        """Components whose mole fractions are uncertain, by gas."""
        found: dict[str, set[str]] = {}
        for source in self.site.uncertainty:
            for part in source.parts:
                kind, _, component = part.parameter.partition(":")
                if kind == "fraction":
                    found.setdefault(part.subject, set()).add(component)
        return {gas: tuple(sorted(names)) for gas, names in found.items()}

    @cached_property
    def repeatability(self) -> dict[str, float]:
        """Standard deviation of one reading by signal, SI, where the site file states it."""
        return {entry.signal: entry.size for entry in self.site.repeatability}

    @cached_property
    def _sources_by_parameter(self) -> dict[tuple[str, str], tuple[int, ...]]:
        found: dict[tuple[str, str], list[int]] = {}
        for number, source in enumerate(self.site.uncertainty):
            for part in source.parts:
                found.setdefault((part.parameter, part.subject), []).append(number)
        return {parameter: tuple(numbers) for parameter, numbers in found.items()}

    def sources_of(self, parameters: Iterable[tuple[str, str]]) -> tuple[UncertaintySource, ...]:
        """Return the sources of uncertainty that act on any of the parameters."""
        by_parameter = self._sources_by_parameter
        numbers = {n for parameter in parameters for n in by_parameter.get(parameter, ())}
        return tuple(self.site.uncertainty[n] for n in sorted(numbers))

    def sources_on(self, subjects: Iterable[str]) -> tuple[UncertaintySource, ...]:
        """Return the sources of uncertainty that act on any of the subjects."""
        wanted = set(subjects)
        return tuple(
            source
            for source in self.site.uncertainty
            if any(part.subject in wanted for part in source.parts)
        )

    def signals_of(self, meter: Meter) -> tuple[str, ...]:
        """Return the signals that a meter reads at any time, the barometer included."""
        names = {name for version in meter.terms.entries for name in signals_in(version.value)}
        return tuple(sorted(names | set(self.barometers)))

    def reach(self, meter: Meter) -> int:
        """Return how far beyond a gas day's edge a reading can change the day's figures [us].

        A record outside the edge at most one gap away serves the interval across the edge,
        and a pressure or temperature at most one gap or age from that record serves it.
        """
        widths = {
            name: max(
                self.signals[name].maximum_gap,
                self.signals[name].maximum_age,
                self.signals[name].interval or 0,
            )
            for name in self.signals_of(meter)
        }
        own = {version.value.differential_pressure for version in meter.terms.entries}
        farthest = max(widths[name] for name in own)
        return farthest + max((w for name, w in widths.items() if name not in own), default=0)


def signals_in(terms: MeterTerms) -> tuple[str, str, str]:
    """Return the three signals of a meter's terms."""
    return (terms.differential_pressure, terms.static_pressure, terms.temperature)
