"""Units at the edge: text in, internal numbers inside, text out.

Internal units are the seven bases below and their products, so one number means one thing: time in
s, concentration in mol/L, mass concentration in g/L, temperature in K, pressure in bar, energy in J.
Bar, joule and decimetre are bases of their own: a pressure times a volume is never quietly an energy.

A unit text is checked by a strict pattern before the unit library sees it (``9**9**9`` would hang
it), and degrees Celsius are handled here, as a plain temperature only.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

from designer.records import Dimension

BASES = ("second", "mole", "decimetre", "gram", "kelvin", "bar", "joule")
ZERO_CELSIUS = 273.15  # K

NONE: Dimension = (0.0,) * 7
TIME: Dimension = (1.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0)
CONCENTRATION: Dimension = (0.0, 1.0, -3.0, 0.0, 0.0, 0.0, 0.0)
MASS_CONCENTRATION: Dimension = (0.0, 0.0, -3.0, 1.0, 0.0, 0.0, 0.0)
TEMPERATURE: Dimension = (0.0, 0.0, 0.0, 0.0, 1.0, 0.0, 0.0)
PRESSURE: Dimension = (0.0, 0.0, 0.0, 0.0, 0.0, 1.0, 0.0)
MOLAR_ENERGY: Dimension = (0.0, -1.0, 0.0, 0.0, 0.0, 0.0, 1.0)
VOLUME: Dimension = (0.0, 0.0, 3.0, 0.0, 0.0, 0.0, 0.0)
HEAT_CAPACITY: Dimension = (0.0, 0.0, 0.0, -1.0, -1.0, 0.0, 1.0)

_DEFINITIONS = """
second = [time] = s
mole = [substance] = mol
decimetre = [length] = dm
gram = [mass] = g
kelvin = [temperature] = K
bar = [pressure]
joule = [energy] = J
ms = 1e-3 s
min = 60 s
h = 3600 s
d = 86400 s
week = 604800 s
month = 2626560 s
mmol = 1e-3 mol
umol = 1e-6 mol
nmol = 1e-9 mol
kmol = 1e3 mol
m = 10 dm
cm = 0.1 dm
mm = 0.01 dm
um = 1e-5 dm
nm = 1e-8 dm
L = dm ** 3
mL = 1e-3 L
uL = 1e-6 L
M = mol / L
mM = 1e-3 M
uM = 1e-6 M
nM = 1e-9 M
kg = 1e3 g
mg = 1e-3 g
ug = 1e-6 g
mbar = 1e-3 bar
Pa = 1e-5 bar
kPa = 1e-2 bar
MPa = 10 bar
atm = 1.01325 bar
psi = 0.0689475729 bar
kJ = 1e3 J
MJ = 1e6 J
cal = 4.184 J
kcal = 4184 J
W = J / s
mW = 1e-3 W
kW = 1e3 W
U = 1e-6 mol / min
percent = 0.01
ppm = 1e-6
AU = 1
"""

LONGEST = 80  # characters of one quantity
_NUMBER = r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d{1,3})?"
_QUANTITY = re.compile(rf"\s*(?P<number>{_NUMBER})(?P<unit>.*)", re.DOTALL)
_EXPONENT = r"-?\d{1,2}(?:\.\d{1,3})?"
_UNIT_TOKEN = re.compile(
    rf"\s*(?:(?P<word>[A-Za-zµμ%]+)|(?P<one>1(?=\s*/))"
    rf"|(?P<power>\^\s*(?:{_EXPONENT}|\({_EXPONENT}\)))|(?P<mark>[*/·().]))"
)


class UnitError(ValueError):
    """The text is no quantity; the message says what stands there and what was expected."""


@dataclass(frozen=True)
class Quantity:
    """A number in internal units, its dimension (exponents over ``BASES``) and the unit as written."""

    value: float
    dimension: Dimension
    unit: str


@lru_cache(maxsize=1)
def _registry() -> Any:
    import pint

    registry: Any = pint.UnitRegistry(None)
    for line in _DEFINITIONS.split("\n"):
        if line:
            registry.define(line)
    return registry


def known() -> tuple[str, ...]:
    """Unit symbols that may be written."""
    words = [line.split("=")[0].strip() for line in _DEFINITIONS.split("\n") if line]
    short = {"second": "s", "mole": "mol", "decimetre": "dm", "gram": "g", "kelvin": "K", "joule": "J"}
    return tuple("%" if word == "percent" else short.get(word, word) for word in words)


def _cleaned(unit: str) -> str:
    """The unit text in the library's own spelling; raises UnitError on anything but units."""
    parts, position, symbols, before = [], 0, set(known()), None
    while position < len(unit.rstrip()):
        match = _UNIT_TOKEN.match(unit, position)
        if match is None:
            raise UnitError(f"'{unit.strip()}' is not written as a unit")
        token = match.group(0).strip()
        if match.lastgroup == "power" and before != "word":  # a tower of powers would run for ever
            raise UnitError(f"'{unit.strip()}' has a power of something other than one unit")
        before = match.lastgroup
        if before == "word":
            token = token.replace("µ", "u").replace("μ", "u")
            if token not in symbols:
                raise UnitError(f"there is no unit '{token}'{_near(token)}")
            token = "percent" if token == "%" else token
        elif before == "power":
            token = "**" + token[1:].strip()
        elif token in ("·", "."):
            token = "*"
        parts.append(token)
        position = match.end()
    return " ".join(parts)


