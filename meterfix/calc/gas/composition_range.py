"""Ranges of composition for which the standards of the mixture equations make statements."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class CompositionRange:
    """Mole fractions within which a statement of a standard holds."""

    least_methane: float
    largest: tuple[tuple[tuple[str, ...], float], ...]
    """Components and the largest mole fraction of their sum."""

    def excludes(self, mole_fractions: tuple[tuple[str, float], ...]) -> bool:
        """Return whether a composition is outside the range."""
        given = dict(mole_fractions)
        if given.get("methane", 0.0) < self.least_methane:
            return True
        for names, limit in self.largest:
            total = 0.0
            for name in names:
                total += given.get(name, 0.0)
            if total > limit:
                return True
        return False


PIPELINE_QUALITY = CompositionRange(
    0.7,
    (
        (("nitrogen",), 0.20),
        (("carbon_dioxide",), 0.20),
        (("ethane",), 0.10),
        (("propane",), 0.035),
        (("isobutane", "n_butane"), 0.015),
        (("isopentane", "n_pentane"), 0.005),
        (("n_hexane",), 0.001),
        (("n_heptane",), 0.0005),
        (("n_octane", "n_nonane", "n_decane"), 0.0005),
        (("hydrogen",), 0.10),
        (("carbon_monoxide",), 0.03),
        (("helium",), 0.005),
        (("water",), 0.00015),
        (("oxygen",), 0.0002),
        (("hydrogen_sulfide",), 0.0002),
        (("argon",), 0.0002),
    ),
)
"""Pipeline-quality gas; ISO 20765-1:2005 and ISO 12213-2:2006 (from memory)."""

INTERMEDIATE_QUALITY = CompositionRange(
    0.3,
    (
        (("nitrogen",), 0.55),
        (("carbon_dioxide",), 0.30),
        (("ethane",), 0.25),
        (("propane",), 0.14),
        (("isobutane", "n_butane"), 0.06),
        (("isopentane", "n_pentane"), 0.005),
        (("n_hexane",), 0.002),
        (("n_heptane",), 0.001),
        (("n_octane", "n_nonane", "n_decane"), 0.0005),
        (("hydrogen",), 0.40),
        (("carbon_monoxide",), 0.03),
        (("helium",), 0.005),
        (("water",), 0.00015),
        (("oxygen",), 0.02),
        (("hydrogen_sulfide",), 0.02),
        (("argon",), 0.0005),
    ),
)
"""Natural gas of intermediate quality; AGA Report No. 8 Part 2:2017, ISO 20765-2:2015 (from
memory). GERG-2008 itself is defined for every mixture of its 21 components."""
