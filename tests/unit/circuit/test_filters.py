"""Filters, samples, delays, averages: what they become, and what is refused."""

import cmath
import math

import pytest

from polewise.circuit.dimensions import unit_text
from polewise.circuit.rational import VARIABLE, Rational, realise, realise_sampled

HEAD = "reference gnd\na --[1 ohm]-- gnd\na --[5 V]-- gnd\n"
INPUT = {"potential a": 1.0}


def response(circuit, value, name, s):
    """y/u of a filtered signal at a complex frequency, from its states' rates: they are linear, so unit steps of each give the matrices."""
    states = list(circuit.states)
    zero = {f"state {n}": 0.0 for n in states}
    at_rest = {"potential a": 0.0, **zero}
    n = len(states)
    a = [[value(circuit, circuit.states[r].rate, {**at_rest, f"state {c}": 1.0}) for c in states] for r in states]
    b = [value(circuit, circuit.states[r].rate, {**at_rest, "potential a": 1.0}) for r in states]
    c = [value(circuit, name, {**at_rest, f"state {k}": 1.0}) for k in states]
    d = value(circuit, name, {**at_rest, "potential a": 1.0})
    m = [[(s if j == k else 0) - a[j][k] for k in range(n)] + [b[j]] for j in range(n)]
    for k in range(n):  # Gauss-Jordan
        p = max(range(k, n), key=lambda r: abs(m[r][k]))
        m[k], m[p] = m[p], m[k]
        m[k] = [q / m[k][k] for q in m[k]]
        for r in range(n):
            if r != k:
                m[r] = [q - m[r][k] * w for q, w in zip(m[r], m[k], strict=True)]
    return d + sum(c[k] * m[k][n] for k in range(n))


@pytest.mark.parametrize(
    ("by", "formula"),
    [
        ("1 / (1 + s * 2 ms)", lambda s: 1 / (1 + s * 2e-3)),
        ("12 * (1 + s / wz) / s * 1 /s / (1 + s / wp)", lambda s: 12 * (1 + s / 300) / s / (1 + s / 90e3)),
        ("s / (1 + s * 1 us)", lambda s: s * 1 / (1 + s * 1e-6)),
        ("(1 + s * 2 ms) / (1 + s * 1 ms)", lambda s: (1 + s * 2e-3) / (1 + s * 1e-3)),
        ("wz^2 / (s^2 + 0.1 * wz * s + wz^2)", lambda s: 300**2 / (s**2 + 30 * s + 300**2)),
        ("1 / (1 + s * 1 ms)^3", lambda s: 1 / (1 + s * 1e-3) ** 3),
        ("-wz / s", lambda s: -300 / s),
        ("(s + wz)^(-2) * wz^2", lambda s: 300**2 / (s + 300) ** 2),
        ("s^2 / (s^2 + wz^2) + 3", lambda s: s**2 / (s**2 + 300**2) + 3),
    ],
)
def test_a_filter_has_the_written_response(build, value, by, formula):
    circuit = build(f"{HEAD}given wz = 300 rad/s\ngiven wp = 90000 rad/s\nsignal y = a.v filtered by {by}\n")
    for w in (3.0, 250.0, 4e3, 8e5):
        s = complex(0.1 * w, w)
        assert response(circuit, value, "y", s) == pytest.approx(formula(s), rel=1e-9)


def test_units_of_filters(build):
    circuit = build(HEAD + "signal y = a.v filtered by 12 A/V * 300 rad/s / s\nsignal q = a.v filtered by 1 / s\n")
    assert unit_text(circuit.signals["y"].dimension) == "A"
    assert unit_text(circuit.signals["q"].dimension) == "Wb"
    assert list(circuit.states) == ["y#1", "q#1"]


def test_constants_pass_as_they_are(build, value):
    circuit = build(HEAD + "signal y = a.v filtered by 3\nsignal q = a.v filtered by s * 3 / s\n")
    assert value(circuit, "y", {"potential a": 2.0}) == value(circuit, "q", {"potential a": 2.0}) == 6.0
    assert not circuit.states


