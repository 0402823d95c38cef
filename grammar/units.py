"""Dimensions and units: the table a reader can check against the SI brochure, and how values are read and printed."""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from difflib import get_close_matches
from fractions import Fraction
from functools import lru_cache

Exponent = int | Fraction


@dataclass(frozen=True, slots=True)
class Dimension:
    """Exponents of kg, m, s, A, K.

    `spelling` remembers whether a rate was written in cycles ("Hz") or in angle ("rad/s"): both are 1/s, yet adding one to the
    other forgets a factor of 2 pi. It does not take part in equality; products and quotients drop it.
    """

    kg: Exponent = 0
    m: Exponent = 0
    s: Exponent = 0
    A: Exponent = 0
    K: Exponent = 0

    @property
    def exponents(self) -> tuple[Exponent, Exponent, Exponent, Exponent, Exponent]:
        """(kg, m, s, A, K)."""
        return self.kg, self.m, self.s, self.A, self.K

    @property
    def is_none(self) -> bool:
        """Whether it is a plain number."""
        return self == NONE

    def __mul__(self, other: Dimension) -> Dimension:
        return _product(self, other)

    def __truediv__(self, other: Dimension) -> Dimension:
        return _quotient(self, other)

    def __pow__(self, exponent: Exponent) -> Dimension:
        return _power(self, exponent)


@lru_cache(maxsize=4096)
def _product(a: Dimension, b: Dimension) -> Dimension:
    return Dimension(*(_tidy(x + y) for x, y in zip(a.exponents, b.exponents, strict=True)))


@lru_cache(maxsize=4096)
def _quotient(a: Dimension, b: Dimension) -> Dimension:
    return Dimension(*(_tidy(x - y) for x, y in zip(a.exponents, b.exponents, strict=True)))


@lru_cache(maxsize=4096)
def _power(a: Dimension, exponent: Exponent) -> Dimension:
    return Dimension(*(_tidy(x * exponent) for x in a.exponents))


def _tidy(x: Exponent) -> Exponent:
    return int(x) if isinstance(x, Fraction) and x.denominator == 1 else x


NONE = Dimension()
TIME = Dimension(s=1)
RATE = Dimension(s=-1)
LENGTH = Dimension(m=1)
MASS = Dimension(kg=1)
CURRENT = Dimension(A=1)
TEMPERATURE = Dimension(K=1)
ENERGY = Dimension(kg=1, m=2, s=-2)
POWER = Dimension(kg=1, m=2, s=-3)
VOLTAGE = POWER / CURRENT
RESISTANCE = VOLTAGE / CURRENT
CONDUCTANCE = CURRENT / VOLTAGE
CHARGE = CURRENT * TIME
FLUX = VOLTAGE * TIME
CAPACITANCE = CHARGE / VOLTAGE
INDUCTANCE = FLUX / CURRENT
FORCE = Dimension(kg=1, m=1, s=-2)
TORQUE = ENERGY  # N*m; an angle has no dimension
SPEED = LENGTH / TIME


@dataclass(frozen=True, slots=True)
class Unit:
    """One unit as written: value_si = number * factor + offset.

    Args:
        symbol: as written, e.g. "mohm", "V/us".
        factor: to SI.
        dimension: of the value in SI.
        offset: only for degC.
        spelling: "Hz", "rad" or None, see Dimension.
    """

    symbol: str
    factor: float
    dimension: Dimension
    offset: float = 0.0
    spelling: str | None = None

    def to_si(self, number: float) -> float:
        """number * factor + offset. A factor that is one over a whole number divides, so that 200 uH is 2e-4 H to the last bit."""
        inverse = round(1 / self.factor) if 1e-15 < self.factor < 1 else 0
        if inverse and abs(inverse * self.factor - 1) < 1e-15:
            return number / inverse + self.offset
        return number * self.factor + self.offset


# ---------------------------------------------------------------- the table

