"""Sensitivities: how the mass rate of a record changes with everything that it follows from.

Symbols
-------
The flow equation is q = C K with K = eps d^2 (pi/4) (1 - beta^4)^-0.5 (2 dp rho)^0.5, and
Re_D = C X with X = 4 K / (pi mu D). The discharge coefficient C depends on Re_D and so on q
itself. With gamma = d ln C / d ln Re_D and w = 1 / (1 - gamma), the implicit function theorem
gives for any change

    d ln q = w (d ln K - gamma (d ln mu + d ln D) + d ln C),    the last at constant Re_D.

Density, isentropic exponent, viscosity and both diameters follow from the state (p1, T1) at the
upstream tapping. Where the thermometer is downstream, T1 = T + J L follows itself from dp, p1, C
and beta, J being the Joule-Thomson coefficient and L the permanent pressure loss: the theorem
once more, d T1 = (change of T + J L at constant T1) / (1 - d(J L)/d T1). Where the pressure
tapping is downstream, p1 = p + dp.

Everything is the derivative of what `correct` computes: gas properties are those of the very
polynomials that gave the values. Cut-offs, limits and flags are taken as they stand.

References
----------
ISO 5167-1:2003, 5.1 (flow equation) and 5.4.4.1 (temperature at the upstream tapping); the
derivatives are our own.
"""

from __future__ import annotations
