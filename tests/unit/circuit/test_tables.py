"""Tables: straight and smooth, how they go on, CSV columns, and what is wrong with them."""

from itertools import pairwise

import numpy as np
import pytest
from scipy.interpolate import PchipInterpolator

from polewise.circuit.expand import expand
from polewise.circuit.load import load_files, load_text
from polewise.circuit.tables import _smooth_slopes
from polewise.grammar import units

HEAD = "reference gnd\na --[1 ohm]-- gnd\na --[5 V]-- gnd\n"


def reader(build, value, table):
    """The table as a function of the potential of a."""
    circuit = build(f"{HEAD}{table}\nsignal y = f(a.v)\n")
    return lambda x: value(circuit, "y", {"potential a": x})


@pytest.mark.parametrize(
    ("words", "points"),
    [
        ("hold", {-5.0: 0.0, 1.0: 5.0, 2.5: 12.5, 4.0: 20.0, 9.0: 20.0}),
        ("extend", {-1.0: -5.0, 1.0: 5.0, 4.0: 20.0, 6.0: 40.0}),
        ("odd extend", {-4.0: -20.0, -1.0: -5.0, 6.0: 40.0, -6.0: -40.0}),
        ("odd hold", {-9.0: -20.0, 9.0: 20.0}),
        ("repeat", {1.0: 5.0, 5.0: 5.0, -3.0: 5.0, 4.0: 0.0}),
    ],
)
def test_straight_tables(build, value, words, points):
    f = reader(build, value, f"table f(x in V) in A = (0 V, 0 A) (2 V, 10 A) (4 V, 20 A) {words}".replace("(4 V, 20 A)", "(3 V, 10 A) (4 V, 20 A)"))
    expected = dict(points)
    expected.pop(2.5, None)
    for x, y in expected.items():
        assert f(x) == pytest.approx(y, abs=1e-12)
    assert f(2.5) == pytest.approx(10.0)


def test_smooth_tables_pass_the_points_and_never_overshoot(build, value):
    points = [(0.0, 0.0), (1.0, 0.1), (2.0, 5.0), (3.0, 5.0), (4.0, 4.9), (6.0, 5.5)]
    f = reader(build, value, "table f(x in V) = " + " ".join(f"({x} V, {y})" for x, y in points) + " smooth hold")
    for x, y in points:
        assert f(x) == pytest.approx(y, abs=1e-12)
    for (x0, y0), (x1, y1) in pairwise(points):
        between = [f(x0 + (x1 - x0) * k / 20) for k in range(21)]
        steps = np.diff(between) * np.sign(y1 - y0)
        assert (steps >= -1e-12).all()
        assert min(y0, y1) - 1e-12 <= min(between)
        assert max(between) <= max(y0, y1) + 1e-12


def test_smooth_slopes_lie_in_the_region_of_monotonicity():
    """Fritsch & Carlson 1980: slopes a, b over the secant with a^2 + b^2 <= 9 keep the cubic monotone; zero next to an extremum.

    Any monotone choice agrees with another one's shape to second order on smooth data; scipy's uses harmonic means instead.
    """
    rng = np.random.default_rng(7)
    x = np.cumsum(rng.uniform(0.1, 2.0, 40))
    y = rng.normal(size=40)
    slopes = _smooth_slopes(list(zip(x.tolist(), y.tolist())), periodic=False)
    secants = np.diff(y) / np.diff(x)
    for k, d in enumerate(secants):
        a, b = slopes[k] / d, slopes[k + 1] / d
        assert a >= 0.0
        assert b >= 0.0
        assert a * a + b * b <= 9.0 + 1e-9
    fine = np.linspace(0.0, 1.0, 101)
    curve = np.exp(fine)
    slopes = _smooth_slopes(list(zip(fine.tolist(), curve.tolist())), periodic=False)
    assert slopes[1:-1] == pytest.approx(curve[1:-1], rel=1e-4)
    assert PchipInterpolator(fine, curve).derivative()(fine[1:-1]) == pytest.approx(slopes[1:-1], rel=1e-4)


def test_smooth_and_periodic(build, value):
    f = reader(build, value, "table f(x in V) = (0 V, 0) (1 V, 1) (3 V, -1) (4 V, 0) smooth repeat")
    assert f(4.5) == pytest.approx(f(0.5), rel=1e-12)
    assert f(-0.5) == pytest.approx(f(3.5), rel=1e-12)
    step = 1e-6
    assert (f(4.0 + step) - f(4.0)) / step == pytest.approx((f(4.0) - f(4.0 - step)) / step, rel=1e-4)


