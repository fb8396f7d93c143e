"""The discharge coefficient as the flow solver wants it: a polynomial in Re_D ** -0.1."""

from __future__ import annotations

from dataclasses import dataclass

from meterfix.frames import Floats


@dataclass(frozen=True, slots=True)
class DischargeTerms:
    """A discharge coefficient C = constant + c3 u^3 + c7 u^7 + c8 u^8 + c11 u^11.

    u is Re_D ** -0.1, with Re_D the Reynolds number referred to the pipe diameter. Every
    power of the Reynolds number in the Reader-Harris/Gallagher equation (0.3, 0.7, 0.8 and
    0.3 + 0.8) is a whole power of it. A device with a constant C has four arrays of zeros.
    All arrays are (n,), dimensionless.
    """

    constant: Floats
    c3: Floats
    c7: Floats
    c8: Floats
    c11: Floats

    def at(self, u: Floats) -> Floats:
        """Return the discharge coefficient at u = Re_D ** -0.1 [-]."""
        u3 = u * u * u
        return self.constant + u3 * (self.c3 + u3 * u * (self.c7 + u * (self.c8 + u3 * self.c11)))
