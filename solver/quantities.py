"""Quantities with units, such as ``20 km`` or ``2e-11 m-1 s-1``, as SI numbers.

Values are exact rationals until the last step, so that every spelling of a
quantity gives the same float: "6 h", "0.25 d" and "21600 s" are one number,
and a fingerprint of a config does not depend on the units it was written in.

Units and their sizes: BIPM, The International System of Units, 9th edition,
tables 2, 4, 7 and 8; the year is the Julian year of 365.25 days (G. A. Wilkins,
The IAU Style Manual, 1989). A kilobyte is 1000 bytes (IEC 80000-13).
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterable
from difflib import get_close_matches
from fractions import Fraction

# Powers of metre, second, kilogram, kelvin, byte.
Dimensions = tuple[int, int, int, int, int]

UNITS: dict[str, tuple[Fraction, Dimensions]] = {
    "mm": (Fraction(1, 1000), (1, 0, 0, 0, 0)),
    "cm": (Fraction(1, 100), (1, 0, 0, 0, 0)),
    "m": (Fraction(1), (1, 0, 0, 0, 0)),
    "km": (Fraction(1000), (1, 0, 0, 0, 0)),
    "s": (Fraction(1), (0, 1, 0, 0, 0)),
    "min": (Fraction(60), (0, 1, 0, 0, 0)),
    "h": (Fraction(3600), (0, 1, 0, 0, 0)),
    "d": (Fraction(86400), (0, 1, 0, 0, 0)),
    "yr": (Fraction(31557600), (0, 1, 0, 0, 0)),
    "g": (Fraction(1, 1000), (0, 0, 1, 0, 0)),
    "kg": (Fraction(1), (0, 0, 1, 0, 0)),
    "K": (Fraction(1), (0, 0, 0, 1, 0)),
    "N": (Fraction(1), (1, -2, 1, 0, 0)),
    "Pa": (Fraction(1), (-1, -2, 1, 0, 0)),
    "J": (Fraction(1), (2, -2, 1, 0, 0)),
    "W": (Fraction(1), (2, -3, 1, 0, 0)),
    "B": (Fraction(1), (0, 0, 0, 0, 1)),
    "kB": (Fraction(10**3), (0, 0, 0, 0, 1)),
    "MB": (Fraction(10**6), (0, 0, 0, 0, 1)),
    "GB": (Fraction(10**9), (0, 0, 0, 0, 1)),
}

# What people write instead, in small letters; only used to suggest the symbol.
_NAMES = {symbol.lower(): symbol for symbol in UNITS} | {
    "millimetre": "mm",
    "centimetre": "cm",
    "metre": "m",
    "kilometre": "km",
    "sec": "s",
    "second": "s",
    "minute": "min",
    "hour": "h",
    "day": "d",
    "year": "yr",
    "gram": "g",
    "kilogram": "kg",
    "kelvin": "K",
    "newton": "N",
    "pascal": "Pa",
    "joule": "J",
    "watt": "W",
    "byte": "B",
    "kilobyte": "kB",
    "megabyte": "MB",
    "gigabyte": "GB",
}
_OFFSET_UNITS = ("degc", "°c", "celsius", "degf", "°f", "fahrenheit")

_COMMON: dict[Dimensions, tuple[str, str]] = {
    (0, 0, 0, 0, 0): ("a number without unit", "0.5"),
    (1, 0, 0, 0, 0): ("a length", "20 km"),
    (2, 0, 0, 0, 0): ("an area", "100 km2"),
    (3, 0, 0, 0, 0): ("a volume", "1 km3"),
    (-1, 0, 0, 0, 0): ("an inverse length", "1e-5 1/m"),
    (0, 1, 0, 0, 0): ("a time", "6 h"),
    (0, -1, 0, 0, 0): ("a rate", "0.01 1/d"),
    (0, -2, 0, 0, 0): ("a rate squared", "1e-11 s-2"),
    (1, -1, 0, 0, 0): ("a velocity", "0.1 m/s"),
    (1, -2, 0, 0, 0): ("an acceleration", "9.81 m/s2"),
    (-1, -1, 0, 0, 0): ("a rate per length", "2e-11 1/m/s"),
    (2, -1, 0, 0, 0): ("a viscosity", "100 m2/s"),
    (4, -1, 0, 0, 0): ("a biharmonic viscosity", "1e10 m4/s"),
    (6, -1, 0, 0, 0): ("a viscosity of order six", "1e20 m6/s"),
    (8, -1, 0, 0, 0): ("a viscosity of order eight", "1e32 m8/s"),
    (2, -2, 0, 0, 0): ("an energy per mass", "0.01 m2/s2"),
    (2, -3, 0, 0, 0): ("a power per mass", "1e-9 m2/s3"),
    (0, 0, 1, 0, 0): ("a mass", "1 kg"),
    (-3, 0, 1, 0, 0): ("a density", "1025 kg/m3"),
    (0, 0, 0, 1, 0): ("a temperature", "280 K"),
    (1, -2, 1, 0, 0): ("a force", "1 N"),
    (-1, -2, 1, 0, 0): ("a pressure or stress", "0.1 Pa"),
    (2, -2, 1, 0, 0): ("an energy", "1 J"),
    (2, -3, 1, 0, 0): ("a power", "1 W"),
    (0, -3, 1, 0, 0): ("a power per area", "100 W/m2"),
    (0, 0, 0, 0, 1): ("an amount of memory", "4 GB"),
}

_QUANTITY = re.compile(
    r"\s*([+-]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][+-]?[0-9]+)?)\s*(.*)", re.DOTALL
)
_FACTOR = re.compile(r"([^\W\d_]+|°[CF])(?:\^?([+-]?[0-9]{1,2}))?")
_SPELLINGS = str.maketrans("⁰¹²³⁴⁵⁶⁷⁸⁹⁻⁺−·*", "0123456789-+-  ")
_LONGEST = 120  # characters: room for every sensible quantity, bounds the work


def parse_quantity(text: str, unit: str) -> float:
    """Value of a quantity in SI.

    Parameters
    ----------
    text : str
        A number and a unit: ``20 km``, ``0.01 1/d``, ``100 m2/s``,
        ``2e-11 m-1 s-1``, ``1e-9 m^2/s^3``. Factors are separated by blanks (or
        ``*``, ``·``, a dot); each slash divides by the one factor after it.
    unit : str
        The SI unit of the result, such as ``m-1 s-1``.

    Returns
    -------
    float
        The float nearest to the value.

    Raises
    ------
    ValueError
        If the text cannot be read, or is of another dimension.
    """
    wanted = f'{dimension_name(unit)} is expected, e.g. "{example_quantity(unit)}"'
    match = _QUANTITY.fullmatch(text) if len(text) <= _LONGEST else None
    if match is None:
        message = (
            f"{quoted(text)} does not start with a number such as 20, 0.5 or 2e-11 "
            f"and go on with a unit: {wanted}"
        )
        raise ValueError(message)
    number, spelled = match[1], match[2].strip()
    target = _parse_unit(unit)[1]
    if not spelled and any(target):
        message = f"{quoted(text)} has no unit: {wanted}"
        raise ValueError(message)
    try:
        scale, dimensions = _parse_unit(spelled or "1")
    except ValueError as error:
        message = f"{quoted(text)}: {error}; {wanted}"
        raise ValueError(message) from error
    if dimensions != target:
        message = f"{quoted(text)} is {_name(dimensions)}, but {wanted}"
        raise ValueError(message)
    rough = float(number)
    try:
        # The float comes first: it bounds the exponent, so the rational is small.
        exact = Fraction(number) * scale if rough and math.isfinite(rough) else None
        value = rough if exact is None else float(exact)
    except OverflowError:
        value = math.inf
    mantissa = re.split("[eE]", number)[0]
    if math.isinf(value) or (value == 0 and re.search("[1-9]", mantissa)):
        message = f"{quoted(text)} is beyond the range of floating-point numbers"
        raise ValueError(message)
    return value + 0.0  # no negative zero


def format_quantity(value: float, unit: str) -> str:
    """Text of a quantity for people, with up to six significant digits.

    Lengths, times and memory are in the largest unit that gives a short number of at
    least one, else in the largest unit that gives at least one; any other
    quantity is in SI.

    Parameters
    ----------
    value : float
        Value in SI.
    unit : str
        SI unit.

    Returns
    -------
    str
        Such as ``20 km``; ``inf`` has no unit. :func:`parse_quantity` reads
        finite values back.
    """
    if not math.isfinite(value):
        return f"{value:g}"
    ladder = {
        "m": ("km", "m", "cm", "mm"),
        "s": ("yr", "d", "h", "min", "s"),
        "B": ("GB", "MB", "kB", "B"),
    }.get(unit)
    if ladder is None or value == 0:
        return f"{value + 0.0:.6g} {unit}"
    sized = [(value / float(UNITS[symbol][0]), symbol) for symbol in ladder]
    fitting = [(x, symbol) for x, symbol in sized if abs(x) >= 1] or sized[-1:]
    for x, symbol in fitting:
        if abs(x) < 1e4 and f"{x:.6g}" == f"{x:.4g}":
            return f"{x:.6g} {symbol}"
    return f"{fitting[0][0]:.6g} {fitting[0][1]}"


def dimension_name(unit: str) -> str:
    """What a unit measures, such as "a length", with its article."""
    return _name(_parse_unit(unit)[1])


def example_quantity(unit: str) -> str:
    """Text of an everyday quantity of the dimension of a unit, such as "20 km"."""
    return _COMMON.get(_parse_unit(unit)[1], ("", f"1 {unit}"))[1]


def quoted(text: str) -> str:
    """Text in double quotes, on one line, cut if it is long."""
    shown = repr(text[:64])[1:-1]
    return f'"{shown}"' if len(text) <= 64 else f'"{shown}..."'


def nearest(word: str, known: Iterable[str]) -> str | None:
    """The known word that a misspelt one most likely stands for, if any does."""
    lowered = {item.lower(): item for item in known}
    found = get_close_matches(word.lower(), lowered, n=1)
    return lowered[found[0]] if found else None


def _name(dimensions: Dimensions) -> str:
    """Name of a dimension with, where it is not plain, its SI unit."""
    metre, second, kilogram, kelvin, byte = dimensions
    named = {"kg": kilogram, "m": metre, "s": second, "K": kelvin, "B": byte}
    unit = " ".join(
        symbol if power == 1 else f"{symbol}{power}"
        for symbol, power in named.items()
        if power
    )
    if dimensions not in _COMMON:
        return f"a quantity in {unit}"
    name = _COMMON[dimensions][0]
    return name if unit in ("", *named) else f"{name} ({unit})"


def _parse_unit(text: str) -> tuple[Fraction, Dimensions]:
    """Size in SI and dimension of a unit, in slash or exponent form."""
    plain = text.replace("**", "^").translate(_SPELLINGS)
    plain = re.sub(r"(?<=\w)\.(?=[^\W\d])", " ", plain)
    if "(" in plain or ")" in plain:
        message = f"unit {quoted(text)} has parentheses: write 1/m/s or m-1 s-1"
        raise ValueError(message)
    above, *below = (part.split() for part in plain.split("/"))
    if any(len(part) != 1 for part in below):
        message = (
            f"unit {quoted(text)} must have one factor after each slash: write 1/m/s "
            "or m-1 s-1 for what is divided by both"
        )
        raise ValueError(message)
    if above == ["1"]:
        above = []
    scale, powers = Fraction(1), [0, 0, 0, 0, 0]
    factors = [(1, word) for word in above] + [(-1, part[0]) for part in below]
    for sign, word in factors:
        match = _FACTOR.fullmatch(word)
        if match is None:
            message = f"unit {quoted(text)} has a factor {quoted(word)} that is no unit"
            raise ValueError(message)
        size, dimensions = _unit(match[1])
        power = int(match[2] or 1)
        if sign < 0 and power < 0:
            message = (
                f"unit {quoted(text)} has a slash and a negative exponent on one "
                "factor: use one of them"
            )
            raise ValueError(message)
        scale *= size ** (sign * power)
        powers = [p + sign * power * d for p, d in zip(powers, dimensions, strict=True)]
    return scale, tuple(powers)


def _unit(symbol: str) -> tuple[Fraction, Dimensions]:
    """Size and dimension of one unit symbol."""
    if symbol in UNITS:
        return UNITS[symbol]
    if symbol.lower() in _OFFSET_UNITS:
        message = (
            f"{quoted(symbol)} is an offset unit, in which ratios and differences "
            "mean different things: give kelvin (0 degC is 273.15 K)"
        )
        raise ValueError(message)
    near = nearest(symbol, _NAMES)
    advice = f'did you mean "{_NAMES[near]}"?' if near else f"known: {' '.join(UNITS)}"
    message = f"unknown unit {quoted(symbol)} ({advice})"
    raise ValueError(message)
