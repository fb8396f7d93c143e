"""Quantities as people write them, at the edges only: text in any unit to SI and back.

Arithmetic is done in exact fractions and rounded once to float64, so "154.08 mm" is the float
nearest to 0.15408 and no library version can move its last bit.

Units come from pint; what pint leaves ambiguous is settled or refused here:

- A column of water needs the water's temperature: "100 inH2O @ 4 degC", "@ 20 degC" (the same
  as "@ 68 degF") or "@ 60 degF"; they differ by 0.05 % to 0.18 %. mmHg and inHg are mercury at
  0 degC (conventional, 13 595.1 kg/m3).
- Btu is the International Table Btu (1 055.055 852 62 J); a calorie or a therm must say which.
- Gauge or absolute is a fact of the instrument, declared in a field of its own, never a suffix
  of the unit: "psig" and "bara" are refused.
- A volume is a volume: "Nm3" and "scf" are refused, base conditions are declared apart.
"""

from __future__ import annotations

import difflib
import math
import re
from dataclasses import dataclass
from decimal import Context, Decimal, localcontext
from fractions import Fraction
from functools import lru_cache
from typing import Any, Literal

from meterfix.errors import UnitError

Dimension = Literal[
    "pressure",
    "temperature",
    "temperature_difference",
    "length",
    "time",
    "fraction",
    "mass",
    "volume",
    "density",
    "dynamic_viscosity",
    "per_temperature",
    "energy",
    "energy_per_volume",
    "energy_per_mass",
    "per_energy",
]
"""What a quantity can be; SI: Pa, K, K, m, s, -, kg, m3, kg/m3, Pa s, 1/K, J, J/m3, J/kg, 1/J."""

_Exponents = tuple[int, int, int, int]
"""Powers of mass, length, time, temperature."""

_DIMENSIONS: dict[Dimension, tuple[_Exponents, str]] = {
    "pressure": ((1, -1, -2, 0), "25 kPa"),
    "temperature": ((0, 0, 0, 1), "18 degC"),
    "temperature_difference": ((0, 0, 0, 1), "1.5 K"),
    "length": ((0, 1, 0, 0), "154.08 mm"),
    "time": ((0, 0, 1, 0), "5 min"),
    "fraction": ((0, 0, 0, 0), "1.5 %"),
    "mass": ((1, 0, 0, 0), "12 kg"),
    "volume": ((0, 3, 0, 0), "10 m3"),
    "density": ((1, -3, 0, 0), "0.8 kg/m3"),
    "dynamic_viscosity": ((1, -1, -1, 0), "0.0111 mPa s"),
    "per_temperature": ((0, 0, 0, -1), "16e-6 / K"),
    "energy": ((1, 2, -2, 0), "3.6 MJ"),
    "energy_per_volume": ((1, -1, -2, 0), "38.9 MJ/m3"),
    "energy_per_mass": ((0, 2, -2, 0), "50 MJ/kg"),
    "per_energy": ((-1, -2, 2, 0), "38.50 per MWh"),
}

# Densities of water [kg/m3] that give a water column its pressure under g = 9.80665 m/s2.
# 4 degC: the conventional 1 000 kg/m3 (NIST SP 811: 249.0889 Pa an inch; from memory).
# 20 degC: 998.2067, M. Tanaka et al., Metrologia 38 (2001) 301 (from memory).
# 60 degF: 999.012, the 62.3663 lbm/ft3 of API MPMS 14.3.1 (from memory); NIST SP 811's
# 248.84 Pa an inch is met within its printed digits.
_WATER: dict[Fraction, tuple[str, str]] = {
    Fraction("277.15"): ("4C", "1000"),
    Fraction("293.15"): ("20C", "998.2067"),
    Fraction("51967/180"): ("60F", "999.012"),
}
_MERCURY_TEMPERATURE = Fraction("273.15")

