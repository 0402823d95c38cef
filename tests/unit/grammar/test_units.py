"""The unit table, reading and printing of values. Factors: SI brochure (BIPM, 9th edition, 2019), tables 4, 7, 8."""

from __future__ import annotations

import math
import pickle

import pytest
from hypothesis import given
from hypothesis import strategies as st

from polewise.grammar import units as u
from polewise.grammar.units import Dimension, format_value, joined_symbols, nearest_unit, parse_unit, read_value, unit_run, unit_text


@pytest.mark.parametrize(
    ("text", "factor", "dimension"),
    [
        ("V", 1, u.VOLTAGE), ("mohm", 1e-3, u.RESISTANCE), ("kΩ", 1e3, u.RESISTANCE), ("k\u2126", 1e3, u.RESISTANCE), ("S", 1, u.CONDUCTANCE),
        ("uF", 1e-6, u.CAPACITANCE), ("µF", 1e-6, u.CAPACITANCE), ("μF", 1e-6, u.CAPACITANCE), ("nH", 1e-9, u.INDUCTANCE), ("MW", 1e6, u.POWER),
        ("kVA", 1e3, u.POWER), ("var", 1, u.POWER), ("mWb", 1e-3, u.FLUX), ("Ah", 3600, u.CHARGE), ("mAh", 3.6, u.CHARGE), ("kWh", 3.6e6, u.ENERGY),
        ("kHz", 1e3, u.RATE), ("ms", 1e-3, u.TIME), ("min", 60, u.TIME), ("h", 3600, u.TIME), ("day", 86400, u.TIME), ("m", 1, u.LENGTH),
        ("mm", 1e-3, u.LENGTH), ("km", 1e3, u.LENGTH), ("kg", 1, u.MASS), ("g", 1e-3, u.MASS), ("N", 1, u.FORCE), ("kPa", 1e3, u.FORCE / u.LENGTH**2),
        ("K", 1, u.TEMPERATURE), ("rad", 1, u.NONE), ("deg", math.pi / 180, u.NONE), ("%", 0.01, u.NONE), ("1", 1, u.NONE),
        ("rpm", 2 * math.pi / 60, u.RATE), ("V/us", 1e6, u.VOLTAGE / u.TIME), ("/V", 1, u.VOLTAGE**-1), ("/V/s", 1, (u.VOLTAGE * u.TIME) ** -1),
        ("1/s", 1, u.RATE), ("kg*m^2", 1, u.MASS * u.LENGTH**2), ("J/K", 1, u.ENERGY / u.TEMPERATURE), ("K/W", 1, u.TEMPERATURE / u.POWER),
        ("V*s/rad", 1, u.FLUX), ("A*s/rad", 1, u.CHARGE), ("N*m", 1, u.TORQUE), ("T", 1, u.FLUX / u.LENGTH**2), ("m^-2", 1, u.LENGTH**-2),
        ("A/V/s", 1, u.CURRENT / u.VOLTAGE / u.TIME),
    ],
)  # fmt: skip
def test_a_unit_of_the_trade(text: str, factor: float, dimension: Dimension) -> None:
    unit = parse_unit(text)
    assert unit is not None
    assert unit.factor == pytest.approx(factor, rel=1e-15)
    assert unit.dimension == dimension
    assert unit.symbol == ("/s" if text == "1/s" else text)


@pytest.mark.parametrize(
    "text", ["", "x", "mmin", "kday", "ohms", "volt", "V*x", "V * s", "V/s*m", "W/degC", "V^", "V^99", "kkV", "2 V", "/", "1/1", "V V"]
)
def test_what_is_no_unit(text: str) -> None:
    assert parse_unit(text) is None


def test_rates_remember_how_they_were_written() -> None:
    spelling = {text: parse_unit(text) for text in ("Hz", "kHz", "rad/s", "krad/s", "rpm", "deg/s", "/s", "V*s/rad", "rad")}
    assert {text: unit.spelling for text, unit in spelling.items() if unit is not None} == {
        "Hz": "Hz", "kHz": "Hz", "rad/s": "rad", "krad/s": "rad", "rpm": "rad", "deg/s": "rad", "/s": None, "V*s/rad": None, "rad": None,
    }  # fmt: skip


def test_degrees_have_their_offset_only_alone() -> None:
    degrees = parse_unit("degC")
    assert degrees is not None
    assert degrees.to_si(25.0) == 298.15
    assert unit_run("W/degC").joined_degrees


def test_the_longest_run_of_known_symbols_is_the_unit() -> None:
    def run(text: str) -> tuple[str | None, int]:
        found = unit_run(text)
        return (None if found.unit is None else found.unit.symbol), found.length

    assert run("V*x") == ("V", 1)
    assert run("V*s2") == ("V", 1)
    assert run("m^2*K)") == ("m^2*K", 5)
    assert run("/V/s * x") == ("/V/s", 4)
    assert run("x") == (None, 0)
    assert run("*V") == (None, 0)
    assert run("m2") == (None, 0)
    assert unit_run("V/s*m").star_after_slash


def test_decimal_factors_are_exact() -> None:
    for text, value in (("200 uH", 2e-4), ("12 mohm", 12e-3), ("470 uF", 470e-6), ("33 nF", 33e-9), ("5 ps", 5e-12), ("40 kHz", 4e4)):
        read = read_value(text)
        assert read is not None
        assert read[0] == value, text


def test_joined_symbols() -> None:
    def joined(text: str) -> tuple[str, ...]:
        unit = parse_unit(text)
        assert unit is not None
        return joined_symbols(unit)

    assert joined("V") == ()
    assert joined("V/us") == ("us",)
    assert joined("/V/s") == ("V", "s")
    assert joined("kg*m^2") == ("m",)