# Symbols that take a prefix, with their factor to SI and dimension. Check against the SI brochure (BIPM, 9th edition, 2019), tables 2, 4, 7 and 8.
# VA and var are watts by dimension (IEC 80000-6); Wh and Ah are the trade's 3600 J and 3600 C.
_PREFIXABLE: dict[str, tuple[float, Dimension]] = {
    "V": (1.0, VOLTAGE),
    "A": (1.0, CURRENT),
    "ohm": (1.0, RESISTANCE),
    "S": (1.0, CONDUCTANCE),
    "F": (1.0, CAPACITANCE),
    "H": (1.0, INDUCTANCE),
    "W": (1.0, POWER),
    "VA": (1.0, POWER),
    "var": (1.0, POWER),
    "Wb": (1.0, FLUX),
    "T": (1.0, FLUX / LENGTH**2),
    "C": (1.0, CHARGE),
    "Ah": (3600.0, CHARGE),
    "J": (1.0, ENERGY),
    "Wh": (3600.0, ENERGY),
    "Hz": (1.0, RATE),
    "s": (1.0, TIME),
    "m": (1.0, LENGTH),
    "g": (1e-3, MASS),
    "N": (1.0, FORCE),
    "Pa": (1.0, FORCE / LENGTH**2),
    "K": (1.0, TEMPERATURE),
    "rad": (1.0, NONE),
}
_DEGREE = math.pi / 180
# Symbols that take none. `min` and `h` are here so that no prefix reading ("milli-in") can ever be tried for them.
_ALONE: dict[str, tuple[float, Dimension]] = {
    "min": (60.0, TIME),
    "h": (3600.0, TIME),
    "day": (86400.0, TIME),
    "deg": (_DEGREE, NONE),
    "rpm": (2 * math.pi / 60, RATE),
    "%": (0.01, NONE),
    "ppm": (1e-6, NONE),
}
_PREFIXES: dict[str, float] = {"p": 1e-12, "n": 1e-9, "u": 1e-6, "m": 1e-3, "k": 1e3, "M": 1e6, "G": 1e9, "T": 1e12}
_OTHER_SPELLINGS = {"\u00b5": "u", "\u03bc": "u", "\u03a9": "ohm", "\u2126": "ohm"}  # micro sign, Greek mu, Greek omega, ohm sign
DEGREES_CELSIUS = Unit("degC", 1.0, TEMPERATURE, offset=273.15)

_ANGULAR = frozenset({"rad", "deg", "rpm"})


def _symbol_table() -> dict[str, tuple[float, Dimension, str | None]]:
    table: dict[str, tuple[float, Dimension, str | None]] = {}
    for symbol, (factor, dimension) in _PREFIXABLE.items():
        spelling = "Hz" if symbol == "Hz" else "rad" if symbol in _ANGULAR else None
        for prefix, power in _PREFIXES.items():
            table[prefix + symbol] = (factor * power, dimension, spelling)
        table[symbol] = (factor, dimension, spelling)
    table["kg"] = (1.0, MASS, None)
    for symbol, (factor, dimension) in _ALONE.items():
        table[symbol] = (factor, dimension, "rad" if symbol in _ANGULAR else None)
    return table


_SYMBOLS = _symbol_table()

_WORD = r"[A-Za-z\u00b5\u03bc\u03a9\u2126%°]{1,20}"
_FACTOR = rf"{_WORD}(?:\^-?[0-9]+)?(?!\w)"
# A unit's outer shape: what follows a number without blanks inside. Which of its words are units is decided word by word.
UNIT_SHAPE = re.compile(rf"/?{_FACTOR}(?:[*/]{_FACTOR}){{0,15}}")
_PIECE = re.compile(rf"([*/]?)({_WORD})(?:\^(-?[0-9]+))?(?!\w)")


@dataclass(frozen=True, slots=True)
class UnitRun:
    """The longest run of known units at the start of a text.

    Args:
        unit: the unit, None where the text starts with no known symbol.
        length: characters it covers.
        star_after_slash: a `*` stands after a `/` before a known symbol, which the language leaves undefined.
        joined_degrees: degC is joined to something, which means nothing: an offset has no product.
    """

    unit: Unit | None
    length: int
    star_after_slash: bool = False
    joined_degrees: bool = False


NO_UNIT = UnitRun(None, 0)


def _known(word: str) -> tuple[float, Dimension, str | None] | None:
    found = _SYMBOLS.get(word)
    if found is None and not word.isascii():
        for other, plain in _OTHER_SPELLINGS.items():
            word = word.replace(other, plain)
        found = _SYMBOLS.get(word)
    return found


@lru_cache(maxsize=4096)
def unit_run(text: str) -> UnitRun:
    """Read the longest run of known unit symbols joined by `*`, `/`, `^` from the start of a text."""
    factor, dimension = 1.0, NONE
    spellings: set[str] = set()
    slash = star_after_slash = degrees = False
    count = end = 0
    while True:
        piece = _PIECE.match(text, end)
        if piece is None or (count == 0 and piece[1] == "*") or (count > 0 and not piece[1]):
            break
        known = (1.0, TEMPERATURE, None) if piece[2] == "degC" else _known(piece[2])
        if known is None:
            break
        exponent = int(piece[3] or 1)
        if abs(exponent) > 9:  # no unit of the trade; keeps 10^(huge) out of the arithmetic
            break
        degrees = degrees or piece[2] == "degC"
        if piece[1] == "/":
            slash, exponent = True, -exponent
        elif slash:
            star_after_slash = True
        factor *= known[0] ** exponent
        dimension = dimension * known[1] ** exponent
        if known[2] is not None:
            spellings.add(known[2])
        count += 1
        end = piece.end()
    if count == 0:
        return NO_UNIT
    symbol = text[:end]
    if symbol == "degC":
        return UnitRun(DEGREES_CELSIUS, end)
    spelling = next(iter(spellings)) if dimension == RATE and len(spellings) == 1 else None
    return UnitRun(Unit(symbol, factor, dimension, 0.0, spelling), end, star_after_slash, degrees)


