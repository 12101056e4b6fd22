"""Quantities as people write them, "0.12 m", to SI numbers; what could mean two things is refused with the choices.

Units are pint's (PyPI), and these, whose values are exact by definition or stated to five digits in NIST SP 811 B.8:
US_kgal, US_Mgal, imperial_kgal, imperial_Mgal (thousand and million gallons); oil_barrel (42 US gallons), liquid_barrel (31.5);
acre_ft (of international feet); columns of water as mH2O_4C, mH2O_60F, mH2O_20C and mH2O_conventional, and so mmH2O, cmH2O,
inH2O and ftH2O (also _39F and _68F); inHg_0C and inHg_60F.
"""

from __future__ import annotations

import functools
import math
import re
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    import pint

DIMENSIONS = {
    "length": ("m", "m"),
    "pressure": ("Pa", "bar"),
    "current": ("A", "mA"),
    "voltage": ("V", "V"),
    "volume": ("m**3", "m^3"),
    "temperature": ("degC", "degC"),
    "density": ("kg/m**3", "kg/m^3"),
    "expansion": ("1/K", "/ K"),
    "salinity": ("g/kg", "g/kg"),
    "share": ("", "%"),
    "drift": ("1/year", "% / year"),
    "time": ("s", "s"),
}  # what is asked for: the SI unit, a unit to propose

WATER = {
    "conventional": 1000.0,
    "4C": 999.97487,
    "39F": 999.97487,
    "60F": 999.01715,
    "20C": 998.20715,
    "68F": 998.20715,
}  # kg/m3
_COLUMNS = {"m": 1.0, "cm": 0.01, "mm": 0.001, "in": 0.0254, "ft": 0.3048}
_SPEAKING = "conventional, 4C, 60F or 20C, e.g."
AMBIGUOUS = {
    **dict.fromkeys(("gal", "gallon", "gallons"), "US_gallon or imperial_gallon"),
    **dict.fromkeys(("kgal",), "US_kgal or imperial_kgal"),
    **dict.fromkeys(("Mgal", "MG", "million_gallon"), "US_Mgal or imperial_Mgal"),
    **dict.fromkeys(("bbl", "barrel", "barrels"), "oil_barrel (42 US gallons) or liquid_barrel (31.5 US gallons)"),
    **dict.fromkeys(("inHg", "in_Hg"), "inHg_0C or inHg_60F"),
    **{f"{unit}{word}": f"{unit}H2O with its temperature: {_SPEAKING} {unit}H2O_20C"
       for unit in _COLUMNS for word in ("H2O", "_H2O", "wc", "WC", "_water", "WG", "wg")},
}  # fmt: skip
_PLAIN = {"psig": "psi", "psia": "psi", "barg": "bar", "bara": "bar", "°C": "degC", "°F": "degF", "%": "percent", "‰": "g/kg",
          "inch": "in", "USgal": "US_gallon", "US_gal": "US_gallon", "imp_gal": "imperial_gallon"}  # fmt: skip

_STRANGE = re.compile(r"[^\w\s*/^().°%‰-]")  # in no unit
_NUMBER = re.compile(r"\s*([-+]?(?:\d[\d_]*\.?\d*|\.\d+)(?:[eE][-+]?\d+)?)\s*(.*?)\s*")


class QuantityError(ValueError):
    """Text that is no quantity of the kind asked for; the message says what to write instead."""


def read(text: object, dimension: str) -> float:
    """The SI number of a quantity such as "0.12 m". dimension: one of DIMENSIONS (salinity in g/kg, temperature in degC).

    Raises QuantityError for a bare number, an unknown or ambiguous unit, another dimension, a number that is not finite.

    >>> read("1 bar", "pressure"), read("10 degC", "temperature"), read("0.1 %", "share")
    (100000.0, 10.0, 0.001)
    """
    proposed = DIMENSIONS[dimension][1]
    if isinstance(text, bool) or not isinstance(text, (str, int, float)):
        raise QuantityError(f'{text!r} is no {dimension}; write it like "1.5 {proposed}"')
    match = _NUMBER.fullmatch(text if isinstance(text, str) else repr(text))
    if match is None:
        raise QuantityError(f'"{text}" is no {dimension}; write a number and its unit, like "1.5 {proposed}"')
    number, unit = float(match[1].replace("_", "")), match[2]
    if not unit:
        raise QuantityError(f'{text} has no unit; write it with one, like "{match[1]} {proposed}"')
    value = unit_factor(unit, dimension, number)
    if not math.isfinite(value):
        raise QuantityError(f'"{text}" is not finite; write {dimension} like "1.5 {proposed}"')
    return value


def unit_factor(unit: str, dimension: str, number: float = 1.0) -> float:
    """The SI value of a number of a unit. QuantityError as in read().

    >>> unit_factor("mm", "length"), round(unit_factor("US_gallon", "volume"), 9)
    (0.001, 0.003785412)
    """
    si, proposed = DIMENSIONS[dimension]
    for word in re.findall(r"[^\s*/^()\d][^\s*/^()]*", unit):
        if word in AMBIGUOUS:
            raise QuantityError(f'"{unit}" can mean more than one unit; write {AMBIGUOUS[word]}')
    quantity = None if _STRANGE.search(unit) else _quantity(_spelt(unit), number)
    if quantity is None:
        raise QuantityError(f'"{unit}" is no unit known here; write {dimension} like "1.5 {proposed}"')
    try:
        return float(quantity.to(si or "dimensionless").magnitude)
    except Exception:
        raise QuantityError(f'"{unit}" is no unit of {dimension}; write one like "{proposed}"') from None


def _spelt(unit: str) -> str:
    """The unit in pint's spelling: m3 as m**3, % as percent."""
    unit = re.sub(r"\b(mm|cm|dm|m|in|ft|yd)([23])\b", r"\1**\2", unit)
    for word, plain in _PLAIN.items():
        unit = re.sub(rf"(?<![\w°%]){re.escape(word)}(?![\w°%])", plain, unit)
    if "/" in unit:
        unit = re.sub(r"\b(deg[CF])\b", r"delta_\1", unit)
    return f"1 {unit}" if unit.startswith("/") else unit


def _quantity(unit: str, number: float) -> Any:
    registry = _registry()
    try:
        if unit in ("degC", "degF", "K", "kelvin", "degR"):
            return registry.Quantity(number, unit)
        return registry.Quantity(number) * registry.parse_expression(unit)
    except Exception:  # pint has many ways to say that it does not know a unit, tokenizer errors among them
        return None


@functools.cache
def _registry() -> pint.UnitRegistry[Any]:
    import pint

    registry: pint.UnitRegistry[Any] = pint.UnitRegistry()
    for gallon, factor in (("US", 0.003785411784), ("imperial", 0.00454609)):
        registry.define(f"{gallon}_gallon = {factor!r} * meter ** 3")
        registry.define(f"{gallon}_kgal = {factor * 1e3!r} * meter ** 3")
        registry.define(f"{gallon}_Mgal = {factor * 1e6!r} * meter ** 3")
    registry.define("oil_barrel = 0.158987294928 * meter ** 3")
    registry.define("liquid_barrel = 0.119240471196 * meter ** 3")
    registry.define("acre_ft = 1233.48183754752 * meter ** 3")
    registry.define("inHg_0C = 3386.388640341 * pascal")
    registry.define("inHg_60F = 3376.85 * pascal")
    for name, metres in _COLUMNS.items():
        for state, density in WATER.items():
            registry.define(f"{name}H2O_{state} = {metres * density * 9.80665!r} * pascal")
    return registry