@pytest.mark.parametrize(
    ("words", "code", "marked"),
    [
        ("filtered by s", "filter-improper", "s"),
        ("filtered by s^2 * (1 ms)^2 / (1 + s * 1 ms)", "filter-improper", "s^2 * (1 ms)^2 / (1 + s * 1 ms)"),
        ("filtered by sin(s)", "filter-form", "sin(s)"),
        ("filtered by 1 / (1 + s)", "unit-mismatch", "1 + s"),
        ("filtered by 1 / (1 + s / 50 Hz)^0.5", "filter-form", "0.5"),
        ("filtered by 1 / (1 + s / 50 rad/s)^30", "filter-order", "1 / (1 + s / 50 rad/s)^30"),
        ("filtered by 1 / (s + 50 Hz)", "turn-missing", "s + 50 Hz"),
        ("filtered by a.v / 1 V / (1 + s * 1 ms)", "varying-value", "a.v / 1 V"),
        ("filtered by 1 / (s - s)", "division-by-zero", "s - s"),
        ("filtered by z^2 / (z - 0.5) in z at 40 kHz", "filter-improper", "z^2 / (z - 0.5)"),
        ("filtered by 1 / (z - 0.5) in z at 40 ms", "unit-expected", "40 ms"),
        ("sampled at 0 Hz", "frequency-not-positive", "0 Hz"),
        ("sampled at 40 kohm", "unit-expected", "40 kohm"),
        ("delayed by 5 V", "unit-expected", "5 V"),
        ("delayed by -5 us", "time-not-positive", "-5 us"),
        ("delayed by a.v * 1 s / 1 V", "varying-value", "a.v * 1 s / 1 V"),
        ("averaged over 0 s", "time-not-positive", "0 s"),
    ],
)
def test_wrong_words(check, words, code, marked):
    check(f"{HEAD}signal y = a.v {words}\n", [(code, marked)])


def run_samplers(circuit, inputs, steps):
    """Samplers' values after each of some instants: one block after the other, each from the values that stand."""
    g = circuit.graph
    names = [name for sampler in circuit.samplers for name, _ in sampler.updates]
    held = dict.fromkeys(names, 0.0)
    history = []

    def number(node, k):
        leaves = {}
        for leaf in g.symbols_under([node]):
            kind, name = g.symbols[leaf]
            if kind == "signal":
                leaves[leaf] = number(circuit.signals[name].expression, k)
            else:
                leaves[leaf] = held[name] if kind == "sampled" else inputs(k)
        return g.evaluate([node], leaves)[0]

    for k in range(steps):
        for sampler in circuit.samplers:
            new = {name: number(node, k) for name, node in sampler.updates}
            held.update(new)
        history.append(dict(held))
    return history


def test_a_filter_in_z_is_its_recursion(build):
    circuit = build(HEAD + "signal y = a.v filtered by (1 - 0.9*z^-1) / (1 - 0.5*z^-1 + 0.06*z^-2) in z at 40 kHz\n")
    (sampler,) = circuit.samplers
    assert sampler.period_s == 25e-6
    u = lambda k: math.sin(k + 1)
    got = [h["y#1"] for h in run_samplers(circuit, u, 12)]
    y = []
    for k in range(12):
        y.append(u(k) - (0.9 * u(k - 1) if k else 0) + (0.5 * y[k - 1] if k else 0) - (0.06 * y[k - 2] if k > 1 else 0))
    assert got == pytest.approx(y, rel=1e-12)


def test_a_loop_closes_through_a_filter_that_delays(build):
    circuit = build(HEAD + "signal y = (a.v - back) filtered by 0.5 * z^-1 / (1 - z^-1) in z at 40 kHz\nsignal back = y\n")
    u = lambda k: 1.0
    got = [h["y#1"] for h in run_samplers(circuit, u, 6)]
    y = [0.0]
    for _ in range(5):
        y.append(y[-1] + 0.5 * (1.0 - y[-1]))
    assert got == pytest.approx(y, rel=1e-12)