@pytest.mark.parametrize(
    ("text", "value", "dimension"),
    [
        ("0.5", 0.5, u.NONE), ("-5 kW", -5000, u.POWER), ("+3", 3, u.NONE), ("20 %", 0.2, u.NONE), ("20%", 0.2, u.NONE), ("1e-6", 1e-6, u.NONE),
        ("25 degC", 298.15, u.TEMPERATURE), (" 200 uH ", 2e-4, u.INDUCTANCE), ("5 /V/s", 5, (u.VOLTAGE * u.TIME) ** -1), ("- 3 V", -3, u.VOLTAGE),
    ],
)  # fmt: skip
def test_a_value_on_the_command_line(text: str, value: float, dimension: Dimension) -> None:
    assert read_value(text) == (pytest.approx(value, rel=1e-15), dimension)


@pytest.mark.parametrize("text", ["", "x", "true", ".5", "5.", "5 ohms", "1e999", "3 V 4", "nan", "inf", "--3", "3  V*", "1" * 500])
def test_what_is_no_value(text: str) -> None:
    assert read_value(text) is None


@pytest.mark.parametrize(
    ("dimension", "text"),
    [
        (u.NONE, "1"), (u.VOLTAGE, "V"), (u.RESISTANCE, "ohm"), (u.TORQUE, "N*m"), (u.RATE, "/s"), (u.VOLTAGE / u.TIME, "V/s"), (u.VOLTAGE**-1, "/V"),
        ((u.VOLTAGE * u.TIME) ** -1, "/V/s"), (u.MASS * u.LENGTH**2, "kg*m^2"), (u.TEMPERATURE / u.POWER, "K/W"),
        (u.CURRENT / u.VOLTAGE / u.TIME, "A/V/s"),
        (u.VOLTAGE**2, "V^2"), (Dimension(kg=3), "kg^3"),
    ],
)  # fmt: skip
def test_the_conventional_name_of_a_dimension(dimension: Dimension, text: str) -> None:
    assert unit_text(dimension) == text


def test_a_preferred_name_is_used_where_it_fits() -> None:
    assert unit_text(u.ENERGY, prefer="J") == "J"
    assert unit_text(u.RATE, prefer="Hz") == "Hz"
    assert unit_text(u.VOLTAGE, prefer="J") == "V"
    assert unit_text(u.VOLTAGE, prefer="kV") == "V"


exponents = st.integers(-3, 3)


@given(st.builds(Dimension, exponents, exponents, exponents, exponents, exponents))
def test_every_name_reads_back_as_its_dimension(dimension: Dimension) -> None:
    unit = parse_unit(unit_text(dimension))
    assert unit is not None
    assert unit.dimension == dimension
    assert unit.factor == 1


@pytest.mark.parametrize(
    ("value", "dimension", "text"),
    [
        (0.0125, u.RESISTANCE, "12.5 mohm"), (180e-6, u.INDUCTANCE, "180 uH"), (20e3, u.POWER, "20 kW"), (0.25, u.NONE, "0.25"),
        (0.0, u.VOLTAGE, "0 V"),
        (999.96, u.VOLTAGE, "1 kV"), (760.25, u.VOLTAGE, "760.2 V"), (-120.0, u.CURRENT, "-120 A"), (1800.0, u.TIME, "1800 s"),
        (2.5e-6, u.TIME, "2.5 us"),
        (298.15, u.TEMPERATURE, "298.1 K"), (5e6, u.VOLTAGE / u.TIME, "5 MV/s"), (0.6, u.VOLTAGE**-1, "0.6 /V"),
        (0.02, u.MASS * u.LENGTH**2, "0.02 kg*m^2"),
        (math.inf, u.VOLTAGE, "inf V"), (1e-15, u.CAPACITANCE, "0.001 pF"), (-0.0, u.CURRENT, "0 A"), (123456.0, u.TIME, "123500 s"),
    ],
)  # fmt: skip
def test_a_value_as_people_write_it(value: float, dimension: Dimension, text: str) -> None:
    assert format_value(value, dimension) == text


@given(
    st.floats(1e-12, 1e12) | st.floats(-1e12, -1e-12),
    st.sampled_from((u.VOLTAGE, u.TIME, u.POWER, u.NONE, u.TEMPERATURE, u.VOLTAGE / u.TIME, u.RATE)),
)
def test_a_printed_value_reads_back(value: float, dimension: Dimension) -> None:
    read = read_value(format_value(value, dimension, digits=6))
    assert read is not None
    assert read[1] == dimension
    assert read[0] == pytest.approx(value, rel=1e-5)


@pytest.mark.parametrize(
    ("text", "nearest"),
    [
        ("khz", "kHz"),
        ("KHz", "kHz"),
        ("ohms", "ohm"),
        ("Nm", "N*m"),
        ("volts", "V"),
        ("kw", "kW"),
        ("mOhm", "mohm"),
        ("°C", "degC"),
        ("blurb", None),
        ("q", None),
    ],
)
def test_the_nearest_unit(text: str, nearest: str | None) -> None:
    assert nearest_unit(text) == nearest


def test_every_suggestion_is_a_unit() -> None:
    for suggestion in u._SPOKEN.values():
        assert parse_unit(suggestion) is not None, suggestion


def test_dimensions_multiply_and_pickle() -> None:
    assert u.VOLTAGE * u.CURRENT == u.POWER
    assert (u.VOLTAGE**2 / u.POWER) == u.RESISTANCE
    assert pickle.loads(pickle.dumps(u.VOLTAGE)) == u.VOLTAGE
