"""The discharge coefficient as the flow solver wants it: a sum of powers of Re_D ** -0.1."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meterfix.frames import Floats


@dataclass(frozen=True, slots=True)
class DischargeTerms:
    """A discharge coefficient C = constant + c3 u^3 + c5 u^5 + c7 u^7 + c8 u^8 + c11 u^11 + ...

    ... + c23_2 u^(23/2). u is Re_D ** -0.1, with Re_D the Reynolds number referred to the pipe
    diameter. Every power of the Reynolds number in the Reader-Harris/Gallagher equation (0.3,
    0.7, 0.8 and 0.3 + 0.8) is a whole power of it, and so is that of the long radius nozzle
    (0.5); that of the ISA 1932 nozzle (1.15) takes one square root more. A device with a
    constant C has zeros. All arrays are (n,), dimensionless.
    """

    constant: Floats
    c3: Floats
    c7: Floats
    c8: Floats
    c11: Floats
    c5: Floats | None = None
    """Nozzles only; None: zeros."""
    c23_2: Floats | None = None
    """Nozzles only; None: zeros."""

    def at(self, u: Floats) -> Floats:
        """Return the discharge coefficient at u = Re_D ** -0.1 [-]."""
        u3 = u * u * u
        u4 = u3 * u
        orifice = self.constant + u3 * (self.c3 + u4 * (self.c7 + u * (self.c8 + u3 * self.c11)))
        if self.c5 is None or self.c23_2 is None:
            return orifice
        return orifice + u4 * u * (self.c5 + u3 * u3 * np.sqrt(u) * self.c23_2)

    def slope(self, u: Floats) -> Floats:
        """Return u dC/du at u = Re_D ** -0.1 [-]."""
        u3 = u * u * u
        u4 = u3 * u
        orifice = u3 * (3 * self.c3 + u4 * (7 * self.c7 + u * (8 * self.c8 + u3 * (11 * self.c11))))
        if self.c5 is None or self.c23_2 is None:
            return orifice
        return orifice + u4 * u * (5 * self.c5 + u3 * u3 * np.sqrt(u) * (11.5 * self.c23_2))
