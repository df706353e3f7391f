"""Texts with a unit at the door, SI floats inside.

A quantity is a finite decimal number, a blank or none, and a unit from a fixed list: "10 ns",
"85 MHz/V", "-130 dBc/Hz", "27 degC". The unit alone goes to Pint; the list keeps out whatever
Pint would read in a way that a circuit designer does not mean ("1u" as the atomic mass unit).
"""

import math
import re
from collections.abc import Iterator
from functools import cache
from typing import TYPE_CHECKING

from cosim.errors import UnitError

if TYPE_CHECKING:
    import pint

_QUANTITY = re.compile(r"\s*([+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)\s*(.*?)\s*")

_PREFIXES = ("", "f", "p", "n", "u", "µ", "m", "k", "M", "G", "T")

# Base units that take any prefix of the list above.
_PREFIXED = ("s", "Hz", "V", "A", "ohm", "F", "H", "W", "m", "K")

# Decibel units stay numbers in decibels; Pint does not know them.
_DECIBELS = ("dB", "dBc", "dBm", "dBc/Hz")

# Spectral densities by the unit of what fluctuates. "2 nV/sqrt(Hz)" is squared on the way in.
_DENSITIES = {"Hz^2/Hz": "Hz", "V^2/Hz": "V", "rad^2/Hz": "rad", "1/Hz": "1"}
_SQUARED, _ROOT = "^2/Hz", "/sqrt(Hz)"

_WHAT = {
    "s": ("a time", "10 ns"),
    "Hz": ("a frequency", "6.2 GHz"),
    "V": ("a voltage", "1.1 V"),
    "A": ("a current", "10 uA"),
    "ohm": ("a resistance", "50 ohm"),
    "K": ("a temperature", "4.2 K"),
    "Hz/V": ("a frequency per voltage", "85 MHz/V"),
    "dB": ("a ratio in decibels", "20 dB"),
    "rad": ("an angle", "90 deg"),
    "m": ("a length", "2 um"),
    "V m": ("a voltage times a length", "3.5 mV um"),
    "1 m": ("a ratio times a length", "1 % um"),
    "Hz^2/Hz": ("a spectral density of a frequency", "1e3 Hz^2/Hz"),
    "V^2/Hz": ("a spectral density of a voltage", "2 nV/sqrt(Hz)"),
    "rad^2/Hz": ("a spectral density of a phase", "1e-12 rad^2/Hz"),
    "1/Hz": ("a spectral density of a ratio", "1e-14 1/Hz"),
    "dBc/Hz": ("a level below the carrier", "-120 dBc/Hz"),
}


def _spellings(unit: str) -> Iterator[str]:
    if unit in _PREFIXED:
        for prefix in _PREFIXES:
            yield prefix + unit
        if unit == "K":
            yield "degC"
        if unit == "s":
            yield "min"
    elif unit == "Hz/V":
        for top in _spellings("Hz"):
            for bottom in _spellings("V"):
                yield f"{top}/{bottom}"
    elif unit == "V m":
        # With a space, since "mVum" could be cut in more than one place.
        for voltage in _spellings("V"):
            for length in _spellings("m"):
                yield f"{voltage} {length}"
    elif unit == "1 m":
        for length in _spellings("m"):
            yield from (length, f"% {length}")
    elif unit in _DENSITIES:
        base = _DENSITIES[unit]
        yield from (unit, f"{base}{_ROOT}")
        for spelling in _spellings(base) if base != "1" else ():
            yield from (f"{spelling}{_SQUARED}", f"{spelling}{_ROOT}")
    elif unit == "rad":
        yield from ("rad", "mrad", "deg")
    else:
        yield unit


@cache
def _allowed(unit: str) -> frozenset[str]:
    return frozenset(_spellings(unit))


@cache
def _registry() -> "pint.UnitRegistry[float]":
    # Pint's registry takes a third of a second to build, so it is made on first use.
    import pint

    return pint.UnitRegistry()


@cache
def _factor(spelling: str, unit: str) -> float:
    if unit in ("V m", "1 m"):
        first, space, length = spelling.rpartition(" ")
        if unit == "1 m":
            return (0.01 if space else 1.0) * _factor(length, "m")
        return _factor(first, "V") * _factor(length, "m")
    if unit in _DENSITIES:
        base = spelling.removesuffix(_SQUARED).removesuffix(_ROOT)
        return 1.0 if _DENSITIES[unit] == "1" else _factor(base, _DENSITIES[unit]) ** 2
    registry = _registry()
    quantity = registry.Quantity(1.0, registry.parse_units(spelling.replace("µ", "u")))
    return float(quantity.to(unit).magnitude)


