"""Small-signal answers of the basic converters against transfer functions derived here by hand and against published formulas and figures.

EM is Erickson & Maksimović, Fundamentals of Power Electronics, 2nd ed. 2001. By hand: the averaged equations of each converter with all
conduction losses (continuous), and the full-order, charge-corrected ones (discontinuous; Sun, Mitchell, Greuel, Krein & Bass, IEEE TPE 16(4),
2001), differentiated on paper.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
import pytest

import polewise

from .converters import TOPOLOGIES, Stage

FREQUENCIES = np.geomspace(10.0, 50e3, 61)


@dataclass(frozen=True)
class Hand:
    """x = (i, v), u = (duty, vg, current into the output); y = (v, input current)."""

    a: np.ndarray
    b: np.ndarray
    c: np.ndarray
    d: np.ndarray

    def at(self, f: float) -> np.ndarray:
        """Shape (2, 3)."""
        return self.c @ np.linalg.solve(2j * math.pi * f * np.eye(2) - self.a, self.b) + self.d


def continuous(topology: str, s: Stage) -> Hand:
    """All conduction losses."""
    d, r, r_on, r_d, v_d, dd = s.d, s.r, s.r_on, s.r_d, s.v_d, 1.0 - s.d
    loss = s.r1 + d * r_on + dd * r_d
    if topology == "step-down":
        v = (d * s.vg - dd * v_d) / (1 + loss / r)
        i = v / r
        a = [[-loss / s.l, -1 / s.l], [1 / s.c, -1 / (r * s.c)]]
        b = [[(s.vg - r_on * i + v_d + r_d * i) / s.l, d / s.l, 0], [0, 0, 1 / s.c]]
        c, e = [[0, 1], [d, 0]], [[0, 0, 0], [i, 0, 0]]
    elif topology == "step-up":
        v = (s.vg / dd - v_d) / (1 + loss / (dd * dd * r))
        i = v / (dd * r)
        a = [[-loss / s.l, -dd / s.l], [dd / s.c, -1 / (r * s.c)]]
        b = [[(v + v_d + r_d * i - r_on * i) / s.l, 1 / s.l, 0], [-i / s.c, 0, 1 / s.c]]
        c, e = [[0, 1], [1, 0]], [[0, 0, 0], [0, 0, 0]]
    else:
        v = (s.vg * d / dd - v_d) / (1 + loss / (dd * dd * r))
        i = v / (dd * r)
        a = [[-loss / s.l, -dd / s.l], [dd / s.c, -1 / (r * s.c)]]
        b = [[(s.vg - r_on * i + v + v_d + r_d * i) / s.l, d / s.l, 0], [-i / s.c, 0, 1 / s.c]]
        c, e = [[0, 1], [d, 0]], [[0, 0, 0], [i, 0, 0]]
    return Hand(*(np.array(m, dtype=float) for m in (a, b, c, e)))


def discontinuous(topology: str, s: Stage) -> Hand:
    """Lossless. delta: the part of a period in which the choke conducts."""
    d, r, k = s.d, s.r, 2 * s.l * s.f / s.r
    two = 2 * s.l * s.f
    if topology == "step-down":
        v = s.vg * 2 / (1 + math.sqrt(1 + 4 * k / d**2))
        i, reach = v / r, s.vg - v
        delta = two * i / (d * reach)
        # L i' = d vg - delta v, C v' = i - v/R, input d^2 (vg - v)/(2 L f)
        a = [[-delta / i * v / s.l, -(delta + v * delta / reach) / s.l], [1 / s.c, -1 / (r * s.c)]]
        b = [[(s.vg + v * delta / d) / s.l, (d + v * delta / reach) / s.l, 0], [0, 0, 1 / s.c]]
        c = [[0, 1], [0, -(d**2) / two]]
        e = [[0, 0, 0], [2 * d * reach / two, d**2 / two, 0]]
        return Hand(*(np.array(m, dtype=float) for m in (a, b, c, e)))
    v = s.vg * (1 + math.sqrt(1 + 4 * d**2 / k)) / 2 if topology == "step-up" else s.vg * d / math.sqrt(k)
    i = v / r + d**2 * s.vg / two
    delta = two * i / (d * s.vg)
    out = [[1 / s.c, -1 / (r * s.c)], [-2 * d * s.vg / two / s.c, -(d**2) / two / s.c, 1 / s.c]]
    if topology == "step-up":
        # L i' = delta vg - (delta - d) v, C v' = i - d^2 vg/(2 L f) - v/R, input i
        a = [[delta / i * (s.vg - v) / s.l, -(delta - d) / s.l], out[0]]
        b = [[(v - delta / d * (s.vg - v)) / s.l, (delta - delta / s.vg * (s.vg - v)) / s.l, 0], out[1]]
        c, e = [[0, 1], [1, 0]], [[0, 0, 0], [0, 0, 0]]
    else:
        # L i' = d vg - (delta - d) v, C v' the same, input d^2 vg/(2 L f)
        a = [[-delta / i * v / s.l, -(delta - d) / s.l], out[0]]
        b = [[(s.vg + v + delta / d * v) / s.l, (d + delta / s.vg * v) / s.l, 0], out[1]]
        c, e = [[0, 1], [0, 0]], [[0, 0, 0], [2 * d * s.vg / two, d**2 / two, 0]]
    return Hand(*(np.array(m, dtype=float) for m in (a, b, c, e)))


CONTINUOUS = {
    "step-down": Stage(48.0, 0.5, 4.0, l=50e-6, c=500e-6, r1=0.05, r_on=0.03, r_d=0.01, v_d=0.7),
    "step-up": Stage(24.0, 0.5, 20.0, l=100e-6, c=220e-6, r1=0.05, r_on=0.03, r_d=0.02, v_d=0.8),
    "inverting": Stage(30.0, 0.6, 10.0, l=160e-6, c=160e-6, r1=0.1, r_on=0.05, r_d=0.03, v_d=0.7),
}
DISCONTINUOUS = {
    "step-down": Stage(48.0, 0.3, 10.0, l=10e-6, c=220e-6),
    "step-up": Stage(24.0, 0.25, 12.0, l=5e-6, c=470e-6),
    "inverting": Stage(24.0, 0.4, 20.0, l=8e-6, c=470e-6),
}
CASES = [
    *((continuous, topology, stage) for topology, stage in CONTINUOUS.items()),
    *((discontinuous, topology, stage) for topology, stage in DISCONTINUOUS.items()),
]


@pytest.mark.parametrize(("by_hand", "topology", "stage"), CASES, ids=[f"{c[0].__name__} {c[1]}" for c in CASES])
def test_converter_equals_its_transfer_functions_by_hand(by_hand, topology: str, stage: Stage) -> None:
    system = polewise.from_text(TOPOLOGIES[topology](stage))
    hand = np.array([by_hand(topology, stage).at(f) for f in FREQUENCIES])
    got = system.response(["v_out", "supply.i"], ["leg.duty", "supply.v"], FREQUENCIES)
    assert got[:, 0, 0] == pytest.approx(hand[:, 0, 0], rel=1e-9)  # control to output
    assert got[:, 0, 1] == pytest.approx(hand[:, 0, 1], rel=1e-9)  # line to output
    assert -1.0 / got[:, 1, 1] == pytest.approx(1.0 / hand[:, 1, 1], rel=1e-9)  # input impedance
    assert -got[:, 1, 0] == pytest.approx(hand[:, 1, 0], rel=1e-9)
    assert np.asarray(system.impedance("out", FREQUENCIES)) == pytest.approx(hand[:, 0, 2], rel=1e-9)  # output impedance


def lossless(topology: str, s: Stage) -> dict[str, float]:
    """EM table 8.2; the same follows from Middlebrook & Ćuk 1976 and Vorpérian 1990."""
    dd = 1.0 - s.d
    v = {"step-down": s.d * s.vg, "step-up": s.vg / dd, "inverting": s.vg * s.d / dd}[topology]
    share = 1.0 if topology == "step-down" else dd
    return {
        "g0": {"step-down": v / s.d, "step-up": v / dd, "inverting": v / (s.d * dd)}[topology],
        "l0": {"step-down": s.d, "step-up": 1 / dd, "inverting": s.d / dd}[topology],
        "w0": share / math.sqrt(s.l * s.c),
        "q": share * s.r * math.sqrt(s.c / s.l),
        "wz": {"step-down": math.inf, "step-up": dd**2 * s.r / s.l, "inverting": dd**2 * s.r / (s.d * s.l)}[topology],
        "le": s.l / share**2,
    }


@pytest.mark.parametrize("topology", list(CONTINUOUS))
def test_lossless_converter_equals_the_published_formulas(topology: str) -> None:
    stage = replace(CONTINUOUS[topology], r1=0.0, r_on=0.0, r_d=0.0, v_d=0.0)
    k = lossless(topology, stage)
    s = 2j * math.pi * FREQUENCIES
    den = 1 + s / (k["q"] * k["w0"]) + (s / k["w0"]) ** 2
    system = polewise.from_text(TOPOLOGIES[topology](stage))
    got = system.response(["v_out"], ["leg.duty", "vin.v"], FREQUENCIES)
    assert got[:, 0, 0] == pytest.approx(k["g0"] * (1 - s / k["wz"]) / den, rel=1e-9)
    assert got[:, 0, 1] == pytest.approx(k["l0"] / den, rel=1e-9)
    assert np.asarray(system.impedance("out", FREQUENCIES)) == pytest.approx(s * k["le"] / den, rel=1e-9)


def test_inverting_worked_example() -> None:
    # EM 8.2.2: V -45 V, G_d0 187.5 V, f0 400 Hz (397.887), Q 4, right-half-plane zero 2.65 kHz; values of G_vd from the published formula.
    system = polewise.from_text(TOPOLOGIES["inverting"](Stage(30.0, 0.6, 10.0, l=160e-6, c=160e-6)))
    assert system.settled()["v_out"] == pytest.approx(45.0, rel=1e-9)
    got = -system.response("v_out", "leg.duty", [1e-3, 100.0, 1e3, 10e3])  # the example counts V < 0
    assert abs(got[0]) == pytest.approx(187.5, rel=1e-6)
    assert got[1:] == pytest.approx([-198.742053872 + 20.874460040j, 36.331097183 - 9.001770276j, 0.308446280 - 1.117759596j], abs=2e-9)
    mode = system.modes()[0]
    assert mode.natural_frequency_hz == pytest.approx(397.887, abs=5e-4)
    assert 0.5 / mode.damping == pytest.approx(4.0, rel=1e-9)


def test_step_up_figures() -> None:
    # From EM table 8.2 at 48 V, D 0.4, 16 ohm, 100 uH, 200 uF; input impedance at fixed duty.
    system = polewise.from_text(TOPOLOGIES["step-up"](Stage(48.0, 0.4, 16.0, l=100e-6, c=200e-6)))
    f = [100.0, 1e3, 5e3]
    g = system.response("v_out", "leg.duty", f)
    assert g == pytest.approx([136.289698716 - 3.007083757j, -111.919036542 + 1.957633667j, -2.490313231 + 1.325697410j], abs=2e-9)
    line = system.response("v_out", "vin.v", f)
    assert line == pytest.approx([1.703828521 - 0.019002661j, -1.385174906 - 0.126628722j, -0.030957838 - 0.000313664j], abs=2e-9)
    z = np.asarray(system.impedance("out", f))
    assert z == pytest.approx([0.001989954 + 0.178424505j, 0.132605287 - 1.450551770j, 0.001642340 - 0.162094862j], abs=2e-9)
    i = system.response("choke.i", "leg.duty", [100.0, 1e3, 10e3])
    assert i == pytest.approx([28.715534655 + 28.231209858j, -1.869402450 - 234.198761824j, -0.063322830 - 12.791030495j], abs=2e-8)
    z_in = -1.0 / system.response("supply.i", "vin.v", [100.0, 1e3])
    assert z_in == pytest.approx([1.142270151 - 2.233838557j, 0.014213133 + 0.342546536j], abs=2e-9)


def test_discontinuous_step_up_against_published_and_switched_figures() -> None:
    # EM 11.2 example: one-pole model 72 V, 112 Hz. Full-order poles and zero of this model, and the exactly switched converter's response to a
    # small sine on the duty with natural sampling: full order / exact at f/100 .. f/5 as magnitude ratio and phase difference.
    system = polewise.from_text(TOPOLOGIES["step-up"](DISCONTINUOUS["step-up"]))
    assert abs(system.response("v_out", "leg.duty", [1e-3])[0]) == pytest.approx(72.0, rel=1e-6)
    slow, fast = sorted(abs(v) / (2 * math.pi) for v in system.modes().eigenvalues)
    assert slow == pytest.approx(113.02641, abs=5e-6)
    assert fast == pytest.approx(63577.170, abs=5e-4)
    exact = {1e3: (8.0831149, -84.9054), 5e3: (1.6276950, -95.4581), 10e3: (0.8158620, -102.8372), 20e3: (0.4115115, -116.4846)}
    told = {1e3: (1.00032, 0.003), 5e3: (0.99737, 0.008), 10e3: (0.98832, 0.055), 20e3: (0.95476, 0.419)}
    got = system.response("v_out", "leg.duty", list(exact))
    for (f, (size, phase)), g in zip(exact.items(), got, strict=True):
        assert abs(g) / size == pytest.approx(told[f][0], abs=6e-6)
        assert math.degrees(np.angle(g)) - phase == pytest.approx(told[f][1], abs=6e-4)


@pytest.mark.parametrize(
    ("topology", "gain", "pole"), [("step-down", 52.655751, 212.14982), ("step-up", 72.0, 112.876), ("inverting", 84.852814, 33.862754)]
)
def test_discontinuous_one_pole_models(topology: str, gain: float, pole: float) -> None:
    # EM table 11.2: low-frequency gain, and the pole up to what the second one shifts (its ratio to the first).
    system = polewise.from_text(TOPOLOGIES[topology](DISCONTINUOUS[topology]))
    assert abs(system.response("v_out", "leg.duty", [1e-3])[0]) == pytest.approx(gain, rel=1e-6)
    slow, fast = sorted(abs(v) / (2 * math.pi) for v in system.modes().eigenvalues)
    assert slow == pytest.approx(pole, rel=2 * pole / fast)


def test_duty_read_once_a_period_lags_by_its_pulse() -> None:
    # Sawtooth latched at turn-on: the same magnitude, phase less by 360 deg D f_m/f (Maksimović & Zane, IEEE TPE 22(6), 2007): 19.2857 deg at f/10.
    stage = Stage(28.0, 15 / 28, 3.0, l=50e-6, c=500e-6)
    text = TOPOLOGIES["step-down"](stage)
    plain = polewise.from_text(text).response("v_out", "leg.duty", [10e3])[0]
    late = polewise.from_text(text.replace("rate =", "sampling = single, rate =")).response("v_out", "leg.duty", [10e3])[0]
    assert abs(late) == pytest.approx(abs(plain), rel=1e-12)
    assert math.degrees(np.angle(late / plain)) == pytest.approx(-19.2857, abs=5e-5)


def test_response_equals_a_small_sine_put_into_the_averaged_run() -> None:
    # A part in 10^4 on the duty of a lossy step-up, the last of several periods taken apart by a Fourier sum.
    stage = CONTINUOUS["step-up"]
    f, size = 2e3, 1e-4
    text = TOPOLOGIES["step-up"](stage).replace(
        "duty = 0.5", f"duty = 0.5 + {size} * sin(2*pi * {f} Hz * (time - begin) if time > begin otherwise 0)"
    )
    text += "\ngiven begin = 0 s\nstudy wave {\n start cold\n run for 40 ms\n keep v_out\n}\n"
    point = polewise.from_text(TOPOLOGIES["step-up"](stage)).settled()
    text = text.replace("F]-- gnd", f"F initially {point['store.c.v']!r} V]-- gnd").replace("H]-- x", f"H initially {point['choke.i']!r} A]-- x")
    end = 40e-3
    times = np.linspace(end - 4 / f, end, 4 * 64, endpoint=False)
    result = polewise.from_text(text).run("wave", tolerance=1e-10, at=[float(t) for t in times])
    values = np.interp(times, result.time, result["v_out"])
    measured = 2 * np.mean(values * np.exp(-2j * np.pi * f * times)) / (size * np.exp(-0.5j * np.pi))
    expected = polewise.from_text(TOPOLOGIES["step-up"](stage)).response("v_out", "leg.duty", [f])[0]
    assert measured == pytest.approx(expected, rel=2e-5)
