"""The one flow solver: mass flow from differential pressure, whatever the primary device."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meterfix.calc.elementary import contiguous, power
from meterfix.calc.primary.discharge import DischargeTerms
from meterfix.calc.primary.forms import discharge_terms, expansibility
from meterfix.frames import Floats, Integers, Truths

LOWEST_REYNOLDS_NUMBER = 500.0
"""Re_D below which no flow is given: no discharge equation describes it."""
RESIDUAL_LIMIT = 1e-10
"""Relative residual of the Reynolds iteration up to which a record counts as converged."""

_NEWTON_STEPS = 5
_CHUNK = 8192
"""Records worked on at a time, so that intermediate arrays stay in the processor's cache."""


@dataclass(frozen=True, slots=True)
class Flow:
    """What the solver finds for each record, (n,) arrays."""

    mass_flow: Floats
    """kg/s; exactly 0 at zero differential pressure, NaN where not known."""
    discharge_coefficient: Floats
    """NaN at zero differential pressure."""
    expansibility: Floats
    reynolds_number: Floats
    """Re_D; 0 at zero differential pressure."""
    converged: Truths
    """The residual was verified; False also where the inputs give no flow at all."""


def solve_flow(
    *,
    differential_pressure: Floats,
    density: Floats,
    dynamic_viscosity: Floats,
    expansibility: Floats,
    bore: Floats,
    pipe_diameter: Floats,
    terms: DischargeTerms,
) -> Flow:
    """Solve the flow equation for the mass flow, with C a sum of powers of Re_D ** -0.1.

    With X = Re_D / C, which does not depend on C, the equation is C(u) X u^10 = 1. Five Newton
    steps from C = 0.6 are taken for every record, so that no record's bits depend on another.

    Parameters
    ----------
    differential_pressure : (n,) array
        [Pa]
    density : (n,) array
        Of the gas at the upstream tapping. [kg/m3]
    dynamic_viscosity : (n,) array
        [Pa s]
    expansibility : (n,) array
        [-]
    bore, pipe_diameter : (n,) arrays
        At working conditions. [m]
    terms : DischargeTerms
        (n,) arrays.

    Returns
    -------
    Flow
        Not converged, and NaN, below Re_D = 500, where an input is NaN and where the
        differential pressure is negative.

    References
    ----------
    .. [1] ISO 5167-1:2003, 5.1, equation (1), and annex A (iteration for the mass flow).
    """
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        beta = bore / pipe_diameter
        beta2 = beta * beta
        approach = 1.0 / np.sqrt(1.0 - beta2 * beta2)
        mass_flow_over_C = (
            approach
            * expansibility
            * (0.25 * np.pi)
            * (bore * bore)
            * np.sqrt(2.0 * differential_pressure * density)
        )
        X = mass_flow_over_C * (4.0 / np.pi) / (dynamic_viscosity * pipe_diameter)
        u = power(0.6 * X, -0.1)
        c3_3, c7_7, c8_8, c11_11 = 3 * terms.c3, 7 * terms.c7, 8 * terms.c8, 11 * terms.c11
        for _ in range(_NEWTON_STEPS):
            u3 = u * u * u
            u4 = u3 * u
            u10 = u3 * u3 * u4
            C = terms.constant + u3 * (terms.c3 + u4 * (terms.c7 + u * (terms.c8 + u3 * terms.c11)))
            slope = u3 * (c3_3 + u4 * (c7_7 + u * (c8_8 + u3 * c11_11)))  # u dC/du
            if terms.c5 is not None and terms.c23_2 is not None:
                u5, broken = u4 * u, u3 * u3 * np.sqrt(u) * terms.c23_2
                C = C + u5 * (terms.c5 + broken)
                slope = slope + u5 * (5 * terms.c5 + 11.5 * broken)
            u = u - u * (C - 1.0 / (X * u10)) / (10.0 * C + slope)
        C = terms.at(u)
        reynolds_number = C * X
        u2 = u * u
        u5 = u2 * u2 * u
        residual = np.abs(reynolds_number * (u5 * u5) - 1.0)
        converged = (residual <= RESIDUAL_LIMIT) & (reynolds_number >= LOWEST_REYNOLDS_NUMBER)
    still = differential_pressure == 0.0
    return Flow(
        mass_flow=np.where(still, 0.0, np.where(converged, C * mass_flow_over_C, np.nan)),
        discharge_coefficient=np.where(converged, C, np.nan),
        expansibility=expansibility,
        reynolds_number=np.where(still, 0.0, np.where(converged, reynolds_number, np.nan)),
        converged=converged | still,
    )