def _near(word: str) -> str:
    from difflib import get_close_matches

    usual = {"sec": "s", "secs": "s", "mins": "min", "minutes": "min", "hr": "h", "hrs": "h", "hours": "h"}
    usual |= {"day": "d", "days": "d", "l": "L", "ml": "mL", "C": "degC", "weeks": "week", "months": "month"}
    near = [usual[word]] if word in usual else get_close_matches(word, known(), n=1, cutoff=0.5)
    return f"; perhaps '{near[0]}'" if near else ""


@lru_cache(maxsize=512)
def scale(unit: str) -> tuple[float, Dimension]:
    """(factor to internal units, dimension) of a unit text; "" is dimensionless.

    Raises UnitError. degC is not a scale: it is accepted only by ``read``.
    """
    if len(unit) > LONGEST:
        raise UnitError(f"a unit of more than {LONGEST} characters")
    if not unit.strip():
        return 1.0, NONE
    cleaned = _cleaned(unit)
    try:
        parsed = _registry().parse_units(cleaned)
        factor, root = _registry().get_root_units(parsed)
    except Exception as reason:  # the library raises many kinds; the pattern has let nothing else through
        raise UnitError(f"'{unit.strip()}' is not written as a unit") from reason
    exponents = dict(root._units)
    return float(factor), tuple(round(float(exponents.get(base, 0)), 6) + 0.0 for base in BASES)


def read(text: str) -> Quantity:
    """Quantity from text such as ``5 mM``, ``-85 kJ/mol``, ``0.0278 L/(mol*s)``, ``25 degC``, ``3``.

    Raises UnitError for anything else, including infinities and numbers out of range.
    """
    if len(text) > LONGEST:
        raise UnitError(f"a quantity of more than {LONGEST} characters")
    match = _QUANTITY.fullmatch(text)
    if match is None:
        raise UnitError(f"'{text.strip()}' does not begin with a number")
    number, unit = float(match["number"]), match["unit"].strip()
    if unit in ("degC", "°C"):
        value, dimension, unit = number + ZERO_CELSIUS, TEMPERATURE, "degC"
        if value <= 0:
            raise UnitError(f"'{text.strip()}' lies below absolute zero")
    else:
        factor, dimension = scale(unit)
        value = number * factor
    if not math.isfinite(value):
        raise UnitError(f"'{text.strip()}' is no finite number")
    return Quantity(value, dimension, unit)


def convert(value: float, unit: str) -> float:
    """An internal value in ``unit`` (degC included)."""
    return value - ZERO_CELSIUS if unit == "degC" else value / scale(unit)[0]


def show(value: float, unit: str, digits: int = 3) -> str:
    """An internal value as text in ``unit`` with ``digits`` significant digits."""
    number = convert(value, unit)
    text = f"{number:.{digits}g}" if unit != "degC" else f"{number:.1f}".removesuffix(".0")
    return f"{text} {unit}".strip()


_WORDS = {
    NONE: "a plain number",
    TIME: "a time",
    CONCENTRATION: "a concentration",
    MASS_CONCENTRATION: "a mass concentration",
    TEMPERATURE: "a temperature",
    PRESSURE: "a pressure",
    MOLAR_ENERGY: "an energy per mole",
    VOLUME: "a volume",
    HEAT_CAPACITY: "a heat capacity",
}


def dimension_words(dimension: Dimension) -> str:
    """In words: ``a time (s)``, ``a concentration (mol/L)``, or the unit alone, ``L/(mol*s)``."""
    words = _WORDS.get(dimension)
    unit = unit_of(dimension)
    return f"{words} ({unit})" if words and unit else words or unit


def _factor(symbol: str, exponent: float) -> str:
    return symbol if exponent == 1 else f"{symbol}^{exponent:g}"


def unit_of(dimension: Dimension, prefer: str = "s") -> str:
    """A printable unit of this dimension, with ``prefer`` as the unit of time; "" for a plain number.

    L stands for dm^3 wherever its exponent has at most three decimals.
    """
    symbols = ["mol", "L", "g", "K", "bar", "J", prefer]
    time, mole, length, gram, kelvin, bar, joule = dimension
    exponents = [mole, round(length / 3, 3), gram, kelvin, bar, joule, time]
    if abs(3 * exponents[1] - length) > 1e-9:
        symbols[1], exponents[1] = "dm", length
    above = [_factor(s, e) for s, e in zip(symbols, exponents, strict=True) if e > 0]
    below = [_factor(s, -e) for s, e in zip(symbols, exponents, strict=True) if e < 0]
    if not above and not below:
        return ""
    top = "*".join(above) or "1"
    if not below:
        return top
    return f"{top}/{below[0]}" if len(below) == 1 else f"{top}/({'*'.join(below)})"