def test_samplers_stand_in_the_order_of_their_needs(build):
    circuit = build(HEAD + "signal x = (y + 1 V) sampled at 10 kHz\nsignal y = (a.v sampled at 10 kHz) * 2\n")
    assert [s.name for s in circuit.samplers] == ["y#1", "x#1"]
    assert run_samplers(circuit, lambda k: 3.0, 1)[0]["x#1"] == 7.0


def test_sampled_values_that_need_one_another(check):
    check(
        HEAD + "signal x = (y + 1 V) sampled at 10 kHz\nsignal y = (x * 2) sampled at 20 kHz\n",
        [("samplers-in-circle", "(y + 1 V) sampled at 10 kHz")],
    )
    check(HEAD + "signal x = (y + 1 V) sampled at 10 kHz\nsignal y = x * 2\n", [("samplers-in-circle", "(y + 1 V) sampled at 10 kHz")])


def test_delays_and_averages(build):
    circuit = build(HEAD + "signal x = a.v delayed by 25 us\nsignal y = 2 * (a.v averaged over 20 ms)\nsignal q = a.v delayed by 0 s\n")
    assert circuit.delays["x#1"].delay_s == 25e-6
    assert circuit.averages["y#1"].window_s == 20e-3
    assert circuit.graph.text(circuit.signals["y"].expression) == "(2.0 * averaged(y#1))"
    assert circuit.graph.text(circuit.signals["q"].expression) == "potential(a)"


def test_words_stand_left_to_right(build):
    circuit = build(HEAD + "signal x = a.v sampled at 40 kHz delayed by 5 us averaged over 1 ms\n")
    assert circuit.graph.text(circuit.averages["x#3"].expression) == "delayed(x#2)"
    assert circuit.graph.text(circuit.delays["x#2"].expression) == "sampled(x#1)"


def test_each_instance_has_its_own_memory(build):
    circuit = build(HEAD + "assembly f(a) {\n a --[1 ohm]-- b\n signal y = b.v filtered by 1 / (1 + s * 1 ms)\n}\nf1: f(gnd)\nf2: f(gnd)\n")
    assert list(circuit.states) == ["f1.y#1", "f2.y#1"]


# ---------------------------------------------------------------- arithmetic of rational functions


def at(h: Rational, s: complex) -> complex:
    """Value of a rational function."""
    return sum(c * s**k for k, c in enumerate(h.above)) / sum(c * s**k for k, c in enumerate(h.below))


def test_arithmetic():
    s = VARIABLE
    one = Rational.of(1.0)
    h = one.plus(s.times(Rational.of(3.0))).over(s).plus(s.raised(2), -1.0)
    for point in (0.3 + 1j, 2.0 - 5j):
        assert at(h, point) == pytest.approx((1 + 3 * point) / point - point**2)
    assert s.over(s).is_constant
    assert s.plus(s, -1.0).is_zero


@pytest.mark.parametrize("poles", [(1.0, 1e6), (0.0, 0.0, 50.0), (1e3 + 1e4j, 1e3 - 1e4j, 3.0)])
def test_realisation(poles):
    below = (1.0 + 0j,)
    for p in poles:
        below = tuple((below[k - 1] if k else 0) + (p * below[k] if k < len(below) else 0) for k in range(len(below) + 1))
    h = Rational((2.0, 3.0), tuple(c.real for c in below))
    form = realise(h)
    for w in (0.5, 2e3):
        s = 1j * w
        x1, n = 0.0, len(form.damping)
        # y = x1, solved from the last equation upwards: s*x_k = pace*(x_{k+1} - damping*x1 + drive)
        weight, constant = 0.0, 0.0
        for k in reversed(range(n)):
            weight, constant = form.pace / s * (weight - form.damping[k]), form.pace / s * (constant + form.drive[k])
        x1 = constant / (1.0 - weight)
        assert x1 + form.direct == pytest.approx(at(h, s), rel=1e-9)
        assert cmath.isfinite(x1)


def test_no_future():
    assert realise_sampled(Rational((0.0, 0.0, 1.0), (1.0, 1.0))) is None