_COLUMN = re.compile(r"(?:m|mm|cm|in|ft)(?:H2O|Hg)")
_REFERENCE_SUFFIX = re.compile(
    r"(?P<unit>[mkM]?bar|psi|[hkM]?Pa|atm|kgf/cm2)(?:\s*\(?(?:[gGaA]|abs|gauge|absolute)\)?)"
)
_NUMBER = re.compile(r"\s*([+-]?(?:[0-9]+(?:\.[0-9]*)?|\.[0-9]+)(?:[eE][+-]?[0-9]{1,4})?)\s*(.*)")
_FACTOR = re.compile(r"([A-Za-zµμ%][A-Za-z0-9µμ_]*?)\^?(-?[1-9])?")
_PER_VOLUME = re.compile(
    r"(?:/|\bper\b)\s*(?:[mM]?[lL]|[cd]?m\s*(?:\^|\*\*)?\s*[3³]|ft\s*(?:\^|\*\*)?\s*[3³])\s*$"
)
_SPELLINGS = (
    ("°C", "degC"),
    ("°F", "degF"),
    ("²", "2"),
    ("³", "3"),
    ("H₂O", "H2O"),
    ("·", " "),
    ("%", "percent"),
)
_AMBIGUOUS = {
    "cal": "say cal_IT or cal_th",
    "kcal": "say kcal_IT or kcal_th",
    "therm": "say therm_EC (105.505 585 MJ) or therm_US (105.480 4 MJ)",
    "therms": "say therm_EC (105.505 585 MJ) or therm_US (105.480 4 MJ)",
    "month": "say days",
    "year": "say days",
    "Nm3": "write m3; base conditions are declared apart",
    "Sm3": "write m3; base conditions are declared apart",
    "scf": "write ft3; base conditions are declared apart",
    "C": "write degC",
    "F": "write degF",
}
_COMMON = (
    *("Pa", "hPa", "kPa", "MPa", "bar", "mbar", "psi", "atm", "mmHg", "inHg", "kgf"),
    *("degC", "degF", "K", "mm", "cm", "m", "in", "ft", "s", "min", "h", "d", "%", "ppm"),
    *("kg", "g", "lb", "m3", "ft3", "L", "J", "kJ", "MJ", "GJ", "kWh", "MWh", "Btu", "MMBtu"),
    *("therm_EC", "therm_US", "cal_IT", "kcal_IT", "cP", "Pa s", "mPa s"),
)
_LONGEST = 80


@dataclass(frozen=True, slots=True)
class _Unit:
    scale: Fraction
    offset: Fraction
    exponents: _Exponents


@lru_cache(maxsize=1)
def _registry() -> Any:
    """Return the one pint registry; pint is imported here because it costs 0.4 s."""
    import pint  # noqa: PLC0415

    registry: Any = pint.UnitRegistry(non_int_type=Decimal, cache_folder=None)
    for definition in (
        "btu_international = 1055.05585262 joule = Btu = BTU",
        "million_btu = 1e6 btu_international = MMBtu = mmBtu",
        "therm_EC = 1e5 btu_international",
        "therm_US = 105480400 joule",
        "cal_IT = 4.1868 joule",
        "kcal_IT = 4186.8 joule",
        "cal_th = 4.184 joule",
        "kcal_th = 4184 joule",
        "column_mercury = 13595.1 kilogram / meter**3 * 9.80665 meter / second**2",
        *(
            f"column_water_{name} = {density} kilogram / meter**3 * 9.80665 meter / second**2"
            for name, density in _WATER.values()
        ),
    ):
        registry.define(definition)
    return registry


@lru_cache(maxsize=512)
def _named(name: str) -> tuple[Fraction, Fraction, _Exponents]:
    """Return scale, offset and dimension of one unit without a power."""
    import pint  # noqa: PLC0415

    if name in _AMBIGUOUS:
        raise UnitError(f"the unit '{name}' can mean several things; {_AMBIGUOUS[name]}")
    if _COLUMN.fullmatch(name):
        raise UnitError(
            f"the unit '{name}' says no temperature of the water; "
            f"write '{name} @ 4 degC', '@ 20 degC' (68 degF) or '@ 60 degF'"
        )
    registry = _registry()
    with localcontext(Context(prec=50)):
        try:
            powers = registry.get_dimensionality(name)
            zero, one = (registry.Quantity(Decimal(n), name) for n in (0, 1))
            offset = _snapped(Fraction(zero.to_base_units().magnitude))
            scale = _snapped(Fraction(one.to_base_units().magnitude) - offset)
        except (pint.PintError, AttributeError, ValueError, TypeError) as error:
            near = difflib.get_close_matches(name, _COMMON, n=1, cutoff=0.6)
            hint = f"did you mean '{near[0]}'?" if near else "use for example kPa, degC, mm, min"
            raise UnitError(f"the unit '{name}' is not known; {hint}") from error
    known = ("[mass]", "[length]", "[time]", "[temperature]")
    if any(dimension not in known for dimension in powers):
        raise UnitError(
            f"the unit '{name}' measures nothing that a gas meter needs; "
            "use for example kPa, degC, mm, min"
        )
    mass, length, time, temperature = (int(powers.get(dimension, 0)) for dimension in known)
    return scale, offset, (mass, length, time, temperature)