def parse_unit(text: str) -> Unit | None:
    """Read a whole text as one unit: "mohm", "V/us", "kg*m^2", "/V"; "1/V" is "/V", "1" a plain number. None where it is not one."""
    text = text.strip()
    if text == "1":
        return Unit("1", 1.0, NONE)
    run = unit_run(text[1:] if text.startswith("1/") else text)
    covered = run.length + (1 if text.startswith("1/") else 0)
    if run.unit is None or covered != len(text) or run.star_after_slash or run.joined_degrees:
        return None
    return run.unit


def joined_symbols(unit: Unit) -> tuple[str, ...]:
    """The symbols of a unit that stand behind a `*` or `/`, and so might have been meant as names: "V/us" gives ("us",)."""
    return tuple(piece[2] for piece in _PIECE.finditer(unit.symbol) if piece[1])


# ---------------------------------------------------------------- reading and printing values

_VALUE = re.compile(r"\s*([+-]?)\s*([0-9]+(?:\.[0-9]+)?(?:[eE][+-]?[0-9]+)?)\s?(.*?)\s*\Z", re.DOTALL)


def read_value(text: str) -> tuple[float, Dimension] | None:
    """Read "200 uH", "-5 kW", "0.5", "20 %" as (value in SI, dimension); None where the text is no such value."""
    match = _VALUE.match(text)
    if match is None or len(text) > 200:
        return None
    sign = -1.0 if match[1] == "-" else 1.0
    unit = parse_unit(match[3]) if match[3] else None
    if unit is None and match[3]:
        return None
    number = sign * float(match[2])
    value = number if unit is None else unit.to_si(number)
    if not math.isfinite(value):
        return None
    return value, NONE if unit is None else unit.dimension


# The conventional name of each dimension that has one. A torque's N*m and an energy's J have the same dimension: see `prefer`.
_NAMES: dict[Dimension, str] = {
    NONE: "1",
    VOLTAGE: "V",
    CURRENT: "A",
    RESISTANCE: "ohm",
    CONDUCTANCE: "S",
    CAPACITANCE: "F",
    INDUCTANCE: "H",
    POWER: "W",
    TORQUE: "N*m",
    CHARGE: "C",
    FLUX: "Wb",
    RATE: "/s",
    TIME: "s",
    LENGTH: "m",
    MASS: "kg",
    FORCE: "N",
    TEMPERATURE: "K",
    SPEED: "m/s",
    FLUX / LENGTH**2: "T",
    FORCE / LENGTH**2: "Pa",
    MASS * LENGTH**2: "kg*m^2",
    TORQUE * TIME: "N*m*s",
    ENERGY / TEMPERATURE: "J/K",
    TEMPERATURE / POWER: "K/W",
    POWER / TEMPERATURE: "W/K",
    CURRENT**2 * TIME: "A^2*s",
    VOLTAGE / TIME: "V/s",
    CURRENT / TIME: "A/s",
    POWER / TIME: "W/s",
    LENGTH / TIME**2: "m/s^2",
    CONDUCTANCE / TIME: "A/V/s",
    RESISTANCE / TIME: "V/A/s",
}
_BLOCKS = ("V", "A", "W", "ohm", "J", "N", "kg", "K", "C", "Wb", "F", "H", "S", "m", "s")
_DIVISORS = ("s", "V", "A", "K", "W", "m", "ohm", "J", "N", "kg")


@lru_cache(maxsize=1024)
def unit_text(dimension: Dimension, *, prefer: str | None = None) -> str:
    """The conventional SI name of a dimension: "V", "ohm", "N*m", "V/s"; "1" for a plain number.

    Args:
        dimension: to name.
        prefer: a unit symbol to use where it fits the dimension with factor 1, such as "J", "Hz" or "rad/s".
    """
    if prefer is not None:
        wanted = parse_unit(prefer)
        if wanted is not None and wanted.dimension == dimension and wanted.factor == 1 and not wanted.offset:
            return prefer
    named = _NAMES.get(dimension)
    return named if named is not None else _composed(dimension)