def test_odd_and_smooth(build, value):
    f = reader(build, value, "table f(x in V) in Wb = (0 V, 0 Wb) (20 V, 4 mWb) (60 V, 6 mWb) smooth odd extend")
    for x in (5.0, 20.0, 40.0, 100.0):
        assert f(-x) == pytest.approx(-f(x), rel=1e-12)
    assert f(100.0) - f(60.0) == pytest.approx(40.0 / 10.0 * (f(70.0) - f(60.0)), rel=1e-9)


def test_units_come_from_the_points_or_from_the_head(build):
    tables = "table f(x) = (0 A, 0 Wb) (20 A, 4 mWb) hold\ntable g(n) in V = (1, 380 V) (2, 400 V)\n"
    circuit = build(HEAD + tables + "signal y = f(3 A)\ngiven k = g(2)\n")
    assert circuit.givens["k"].value == 400.0
    assert circuit.signals["y"].dimension == units.FLUX


@pytest.mark.parametrize(
    ("lines", "code", "marked"),
    [
        ("table f(x) = (0, 0)", "table-points", "f"),
        ("table f(x) = (0, 0) (2, 1) (1, 3)", "table-points", "1"),
        ("table f(x) = (0, 0) (2, 1) (2, 3)", "table-points", "2"),
        ("table f(x) = (-1, 0) (2, 1) odd", "table-odd", "-1"),
        ("table f(x) = (0, 3) (2, 1) odd", "table-odd", "0"),
        ("table f(x) = (1 V, 3) (2 A, 1)", "unit-expected", "2 A"),
        ("table f(x) = (1 V, 3) (2, 1)", "unit-expected", "2"),
        ("table f(x in V) = (1 V, 3) (2 A, 1)", "unit-expected", "2 A"),
        ("table f(x) in V = (1, 3) (2, 1 V)", "unit-expected", "3"),
        ("table f(x) = (time, 3) (2 s, 1)", "varying-value", "time"),
        ("table f(x) = (0, 0) (2, 1)\nsignal y = f(3)", "outside-table", "3"),
        ("table f(x) = (0, 0) (2, 1)\nsignal y = f(3 V)", "unit-expected", "3 V"),
        ("table f(x) = (0, 0) (2, 1)\nsignal y = f(1, 2)", "argument-count", "f(1, 2)"),
        ("table f(x) = (0, 0) (2, 1)\nsignal y = f", "not-a-value", "f"),
    ],
)
def test_wrong_tables(check, lines, code, marked):
    check(f"{HEAD}{lines}\n", [(code, marked)])


def test_outside_a_closed_table_is_told_at_once_for_constants(check):
    (found,) = check(HEAD + "table f(x in V) = (0, 0) (2 V, 1)\nsignal y = f(3 V)\n", [("outside-table", "3 V")])
    assert found.headline == "the table `f` goes from 0 to 2 V; this reads it at 3 V"


def test_columns_of_a_file(tmp_path, value):
    (tmp_path / "data").mkdir()
    (tmp_path / "data" / "day.csv").write_text("t_s, P_kW, note\n0, 1.5,a\n60,3,b\n\n120,6,c\n")
    netlist = tmp_path / "top.pole"
    netlist.write_text(HEAD + 'table load(t in min) in kW from "data/day.csv" columns "t_s", "P_kW" hold\nsignal y = load(time)\n')
    sources, first = load_files(netlist)
    circuit, second = expand(sources)
    assert (first, second) == ((), ())
    assert value(circuit, "y", {"time": 1800.0}) == pytest.approx(2250.0)


@pytest.mark.parametrize(
    ("content", "columns", "code"),
    [
        ("t,P\n0,1\n1,x\n", 'columns "t", "P"', "csv-number"),
        ("t,P\n0,1\n1\n", 'columns "t", "P"', "csv-number"),
        ("t,P\n0,1\n1,nan\n", 'columns "t", "P"', "csv-number"),
        ("t,P\n0,1\n1,2\n", 'columns "t", "Q"', "csv-column"),
        ("t,P,Q\n0,1,2\n1,2,3\n", "", "csv-column"),
        ("t,P\n0,1\n0,2\n", "", "table-points"),
        ("t,P\n", "", "csv-unreadable"),
        ("", "", "csv-unreadable"),
        (None, "", "file-not-found"),
    ],
)
def test_wrong_files(tmp_path, content, columns, code):
    if content is not None:
        (tmp_path / "day.csv").write_text(content)
    netlist = tmp_path / "top.pole"
    netlist.write_text(HEAD + f'table load(t in s) in kW from "day.csv" {columns} hold\nsignal y = load(time)\n')
    sources, first = load_files(netlist)
    circuit, second = expand(sources)
    assert circuit is None
    assert [d.code for d in (*first, *second)] == [code]


def test_a_text_reads_no_file():
    sources, first = load_text(HEAD + 'table load(t in s) in kW from "day.csv" hold\n')
    assert [d.code for d in first] == ["path-refused"]
    assert expand(sources)[0] is None