def _snapped(value: Fraction) -> Fraction:
    """Return the simple fraction that 28 or more decimal digits stand for (5/9), or the value."""
    simple = value.limit_denominator(100_000)
    return simple if abs(simple - value) <= abs(value) * Fraction(1, 10**24) else value


def _liquid_column(text: str) -> str | None:
    """Return pint's words for a liquid column at a temperature, or None if it is no column."""
    before, mark, after = text.partition("@")
    name = before.strip()
    if _COLUMN.fullmatch(name) is None:
        if mark:
            raise UnitError(f"the unit '{text}' has an '@'; only columns of water and mercury do")
        return None
    length, liquid = (name[:-3], "water") if name.endswith("H2O") else (name[:-2], "mercury")
    if not after.strip():
        return f"{length} column_mercury" if liquid == "mercury" and not mark else name
    temperature, unit = _split(after)
    found = _unit(unit)
    kelvin = temperature * found.scale + found.offset
    if liquid == "mercury" and kelvin == _MERCURY_TEMPERATURE:
        return f"{length} column_mercury"
    if liquid == "water" and found.exponents == (0, 0, 0, 1) and kelvin in _WATER:
        return f"{length} column_water_{_WATER[kelvin][0]}"
    allowed = "0 degC" if liquid == "mercury" else "4 degC, 20 degC, 68 degF and 60 degF"
    raise UnitError(f"the unit '{text}' names a temperature with no agreed density; use {allowed}")


@lru_cache(maxsize=512)
def _unit(text: str) -> _Unit:
    """Return scale, offset and dimension of a unit: names and powers between blanks and '/'."""
    written = text.strip()
    if written in {"", "1"}:
        return _Unit(Fraction(1), Fraction(0), (0, 0, 0, 0))
    if len(written) > _LONGEST:
        raise UnitError(f"the unit '{written[:20]}...' is too long; at most {_LONGEST} characters")
    if suffix := _REFERENCE_SUFFIX.fullmatch(written):
        raise UnitError(
            f"the unit '{written}' mixes in gauge or absolute; write '{suffix['unit']}', "
            "gauge or absolute is declared apart"
        )
    plain = written
    for spelling, usual in _SPELLINGS:
        plain = plain.replace(spelling, usual)
    plain = _liquid_column(plain) or plain
    plain = re.sub(r"\s*\^\s*", "^", plain.replace("**", "^")).replace("*", " ")
    return _product(re.sub(r"/|\bper\b", " / ", plain).split(), written)


def _product(words: list[str], written: str) -> _Unit:
    """Return the product of the words' units; a '/' divides by the next one only."""
    scale, totals, offset, divide = Fraction(1), [0, 0, 0, 0], Fraction(0), False
    names = 0
    for word in words:
        if word == "/":
            if divide:
                raise UnitError(f"the unit '{written}' cannot be read; write it like 'kJ/kg'")
            divide = True
            continue
        if word == "1":
            continue
        match = _FACTOR.fullmatch(word)
        if match is None:
            raise UnitError(f"the unit '{written}' cannot be read; write it like 'MJ/m3' or 'mbar'")
        names += 1
        sign = -1 if divide else 1
        divide = False
        factor, zero, exponents = _named_or_power(match[1], match[2], word)
        if sign == 1:
            scale *= factor
        else:
            scale /= factor
        totals = [total + sign * e for total, e in zip(totals, exponents, strict=True)]
        # in a product or quotient a degree is a difference, so its zero does not matter
        offset = zero if len(words) == 1 else Fraction(0)
    if divide or names == 0:
        raise UnitError(f"the unit '{written}' cannot be read; write it like 'kJ/kg'")
    return _Unit(scale, offset, (totals[0], totals[1], totals[2], totals[3]))


def _named_or_power(name: str, power: str | None, word: str) -> tuple[Fraction, Fraction, Any]:
    if word in _AMBIGUOUS or _COLUMN.fullmatch(word) or power is None:
        return _named(word)
    factor, _, exponents = _named(name)
    n = int(power)
    return factor**n, Fraction(0), tuple(n * e for e in exponents)


def _split(text: str) -> tuple[Fraction, str]:
    """Return the exact number and the unit's text."""
    match = _NUMBER.fullmatch(text) if len(text) <= 2 * _LONGEST else None
    if match is None:
        raise UnitError(
            f"{text[:_LONGEST]!r} does not begin with a number; write a number and its unit, "
            "with a point as decimal mark"
        )
    number = Decimal(match[1])
    # an exact fraction of 1e9999 would have ten thousand digits
    if number != 0 and abs(number.adjusted()) > 330:
        raise UnitError(f"the number in {text!r} is out of reach; use one between 1e-300 and 1e300")
    return Fraction(number), match[2]