def _split(text: str) -> tuple[float, str]:
    match = _QUANTITY.fullmatch(text)
    if match is None or not math.isfinite(number := float(match[1])):
        raise UnitError(f"'{text}' is not a finite number with a unit")
    return number, match[2]


def _to_si(number: float, spelling: str, unit: str) -> float:
    if unit in _DECIBELS:
        return number
    if spelling == "degC":
        return number + 273.15
    if spelling.endswith(_ROOT):
        number = number * abs(number)  # A negative one stays an error of whoever looks at it.
    factor = _factor(spelling, unit)
    inverse = round(1 / factor)
    if factor < 1 and math.isclose(factor * inverse, 1.0, rel_tol=1e-12):
        # Dividing by a power of ten rounds once: "10 us" is the float nearest to 1e-5.
        return number / inverse
    return number * factor


def parse_quantity(text: object, unit: str) -> float:
    """Read a quantity given as a text with its unit.

    Parameters
    ----------
    text : str
        For instance "10 ns". A bare number is an error unless `unit` is "1".
    unit : str
        The unit wanted: "s", "Hz", "V", "A", "ohm", "K", "Hz/V", "dB", "rad", "m",
        "V m", "1 m" (a ratio times a length), "Hz^2/Hz", "V^2/Hz", "rad^2/Hz", "1/Hz", or "1".

    Returns
    -------
    float
        The value in `unit`; decibels stay decibels, degrees Celsius become kelvin.

    Raises
    ------
    UnitError
        If the number is not finite, or the unit is missing, unknown or of another kind.
    """
    if unit == "1":
        if isinstance(text, (int, float)) and not isinstance(text, bool) and math.isfinite(text):
            return float(text)
        raise UnitError(f"wanted a plain number, got {text!r}")
    what, example = _WHAT.get(unit, (f"a quantity in {unit}", f"1 {unit}"))
    if not isinstance(text, str):
        raise UnitError(f'wanted {what} as a text with its unit, such as "{example}", got {text!r}')
    try:
        number, spelling = _split(text)
    except UnitError:
        raise UnitError(f'wanted {what}, such as "{example}", got "{text}"') from None
    if spelling not in _allowed(unit):
        fault = "without a unit" if not spelling else f'with the unit "{spelling}"'
        near = {name.lower(): name for name in _allowed(unit)}.get(spelling.lower())
        hint = f'did you mean "{near}"? Capitals matter in units' if near else ""
        if spelling and not near and spelling + unit in _allowed(unit):
            hint = f'SPICE suffixes are not read here; did you mean "{spelling}{unit}"?'
        raise UnitError(f'wanted {what}, such as "{example}", got "{text}" {fault}', hint=hint)
    return _to_si(number, spelling, unit)


def parse_parameter(value: object) -> float:
    """Read the value of a deck's parameter: a plain number, or a number with a unit.

    Parameters
    ----------
    value : int, float or str
        For instance 93, "1.1 V" or "2 um". SPICE suffixes ("1u", "5M") are refused, since "M"
        is milli there and mega everywhere else.

    Returns
    -------
    float
        The value in SI units.

    Raises
    ------
    UnitError
        If the value is not finite or its unit is not one of the list.
    """
    if isinstance(value, (int, float)) and not isinstance(value, bool):
        if not math.isfinite(value):
            raise UnitError(f"wanted a finite number, got {value!r}")
        return float(value)
    if not isinstance(value, str):
        raise UnitError(f'wanted a number or a text such as "1.1 V", got {value!r}')
    number, spelling = _split(value)
    if not spelling:
        return number
    for unit in (*_PREFIXED, "rad", "Hz/V", *_DECIBELS):
        if spelling in _allowed(unit):
            return _to_si(number, spelling, unit)
    raise UnitError(
        f'the unit "{spelling}" of "{value}" is not known',
        hint='SPICE suffixes are not read here; write a number (1e-6) or a unit ("1 um", "5 MHz")',
    )


def format_quantity(value: float, unit: str, digits: int = 4) -> str:
    """Write a quantity with a prefix that suits it, for people to read.

    Parameters
    ----------
    value : float
        Value in `unit`.
    unit : str
        An SI unit such as "s", "Hz" or "V", or one that takes no prefix ("dB", "K", "rad").
    digits : int
        Significant digits.

    Returns
    -------
    str
        For instance "6.2 GHz"; "-" for a value that is not a number.
    """
    if math.isnan(value):
        return "-"
    if unit in ("s", "Hz", "V", "A", "F", "H", "W", "m") and value != 0 and math.isfinite(value):
        compact = _registry().Quantity(value, unit).to_compact()
        return f"{compact.magnitude:.{digits}g} {compact.units:~}"
    return f"{value:.{digits}g} {unit}"