def device_flow(
    *,
    differential_pressure: Floats,
    static_pressure: Floats,
    density: Floats,
    dynamic_viscosity: Floats,
    isentropic_exponent: Floats,
    bore: Floats,
    pipe_diameter: Floats,
    form: Integers,
    calibrated: Floats | None = None,
) -> Flow:
    """Return the flow of a gas through primary devices, one device per record.

    Parameters
    ----------
    differential_pressure : (n,) array
        [Pa]
    static_pressure : (n,) array
        Absolute, at the upstream tapping. [Pa]
    density, dynamic_viscosity, isentropic_exponent : (n,) arrays
        Of the gas at the upstream tapping. [kg/m3], [Pa s], [-]
    bore, pipe_diameter : (n,) arrays
        At working conditions. [m]
    form : (n,) integer array
        Codes, see `meterfix.calc.primary.forms.FORM_CODES`.
    calibrated : (n,) array
        Discharge coefficient from a certificate; NaN, or None for all: the standard's. [-]

    Returns
    -------
    Flow
        (n,) arrays, the inputs broadcast against each other; see `solve_flow`.

    Raises
    ------
    ValueError
        If a diameter is not positive or a bore is not smaller than its pipe.

    References
    ----------
    .. [1] ISO 5167-2:2003, 5.3; ISO 5167-3:2003, 5.1.6, 5.2.6 and 5.3.4; ISO 5167-4:2003, 5.5
       and 5.6.
    """
    *given, codes = np.broadcast_arrays(
        *(
            contiguous(values)
            for values in (
                differential_pressure,
                static_pressure,
                density,
                dynamic_viscosity,
                isentropic_exponent,
                bore,
                pipe_diameter,
                np.nan if calibrated is None else calibrated,
            )
        ),
        np.atleast_1d(form),
    )
    count = len(codes)
    parts = [
        _chunk(*(np.ascontiguousarray(v[at : at + _CHUNK]) for v in (*given, codes)))
        for at in range(0, count, _CHUNK)
    ]
    if not parts:
        nothing = np.zeros(0)
        return Flow(nothing, nothing, nothing, nothing, np.zeros(0, dtype=np.bool_))
    return Flow(
        mass_flow=np.concatenate([part.mass_flow for part in parts]),
        discharge_coefficient=np.concatenate([part.discharge_coefficient for part in parts]),
        expansibility=np.concatenate([part.expansibility for part in parts]),
        reynolds_number=np.concatenate([part.reynolds_number for part in parts]),
        converged=np.concatenate([part.converged for part in parts]),
    )


def _chunk(
    differential_pressure: Floats,
    static_pressure: Floats,
    density: Floats,
    dynamic_viscosity: Floats,
    isentropic_exponent: Floats,
    bore: Floats,
    pipe_diameter: Floats,
    calibrated: Floats,
    form: Integers,
) -> Flow:
    """Return the flow of one chunk of contiguous arrays."""
    return solve_flow(
        differential_pressure=differential_pressure,
        density=density,
        dynamic_viscosity=dynamic_viscosity,
        expansibility=expansibility(
            differential_pressure,
            static_pressure,
            isentropic_exponent,
            diameter_ratio=bore / pipe_diameter,
            form=form,
        ),
        bore=bore,
        pipe_diameter=pipe_diameter,
        terms=discharge_terms(
            bore=bore, pipe_diameter=pipe_diameter, form=form, calibrated=calibrated
        ),
    )
