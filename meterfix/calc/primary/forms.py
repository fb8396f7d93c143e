"""Every form of primary device behind one set of kernels: a code per record says which it is.

Records of several forms may stand in one batch. Each form's own kernel sees only its own
records, in contiguous arrays, so that a record's bits do not depend on its neighbours.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import fields

import numpy as np

from meterfix.calc.primary import adiabatic, nozzle, orifice, stated_uncertainty, venturi
from meterfix.calc.primary.discharge import DischargeTerms
from meterfix.calc.primary.discharge_forms import NozzleDischargeTerms
from meterfix.frames import Floats, Integers, Truths
from meterfix.model.device import NozzleForm, Tappings, VenturiForm

Form = Tappings | NozzleForm | VenturiForm

FORM_CODES: dict[Form, int] = {
    Tappings.CORNER: orifice.TAPPINGS_CODES[Tappings.CORNER],
    Tappings.D_AND_D_2: orifice.TAPPINGS_CODES[Tappings.D_AND_D_2],
    Tappings.FLANGE: orifice.TAPPINGS_CODES[Tappings.FLANGE],
    NozzleForm.ISA_1932: 3,
    NozzleForm.LONG_RADIUS: 4,
    NozzleForm.VENTURI_NOZZLE: 5,
    VenturiForm.AS_CAST: 6,
    VenturiForm.MACHINED: 7,
    VenturiForm.ROUGH_WELDED: 8,
}
"""The code by which a kernel knows the form of each record's device; an orifice plate's is that
of its tappings, so that its kernels take the codes as they are."""

LOWEST_PRESSURE_RATIO = 0.75
"""p2/p1 down to which every family's expansibility equation holds; ISO 5167-2:2003, 5.3.2.2,
ISO 5167-3:2003, 5.1.6.3, and ISO 5167-4:2003, 5.6."""

_FORMS: dict[int, NozzleForm | VenturiForm | None] = {
    code: None if isinstance(form, Tappings) else form for form, code in FORM_CODES.items()
}
"""The form of each code; None for the codes of orifice plates, whose kernels take all three."""
_VENTURIS = {
    VenturiForm.AS_CAST: venturi.AS_CAST,
    VenturiForm.MACHINED: venturi.MACHINED,
    VenturiForm.ROUGH_WELDED: venturi.ROUGH_WELDED,
}
_USUAL_REYNOLDS_NUMBER = 5e5
"""Within the limits of every form, so that only the geometry is judged."""


def groups(form: Integers) -> Iterator[tuple[NozzleForm | VenturiForm | None, Integers | slice]]:
    """Yield each form that occurs and its records: None for orifice plates of all tappings.

    Parameters
    ----------
    form : (n,) integer array
        Codes, see `FORM_CODES`.

    Yields
    ------
    form, which
        `which` selects the records; a slice where all are of one form.
    """
    grouped = np.maximum(form, FORM_CODES[Tappings.FLANGE])
    if len(grouped) > 0 and (grouped == grouped[0]).all():
        yield _FORMS[int(grouped[0])], slice(None)
        return
    for code in range(FORM_CODES[Tappings.FLANGE], len(FORM_CODES)):
        which = np.flatnonzero(grouped == code)
        if len(which) > 0:
            yield _FORMS[code], which


def discharge_terms(
    *, bore: Floats, pipe_diameter: Floats, form: Integers, calibrated: Floats
) -> DischargeTerms:
    """Return the terms of each device's discharge coefficient.

    Parameters
    ----------
    bore, pipe_diameter : (n,) arrays
        Bore or throat diameter d and D at working conditions. [m]
    form : (n,) integer array
        Codes, see `FORM_CODES`.
    calibrated : (n,) array
        Discharge coefficient from a certificate, NaN where it is the standard's. [-]

    Returns
    -------
    DischargeTerms
        (n,) arrays; also outside the limits of use, where the value has no stated uncertainty.

    Raises
    ------
    ValueError
        If a diameter is not positive or a bore is not smaller than its pipe.
    """
    parts = [
        (which, _terms_of(one, bore[which], pipe_diameter[which], form[which]))
        for one, which in groups(form)
    ]
    known = ~np.isnan(calibrated)
    if len(parts) == 1 and not known.any():
        return parts[0][1]
    joined: dict[str, Floats | None] = {}
    for field in fields(DischargeTerms):
        given = [(which, getattr(terms, field.name)) for which, terms in parts]
        if all(values is None for _, values in given):
            joined[field.name] = None
            continue
        whole = np.zeros(len(form))
        for which, values in given:
            whole[which] = 0.0 if values is None else values
        instead = calibrated if field.name == "constant" else 0.0
        joined[field.name] = np.where(known, instead, whole)
    return DischargeTerms(**joined)  # type: ignore[arg-type]


def _terms_of(
    form: NozzleForm | VenturiForm | None, bore: Floats, pipe_diameter: Floats, codes: Integers
) -> DischargeTerms:
    if form is None:
        return orifice.discharge_terms(bore=bore, pipe_diameter=pipe_diameter, tappings=codes)
    beta = bore / pipe_diameter
    if isinstance(form, VenturiForm):
        return venturi.venturi_discharge_terms(_VENTURIS[form], diameter_ratio=beta)
    if form is NozzleForm.VENTURI_NOZZLE:
        return nozzle.venturi_nozzle_discharge_terms(diameter_ratio=beta)
    if form is NozzleForm.ISA_1932:
        return _joinable(nozzle.isa_1932_discharge_terms(diameter_ratio=beta))
    return _joinable(nozzle.long_radius_discharge_terms(diameter_ratio=beta))


def _joinable(terms: NozzleDischargeTerms) -> DischargeTerms:
    """Return a nozzle's terms in the form that every device's have."""
    nothing = np.zeros_like(terms.constant)
    return DischargeTerms(
        constant=terms.constant,
        c3=nothing,
        c7=nothing,
        c8=nothing,
        c11=nothing,
        c5=terms.c5,
        c23_2=terms.c11_5,
    )


def expansibility(
    differential_pressure: Floats,
    static_pressure: Floats,
    isentropic_exponent: Floats,
    *,
    diameter_ratio: Floats,
    form: Integers,
) -> Floats:
    """Return the expansibility [expansion] factor of a gas through each device.

    Parameters
    ----------
    differential_pressure : (n,) array
        Upstream minus downstream tapping. [Pa]
    static_pressure : (n,) array
        Absolute, at the upstream tapping. [Pa]
    isentropic_exponent : (n,) array
        kappa of the gas at the upstream tapping. [-]
    diameter_ratio : (n,) array
        At working conditions. [-]
    form : (n,) integer array
        Codes, see `FORM_CODES`.

    Returns
    -------
    (n,) array
        By the empirical equation of orifice plates, by adiabatic expansion for the others;
        exactly 1 at zero differential pressure, NaN where an input is NaN. [-]
    """
    found = np.full(len(form), np.nan)
    for one, which in groups(form):
        of_form = orifice.expansibility if one is None else adiabatic.adiabatic_expansibility
        found[which] = of_form(
            differential_pressure[which],
            static_pressure[which],
            isentropic_exponent[which],
            diameter_ratio=diameter_ratio[which],
        )
    return found


def pressure_loss(
    differential_pressure: Floats,
    discharge_coefficient: Floats,
    *,
    diameter_ratio: Floats,
    stated_ratio: Floats,
) -> Floats:
    """Return the permanent pressure loss of each device.

    Parameters
    ----------
    differential_pressure : (n,) array
        [Pa]
    discharge_coefficient : (n,) array
        [-]
    diameter_ratio : (n,) array
        At working conditions. [-]
    stated_ratio : (n,) array
        Loss over differential pressure, NaN where it follows from C and beta. [-]

    Returns
    -------
    (n,) array
        [Pa]

    References
    ----------
    .. [1] ISO 5167-2:2003, 5.4.1, equation (7): orifice plates; ISO 5167-3:2003, 5.1.8 and
       5.2.8: the same equation for ISA 1932 and long-radius nozzles. For Venturi nozzles and
       Venturi tubes (ISO 5167-4:2003, 5.9) the standards give a range, so the ratio is stated.
    """
    by_equation = orifice.pressure_loss(
        differential_pressure, discharge_coefficient, diameter_ratio=diameter_ratio
    )
    return np.where(np.isnan(stated_ratio), by_equation, stated_ratio * differential_pressure)


def geometry_outside_limits(*, bore: Floats, pipe_diameter: Floats, form: Integers) -> Truths:
    """Return whether bore, pipe diameter or diameter ratio is outside the form's limits of use.

    Parameters
    ----------
    bore, pipe_diameter : (n,) arrays
        [m]
    form : (n,) integer array
        Codes, see `FORM_CODES`.

    Returns
    -------
    (n,) boolean array
    """
    outside = np.ones(len(form), dtype=np.bool_)
    for one, which in groups(form):
        d, D = bore[which], pipe_diameter[which]
        if one is None:
            outside[which] = orifice.geometry_outside_limits(bore=d, pipe_diameter=D)
        else:
            usual = np.full(len(d), _USUAL_REYNOLDS_NUMBER)
            outside[which] = _outside_limits(one, usual, d, D)
    return outside


def reynolds_number_outside_limits(
    reynolds_number: Floats, *, bore: Floats, pipe_diameter: Floats, form: Integers
) -> Truths:
    """Return whether the Reynolds number is outside the form's limits of use.

    Parameters
    ----------
    reynolds_number : (n,) array
        Re_D. [-]
    bore, pipe_diameter : (n,) arrays
        [m]
    form : (n,) integer array
        Codes, see `FORM_CODES`.

    Returns
    -------
    (n,) boolean array
        True where Re_D is NaN. Of a nozzle or Venturi tube whose geometry is outside, the
        limits of Re_D are not known either: False.
    """
    outside = np.ones(len(form), dtype=np.bool_)
    for one, which in groups(form):
        Re, d, D = reynolds_number[which], bore[which], pipe_diameter[which]
        if one is None:
            outside[which] = orifice.reynolds_number_outside_limits(
                Re, bore=d, pipe_diameter=D, tappings=form[which]
            )
        else:
            usual = np.full(len(d), _USUAL_REYNOLDS_NUMBER)
            geometry = _outside_limits(one, usual, d, D)
            outside[which] = np.isnan(Re) | (_outside_limits(one, Re, d, D) & ~geometry)
    return outside


def _outside_limits(
    form: NozzleForm | VenturiForm, reynolds_number: Floats, bore: Floats, pipe_diameter: Floats
) -> Truths:
    if isinstance(form, VenturiForm):
        return venturi.venturi_outside_limits(
            _VENTURIS[form], reynolds_number, bore=bore, pipe_diameter=pipe_diameter
        )
    outside = {
        NozzleForm.ISA_1932: nozzle.isa_1932_outside_limits,
        NozzleForm.LONG_RADIUS: nozzle.long_radius_outside_limits,
        NozzleForm.VENTURI_NOZZLE: nozzle.venturi_nozzle_outside_limits,
    }[form]
    return outside(reynolds_number, bore=bore, pipe_diameter=pipe_diameter)


def discharge_uncertainty(
    reynolds_number: Floats,
    *,
    bore: Floats,
    pipe_diameter: Floats,
    form: Integers,
    short_straight_lengths: Truths,
) -> Floats:
    """Return the standard's relative expanded uncertainty of each discharge coefficient.

    Parameters
    ----------
    reynolds_number : (n,) array
        Re_D. [-]
    bore, pipe_diameter : (n,) arrays
        At working conditions. [m]
    form : (n,) integer array
        Codes, see `FORM_CODES`.
    short_straight_lengths : (n,) boolean array
        See `stated_uncertainty.SHORT_STRAIGHT_LENGTHS`.

    Returns
    -------
    (n,) array
        k = 2; NaN outside the limits of use. [-]
    """
    found = np.full(len(form), np.nan)
    for one, which in groups(form):
        Re, d, D = reynolds_number[which], bore[which], pipe_diameter[which]
        short = short_straight_lengths[which]
        if one is None:
            found[which] = stated_uncertainty.orifice_discharge_uncertainty(
                Re, bore=d, pipe_diameter=D, tappings=form[which], short_straight_lengths=short
            )
        elif isinstance(one, VenturiForm):
            found[which] = stated_uncertainty.venturi_discharge_uncertainty(
                _VENTURIS[one], Re, bore=d, pipe_diameter=D, short_straight_lengths=short
            )
        else:
            of_form = {
                NozzleForm.ISA_1932: stated_uncertainty.isa_1932_discharge_uncertainty,
                NozzleForm.LONG_RADIUS: stated_uncertainty.long_radius_discharge_uncertainty,
                NozzleForm.VENTURI_NOZZLE: stated_uncertainty.venturi_nozzle_discharge_uncertainty,
            }[one]
            found[which] = of_form(Re, bore=d, pipe_diameter=D, short_straight_lengths=short)
    return found


def expansibility_uncertainty(
    differential_pressure: Floats,
    static_pressure: Floats,
    isentropic_exponent: Floats,
    *,
    diameter_ratio: Floats,
    form: Integers,
) -> Floats:
    """Return the standard's relative expanded uncertainty of each expansibility.

    Parameters
    ----------
    differential_pressure, static_pressure, isentropic_exponent, diameter_ratio, form
        As in `expansibility`.

    Returns
    -------
    (n,) array
        k = 2; NaN where p2/p1 < 0.75. [-]
    """
    found = np.full(len(form), np.nan)
    for one, which in groups(form):
        dp, p1 = differential_pressure[which], static_pressure[which]
        if one is None:
            found[which] = stated_uncertainty.orifice_expansibility_uncertainty(
                dp, p1, isentropic_exponent[which]
            )
        elif one in {NozzleForm.ISA_1932, NozzleForm.LONG_RADIUS}:
            found[which] = stated_uncertainty.nozzle_expansibility_uncertainty(dp, p1)
        else:
            found[which] = stated_uncertainty.venturi_expansibility_uncertainty(
                dp, p1, diameter_ratio=diameter_ratio[which]
            )
    return found