def _article(name: str) -> str:
    return f"{'an' if name[0] in 'aeiou' else 'a'} {name}"


def _is_per_volume(unit: str) -> bool:
    """Tell an energy per volume from a pressure: they have one dimension, but not one meaning."""
    return _PER_VOLUME.search(unit) is not None


def _description(exponents: _Exponents, unit: str) -> str:
    if exponents == _DIMENSIONS["pressure"][0]:
        return "an energy per volume" if _is_per_volume(unit) else "a pressure"
    same = [name for name, (known, _) in _DIMENSIONS.items() if known == exponents]
    words = " or ".join(
        name.replace("_", " ") for name in same if name != "temperature_difference"
    ).replace("fraction", "plain number")
    if words:
        return _article(words)
    m, l, t, k = exponents
    inverse = next((n for n, (known, _) in _DIMENSIONS.items() if known == (-m, -l, -t, -k)), None)
    return f"per {inverse}" if inverse else "of another kind"


def _wanted(text: str, unit: str, dimension: Dimension) -> _Unit:
    """Return the unit if it measures the dimension; raise UnitError naming both if not."""
    exponents, example = _DIMENSIONS[dimension]
    name = dimension.replace("_", " ")
    found = _unit(unit)
    if dimension != "fraction" and unit.strip() == "":
        raise UnitError(
            f"'{text}' has no unit; {_article(name)} is needed, for example '{example}'"
        )
    other_meaning = exponents == _DIMENSIONS["pressure"][0] and _is_per_volume(unit) != (
        dimension == "energy_per_volume"
    )
    if found.exponents != exponents or other_meaning:
        raise UnitError(
            f"'{text}' is {_description(found.exponents, unit)} (unit '{unit.strip()}'); "
            f"{_article(name)} is needed, for example '{example}'"
        )
    if dimension == "temperature_difference":
        return _Unit(found.scale, Fraction(0), found.exponents)
    return found


def _rounded(exact: Fraction, text: str) -> float:
    try:
        value = float(exact)
    except OverflowError:
        value = math.inf
    if not math.isfinite(value):
        raise UnitError(f"'{text}' is out of reach; use a number below 1e300")
    return value


def parse(text: str, dimension: Dimension) -> float:
    """Return a quantity written with its unit in SI, correctly rounded.

    Parameters
    ----------
    text : str
        A number (point as decimal mark) and a unit: "25 kPa", "100 inH2O @ 4 degC",
        "18 degC", "16e-6 / K", "1.5 %", "38.50 per MWh". '/' or 'per' divides by the next unit
        only; powers as in 'm3'.
    dimension : Dimension
        What the quantity must be.

    Returns
    -------
    float
        The value in the SI unit of the dimension.

    Raises
    ------
    UnitError
        If the text cannot be read, the unit is unknown, ambiguous or of another dimension, or a
        temperature lies below absolute zero. The message is "what was given; what is allowed".
    """
    number, unit = _split(text)
    found = _wanted(text.strip(), unit, dimension)
    exact = number * found.scale + found.offset
    if dimension == "temperature" and exact < 0:
        raise UnitError(f"'{text.strip()}' is below absolute zero; use at least '-273.15 degC'")
    return _rounded(exact, text.strip())


def linear(unit: str, dimension: Dimension) -> tuple[float, float]:
    """Return (scale, offset) of a unit: SI value = value x scale + offset, for whole columns.

    Raises
    ------
    UnitError
        As `parse`.
    """
    found = _wanted(unit.strip() or "1", unit, dimension)
    return _rounded(found.scale, unit), _rounded(found.offset, unit)


def render(value: float, unit: str) -> float:
    """Return an SI value in a unit, with no more digits than it takes to read it back.

    288.15 K is 15.0 degC, though the float 288.15 lies 2e-14 below it. A value that is not
    finite stays as it is.

    Raises
    ------
    UnitError
        If the unit cannot be read.
    """
    if not math.isfinite(value):
        return value
    found = _unit(unit)
    exact = (Fraction(value) - found.offset) / found.scale
    # as many decimals as the float's own step allows, one more if that is too coarse
    step = Fraction(math.ulp(value)) / abs(found.scale)
    decimals = math.floor(math.log10(step.denominator) - math.log10(step.numerator))
    for places in (decimals, decimals + 1):
        shorter = round(exact, places)
        if float(shorter * found.scale + found.offset) == value:
            return _rounded(shorter, f"{value} in {unit}")
    return _rounded(exact, f"{value} in {unit}")
