"""How the expansibility changes with dp, p1, kappa and beta: the standards' equations derived."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meterfix.calc.elementary import exponential, logarithm
from meterfix.calc.primary.forms import groups
from meterfix.frames import Floats, Integers


@dataclass(frozen=True, slots=True)
class ExpansibilitySlopes:
    """Derivatives of the logarithm of the expansibility, (n,) arrays."""

    by_differential_pressure: Floats
    """Per Pa."""
    by_static_pressure: Floats
    """Per Pa."""
    by_isentropic_exponent: Floats
    by_log_diameter_ratio: Floats


def expansibility_slopes(
    differential_pressure: Floats,
    static_pressure: Floats,
    isentropic_exponent: Floats,
    *,
    diameter_ratio: Floats,
    form: Integers,
    expansibility: Floats,
) -> ExpansibilitySlopes:
    """Return the derivatives of each device's expansibility.

    Parameters
    ----------
    differential_pressure, static_pressure : (n,) arrays
        Positive; absolute, upstream. [Pa]
    isentropic_exponent, diameter_ratio : (n,) arrays
        [-]
    form : (n,) integer array
        Codes, see `meterfix.calc.primary.forms.FORM_CODES`.
    expansibility : (n,) array
        Its value. [-]

    Returns
    -------
    ExpansibilitySlopes

    References
    ----------
    .. [1] ISO 5167-2:2003, 5.3.2.2, equation (5), for orifice plates; ISO 5167-3:2003, 5.1.6.3,
       and ISO 5167-4:2003, 5.6, for the others.
    """
    ratio = (static_pressure - differential_pressure) / static_pressure
    beta2 = diameter_ratio * diameter_ratio
    by_ratio = np.full(len(form), np.nan)
    by_kappa, by_beta = by_ratio.copy(), by_ratio.copy()
    for one, which in groups(form):
        of_form = _orifice if one is None else _adiabatic
        by_ratio[which], by_kappa[which], by_beta[which] = of_form(
            ratio[which], isentropic_exponent[which], beta2[which], expansibility[which]
        )
    by_dp = -by_ratio / static_pressure
    return ExpansibilitySlopes(
        by_differential_pressure=by_dp,
        by_static_pressure=-by_dp * (1.0 - ratio),
        by_isentropic_exponent=by_kappa,
        by_log_diameter_ratio=by_beta,
    )


def _orifice(
    ratio: Floats, kappa: Floats, beta2: Floats, epsilon: Floats
) -> tuple[Floats, Floats, Floats]:
    """Return the derivatives of ln epsilon by p2/p1, kappa and ln beta.

    epsilon = 1 - F (1 - r^(1/kappa)) with F = 0.351 + 0.256 beta^4 + 0.93 beta^8.
    """
    beta4 = beta2 * beta2
    beta8 = beta4 * beta4
    F = 0.351 + 0.256 * beta4 + 0.93 * beta8
    lost = (1.0 - epsilon) / F
    rising = F * (1.0 - lost) / (kappa * epsilon)
    return (
        rising / ratio,
        rising * logarithm(ratio) / -kappa,
        lost * (1.024 * beta4 + 7.44 * beta8) / -epsilon,
    )


def _adiabatic(
    ratio: Floats, kappa: Floats, beta2: Floats, _epsilon: Floats
) -> tuple[Floats, Floats, Floats]:
    """Return the derivatives of ln epsilon by p2/p1, kappa and ln beta.

    With r = p2/p1, L = ln r, a = r^(2/kappa) and z = L (kappa - 1)/kappa,

        2 ln epsilon = ln a + ln(1 - beta^4) - ln(1 - beta^4 a) + g(z) + ln(-L) - ln(1 - r),
        g(z) = ln((e^z - 1)/z),

    whose derivatives are regular at kappa = 1.
    """
    beta4 = beta2 * beta2
    L = logarithm(ratio)
    a = exponential(2.0 * L / kappa)
    z = L * (kappa - 1.0) / kappa
    dense = 1.0 + beta4 * a / (1.0 - beta4 * a)  # d(ln a - ln(1 - beta^4 a)) / d ln a
    slope_g = _slope_of_growth(z)
    by_log_ratio = (
        dense * (2.0 / kappa) + slope_g * ((kappa - 1.0) / kappa) + 1.0 / L + ratio / (1.0 - ratio)
    )
    by_kappa = (dense * (-2.0) + slope_g) * (L / (kappa * kappa))
    by_log_beta = 4.0 * beta4 * (a / (1.0 - beta4 * a) - 1.0 / (1.0 - beta4))
    return 0.5 * by_log_ratio / ratio, 0.5 * by_kappa, 0.5 * by_log_beta


def _slope_of_growth(z: Floats) -> Floats:
    """Return d/dz ln((e^z - 1)/z) = e^z/(e^z - 1) - 1/z; a series near 0, where that is 0/0."""
    z2 = z * z
    series = 0.5 + z * (1.0 / 12.0 + z2 * (-1.0 / 720.0 + z2 * (1.0 / 30240.0)))
    grown = exponential(z)
    with np.errstate(divide="ignore", invalid="ignore"):
        closed = grown / (grown - 1.0) - 1.0 / z
    return np.where(np.abs(z) < 0.1, series, closed)
