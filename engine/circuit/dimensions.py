"""What kind of value an expression has (a unit, a condition, a literal 0), how operations combine kinds, and how messages name them."""

from __future__ import annotations

from fractions import Fraction
from typing import Final, Literal

from polewise.grammar import units
from polewise.grammar.units import Dimension, Exponent, Unit

Sort = Literal["number", "condition", "zero", "unknown", "poison"]

# Exponents beyond this are a mistake, not physics; it also bounds the table of interned qualities.
EXPONENT_MAX: Final = 60


class Quality:
    """The kind of a value, interned: equal qualities are one object, so checks are identity tests.

    sort: "number"; "condition" for true/false; "zero" for a literal 0, which takes any unit; "unknown" while a state's unit is being
    found; "poison" for the value of something already reported.
    spelling: "Hz" or "rad" for rates that were written so. Products drop it, sums keep it.
    """

    __slots__ = ("_over", "_plus", "_times", "dimension", "is_number", "sort", "spelling")

    def __init__(self, sort: Sort, dimension: Dimension, spelling: str | None) -> None:
        self.sort: Sort = sort
        self.dimension = dimension
        self.spelling = spelling
        self.is_number = sort in ("number", "zero", "unknown")
        self._times: dict[Quality, Quality | None] = {}
        self._over: dict[Quality, Quality | None] = {}
        self._plus: dict[Quality, Quality | None] = {}

    def __repr__(self) -> str:
        return f"Quality({describe(self)})"

    def times(self, other: Quality) -> Quality | None:
        """Kind of a product; None where a condition is multiplied."""
        try:
            return self._times[other]
        except KeyError:
            result = self._times[other] = _multiplied(self, other, False)
            return result

    def over(self, other: Quality) -> Quality | None:
        """Kind of a quotient; None where a condition is divided."""
        try:
            return self._over[other]
        except KeyError:
            result = self._over[other] = _multiplied(self, other, True)
            return result

    def plus(self, other: Quality) -> Quality | None:
        """Kind of a sum, a difference, a choice between two; None where they do not go together (a condition goes with a condition)."""
        try:
            return self._plus[other]
        except KeyError:
            result = self._plus[other] = _joined(self, other)
            return result


CONDITION: Final = Quality("condition", units.NONE, None)
ZERO: Final = Quality("zero", units.NONE, None)
UNKNOWN: Final = Quality("unknown", units.NONE, None)
POISON: Final = Quality("poison", units.NONE, None)

_interned: dict[tuple[Dimension, str | None], Quality] = {}


def quality(dimension: Dimension, spelling: str | None = None) -> Quality:
    """The one quality of numbers with this dimension."""
    if spelling is not None and dimension != units.RATE:
        spelling = None
    key = (dimension, spelling)
    got = _interned.get(key)
    if got is None:
        got = _interned[key] = Quality("number", dimension, spelling)
    return got


def quality_of_unit(unit: Unit | None) -> Quality:
    """The quality of a number written with a unit."""
    return PLAIN if unit is None else quality(unit.dimension, unit.spelling)


PLAIN: Final = quality(units.NONE)
TIME: Final = quality(units.TIME)
RATE: Final = quality(units.RATE)
FREQUENCY: Final = quality(units.RATE, "Hz")
ANGULAR_RATE: Final = quality(units.RATE, "rad")
VOLTAGE: Final = quality(units.VOLTAGE)
CURRENT: Final = quality(units.CURRENT)
POWER: Final = quality(units.POWER)
FLUX: Final = quality(units.FLUX)
CHARGE: Final = quality(units.CHARGE)
TEMPERATURE: Final = quality(units.TEMPERATURE)


def _multiplied(a: Quality, b: Quality, divide: bool) -> Quality | None:
    for sort, result in (("poison", POISON), ("condition", None), ("unknown", UNKNOWN)):
        if sort in (a.sort, b.sort):
            return result
    product = a.dimension / b.dimension if divide else a.dimension * b.dimension
    return quality(product)


def _joined(a: Quality, b: Quality) -> Quality | None:
    if a.sort == "poison" or b.sort == "poison":
        return POISON
    if a.sort == "condition" or b.sort == "condition":
        return a if a is b else None
    if a.sort in ("zero", "unknown"):
        return b if not (a.sort == "unknown" and b.sort == "zero") else a
    if b.sort in ("zero", "unknown") or a is b:
        return a
    if a.dimension != b.dimension:
        return None
    if a.spelling is None or b.spelling is None:
        return quality(a.dimension)
    return None  # Hz against rad/s: a factor 2 pi is missing


