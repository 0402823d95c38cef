"""Values of results as text in the unit a reader expects: the one the requirement itself is written in, where the dimension has several."""

from __future__ import annotations

import math
import re
from typing import Final

from polewise.grammar.units import TEMPERATURE, Dimension, format_value, parse_unit, unit_run

_NUMBER: Final = re.compile(r"(?<![A-Za-z_.\d])\d+(?:\.\d+)?(?:[eE][+-]?\d+)?[ ]?")
_DEGREES: Final = "degC"
_ANGLE: Final = "deg"
_ICE_POINT_K: Final = 273.15  # 0 degC, SI brochure 9th ed., 2.3.1


def preferred_unit(text: str, dimension: Dimension) -> str | None:
    """The SI unit in which a text writes values of a dimension: "J" where it says "250 J" or "2 kJ", "rad/s", "degC"; None where it says none."""
    for number in _NUMBER.finditer(text):
        run = unit_run(text[number.end() :])
        if run.unit is None or run.unit.dimension != dimension:
            continue
        symbol = run.unit.symbol
        if symbol in (_DEGREES, _ANGLE):
            return symbol
        for candidate in (symbol, symbol[1:]):  # the second without its prefix
            unit = parse_unit(candidate) if candidate else None
            if unit is not None and unit.dimension == dimension and unit.factor == 1.0 and not unit.offset:
                return candidate
    return None


def value_text(value: float, dimension: Dimension, *, prefer: str | None = None, digits: int = 4) -> str:
    """A value as text; `prefer` from preferred_unit."""
    if prefer == _DEGREES:
        return f"{value - _ICE_POINT_K:.{digits}g} degC"
    if prefer == _ANGLE:
        return f"{math.degrees(value):.{digits}g} deg"
    return format_value(value, dimension, digits=digits, prefer=prefer)


def difference_text(value: float, dimension: Dimension, *, prefer: str | None = None, digits: int = 4) -> str:
    """A difference of two values as text: in K where the values are in degC."""
    if prefer == _ANGLE:
        return f"{math.degrees(value):.{digits}g} deg"
    return format_value(value, dimension, digits=digits, prefer="K" if dimension == TEMPERATURE else prefer)
