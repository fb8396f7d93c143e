"""Discharge coefficients of nozzles, and constant ones, in the form the flow solver wants."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meterfix.calc.elementary import contiguous
from meterfix.calc.primary.discharge import DischargeTerms
from meterfix.frames import Floats


@dataclass(frozen=True, slots=True)
class NozzleDischargeTerms:
    """A discharge coefficient C = constant + c5 u^5 + c11_5 u^11.5, with u = Re_D ** -0.1.

    The fifth power is the square root of 1/Re_D of long-radius nozzles; the power of eleven and
    a half is the 1.15 of ISA 1932 nozzles, a whole power times a square root, so that it costs
    no second call of power. All arrays are (n,), dimensionless.
    """

    constant: Floats
    c5: Floats
    c11_5: Floats

    def at(self, u: Floats) -> Floats:
        """Return the discharge coefficient at u = Re_D ** -0.1 [-]."""
        u2 = u * u
        u4 = u2 * u2
        found: Floats = self.constant + u4 * u * (self.c5 + u4 * u2 * np.sqrt(u) * self.c11_5)
        return found

    def slope(self, u: Floats) -> Floats:
        """Return u dC/du at u = Re_D ** -0.1 [-]."""
        u2 = u * u
        u4 = u2 * u2
        found: Floats = u4 * u * (5.0 * self.c5 + u4 * u2 * np.sqrt(u) * (11.5 * self.c11_5))
        return found


def constant_discharge_terms(discharge_coefficient: Floats) -> DischargeTerms:
    """Return the terms of a discharge coefficient that does not depend on the Reynolds number.

    Of Venturi nozzles and classical Venturi tubes, and of any device with a calibrated C.

    Parameters
    ----------
    discharge_coefficient : (n,) array
        [-]
    """
    C = contiguous(discharge_coefficient)
    nothing = np.zeros_like(C)
    return DischargeTerms(constant=C, c3=nothing, c7=nothing, c8=nothing, c11=nothing)