def differ_by_turn(a: Quality, b: Quality) -> bool:
    """Whether two qualities differ only in Hz against rad/s."""
    return a.dimension == b.dimension and None not in (a.spelling, b.spelling) and a.spelling != b.spelling


def raised(base: Quality, exponent: float) -> Quality | None:
    """Kind of a power with a constant exponent; None where the exponent leaves the range of physics."""
    if base.sort == "poison":
        return POISON
    if base.sort == "unknown":
        return UNKNOWN
    if base.dimension.is_none:
        return PLAIN
    if exponent == int(exponent):
        power: int | Fraction = int(exponent)
    else:
        power = Fraction(exponent).limit_denominator(1000)
    if abs(float(power)) > EXPONENT_MAX:
        return None
    result = base.dimension**power
    return quality(result) if all(abs(float(k)) <= EXPONENT_MAX for k in result.exponents) else None


def settled(kind: Quality) -> Quality:
    """The quality a declared thing takes: a literal 0 or a unit that nothing tells becomes a plain number."""
    return PLAIN if kind.sort in ("zero", "unknown") else kind


# ---------------------------------------------------------------- words for messages

_NAMES: Final[dict[Dimension, tuple[str, str]]] = {
    units.TIME: ("a time", "s"),
    units.RATE: ("a rate", "1/s"),
    units.VOLTAGE: ("a voltage", "V"),
    units.CURRENT: ("a current", "A"),
    units.POWER: ("a power", "W"),
    units.RESISTANCE: ("a resistance", "ohm"),
    units.CONDUCTANCE: ("a conductance", "S"),
    units.INDUCTANCE: ("an inductance", "H"),
    units.CAPACITANCE: ("a capacitance", "F"),
    units.FLUX: ("a flux", "Wb"),
    units.CHARGE: ("a charge", "A*s"),
    units.ENERGY: ("an energy or a torque", "J or N*m"),
    units.TEMPERATURE: ("a temperature", "K"),
    units.LENGTH: ("a length", "m"),
    units.MASS: ("a mass", "kg"),
    units.FORCE: ("a force", "N"),
    units.SPEED: ("a speed", "m/s"),
    Dimension(kg=1, m=2): ("a moment of inertia", "kg*m^2"),
    units.ENERGY / units.TEMPERATURE: ("a heat capacity", "J/K"),
    units.POWER / units.TEMPERATURE: ("a thermal conductance", "W/K"),
    units.TEMPERATURE / units.POWER: ("a thermal resistance", "K/W"),
    units.TORQUE * units.TIME: ("a rotary damping", "N*m*s/rad"),
    units.FORCE / units.SPEED: ("a damping", "N*s/m"),
}


def unit_text(kind: Quality | Dimension) -> str:
    """A unit for a kind, "V/s", "1/s", "" for a plain number."""
    if isinstance(kind, Quality):
        if kind.spelling == "Hz":
            return "Hz"
        if kind.spelling == "rad":
            return "rad/s"
        dimension = kind.dimension
    else:
        dimension = kind
    if dimension.is_none:
        return ""
    known = _NAMES.get(dimension)
    return known[1] if known else _composed(dimension)


def _composed(dimension: Dimension) -> str:
    """A unit in V, A, s, m, K, which reads better among circuits than kg, m, s, A, K: kg = V*A*s^3/m^2."""
    kg, m, s, a, k = dimension.exponents
    parts: tuple[tuple[str, Exponent], ...] = (("V", kg), ("A", a + kg), ("s", s + 3 * kg), ("m", m - 2 * kg), ("K", k))
    above = [symbol if power == 1 else f"{symbol}^{power}" for symbol, power in parts if float(power) > 0]
    below = [symbol if power == -1 else f"{symbol}^{-1 * power}" for symbol, power in parts if float(power) < 0]
    return "/".join(["*".join(above) if above else "1", *below])


def describe(kind: Quality | Dimension) -> str:
    """A kind in words with its unit: "a voltage (V)", "a plain number", "a condition (true or false)"."""
    if isinstance(kind, Quality):
        if kind.sort == "condition":
            return "a condition (true or false)"
        if kind.spelling == "Hz":
            return "a frequency (Hz)"
        if kind.spelling == "rad":
            return "an angular speed (rad/s)"
        dimension = kind.dimension
    else:
        dimension = kind
    if dimension.is_none:
        return "a plain number"
    known = _NAMES.get(dimension)
    return f"{known[0]} ({known[1]})" if known else f"a value in {_composed(dimension)}"
