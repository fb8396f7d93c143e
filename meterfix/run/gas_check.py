"""Whether every gas of a site can be computed: asked before a pass needs it.

The site file's own checks cannot know: whether a property has an equation and whether there is
gas at base conditions are answered by the gas models, which intake does not know.
"""

from __future__ import annotations

from collections.abc import Iterable
from pathlib import Path

from meterfix.calc.gas.properties import GasLibrary
from meterfix.errors import GasError, Mistake, SiteFileError
from meterfix.intake.site.findings import where
from meterfix.model.gas import BaseConditions, Gas
from meterfix.model.site import Site

REMEDY = "state a value for what no model gives, or name models that can compute this gas"


def check_gases(site: Site, path: Path) -> None:
    """Raise unless every gas can be computed under all of its terms and base conditions.

    Parameters
    ----------
    site : the site.
    path : its site file, as messages call it.

    Raises
    ------
    SiteFileError
        With one mistake for each gas and reason.
    """
    mistakes = tuple(dict.fromkeys(_mistakes(site, path.name)))
    if mistakes:
        raise SiteFileError(str(path), mistakes)


def _mistakes(site: Site, file: str) -> Iterable[Mistake]:
    library = GasLibrary()
    energy = site.contract.energy
    for gas in site.gases:
        for number, version in enumerate(gas.terms.entries):
            try:
                properties = library.properties(version.value)
                for base in _bases(site, gas, number):
                    properties.base_density(base)
                    if energy is not None and version.value.calorific_value is not None:
                        properties.energy_factor(base, energy)
            except GasError as error:
                given, _, allowed = str(error).partition("; ")
                yield Mistake(where(file, ("gas", gas.name)), given, allowed or REMEDY)


def _bases(site: Site, gas: Gas, number: int) -> Iterable[BaseConditions]:
    """Yield the base conditions in force while the numbered terms of a gas are."""
    since = gas.terms.entries[number].since
    later = gas.terms.entries[number + 1 :]
    history = site.base_conditions
    first = history.entries[0].value if since is None else history.in_force(since)
    if first is not None:
        yield first
    for version in history.entries:
        starts = version.since
        if (
            starts is not None
            and (since is None or starts > since)
            and (not later or later[0].since is None or starts < later[0].since)
        ):
            yield version.value