def _composed(dimension: Dimension) -> str:
    """A quotient or product of two or three named units, else powers of the base units."""
    of = {symbol: _SYMBOLS[symbol][1] for symbol in _BLOCKS}
    for a in _DIVISORS:
        if of[a] ** -1 == dimension:
            return f"/{a}"
    for a in _BLOCKS:
        if of[a] ** 2 == dimension:
            return f"{a}^2"
    for a in ("V", "A", "K", "W", "ohm"):
        if (of[a] * TIME) ** -1 == dimension:
            return f"/{a}/s"
    for form in ("{a}/{b}", "{a}*{b}"):
        for a in _BLOCKS:
            for b in _DIVISORS:
                if (of[a] / of[b] if "/" in form else of[a] * of[b]) == dimension:
                    return form.format(a=a, b=b)
    for a in _DIVISORS:
        for b in _DIVISORS:
            if (of[a] * of[b]) ** -1 == dimension:
                return f"/{b}/{a}"
    for a in _BLOCKS:
        for b in _DIVISORS:
            for c in _DIVISORS:
                if of[a] / of[b] / of[c] == dimension:
                    return f"{a}/{c}/{b}"
    return _base_units(dimension)


def _base_units(dimension: Dimension) -> str:
    parts = zip(("kg", "m", "s", "A", "K"), dimension.exponents, strict=True)
    return "*".join(symbol if x == 1 else f"{symbol}^{x}" if isinstance(x, int) else f"{symbol}^({x})" for symbol, x in parts if x != 0)


_ENGINEERING = ((1e12, "T"), (1e9, "G"), (1e6, "M"), (1e3, "k"), (1.0, ""), (1e-3, "m"), (1e-6, "u"), (1e-9, "n"), (1e-12, "p"))
_NO_PREFIX = frozenset({"K", "kg", "1"})  # of these only the listed spelling is customary
_NO_LARGE_PREFIX = frozenset({"s"})  # 1800 s, not 1.8 ks


def format_value(value: float, dimension: Dimension, *, digits: int = 4, prefer: str | None = None) -> str:
    """A value in SI as people write it: "12.5 mohm", "180 uH", "20 kW", "0.25".

    Args:
        value: in SI.
        dimension: its dimension.
        digits: significant digits.
        prefer: see unit_text.
    """
    symbol = unit_text(dimension, prefer=prefer)
    if symbol == "1":
        return f"{value + 0.0:.{digits}g}"
    first = _PIECE.match(symbol)
    plain = first is None or first[1] == "/" or first[3] is not None or first[2] in _NO_PREFIX
    if plain or value == 0 or not math.isfinite(value):
        return f"{value + 0.0:.{digits}g} {symbol}"  # + 0.0 takes the sign from a zero
    rounded = float(f"{value:.{digits}g}")
    size = abs(rounded)
    scale, prefix = next((pair for pair in _ENGINEERING if size >= pair[0] * (1 - 1e-12)), _ENGINEERING[-1])
    if scale > 1 and first is not None and first[2] in _NO_LARGE_PREFIX:
        scale, prefix = 1.0, ""
    number = rounded / scale
    text = f"{number:.{digits}g}" if abs(number) >= 1000 or abs(number) < 1 else f"{number:.{max(digits, 3)}g}"
    if "e" in text and abs(number) < 10**6:
        text = f"{number:.0f}"
    return f"{text} {prefix}{symbol}"


# ---------------------------------------------------------------- near misses

# What people write for a unit of the table, in lower case.
_SPOKEN = {
    "ohms": "ohm", "volt": "V", "volts": "V", "amp": "A", "amps": "A", "ampere": "A", "amperes": "A", "watt": "W", "watts": "W", "farad": "F",
    "farads": "F", "henry": "H", "henries": "H", "hertz": "Hz", "sec": "s", "secs": "s", "second": "s", "seconds": "s", "msec": "ms", "usec": "us",
    "mins": "min", "minute": "min", "minutes": "min", "hr": "h", "hrs": "h", "hour": "h", "hours": "h", "days": "day", "kelvin": "K",
    "celsius": "degC", "°c": "degC", "°": "deg", "degree": "deg", "degrees": "deg", "nm": "N*m", "joule": "J", "joules": "J", "siemens": "S",
    "mho": "S", "weber": "Wb", "tesla": "T", "newton": "N", "percent": "%", "pct": "%", "r/min": "rpm", "mil": "mm", "cm": "mm",
    "mhos": "S", "coulomb": "C",
}  # fmt: skip


def nearest_unit(text: str) -> str | None:
    """The known unit that a misspelt one was most likely meant to be, or None."""
    lower = text.lower()
    if lower in _SPOKEN:
        return _SPOKEN[lower]
    same_letters = [symbol for symbol in _SYMBOLS if symbol.lower() == lower]
    if same_letters:
        return same_letters[0]
    if len(text) < 3:
        return None
    close = get_close_matches(text, _SYMBOLS, n=1, cutoff=0.7)
    return close[0] if close else None
