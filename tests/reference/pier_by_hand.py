"""The pier at Tern Point in service, written by hand as ordinary differential equations: nothing of the package is used.

States in order: shore current, bus capacitor; for each berth cable current, filter current, input capacitor, choke, output capacitor, soft-start
reference, two integrals, filtered choke current, plug cable current, boat capacitor; for each of the two service stages the first eight of these
without the bus cable; for each battery current, slow pair, two integrals, charge, filtered current; for each solar string capacitor, choke, two
integrals, filtered current.
Every diode pole is in continuous conduction and every controller off its limits, which `margins` checks.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

CLOSED = 1e-4  # a closed breaker, ohm
LEAK = 1e6  # a blocking diode, ohm


@dataclass(frozen=True)
class Stage:
    """A step-down stage; the defaults are a berth's."""

    setpoint: float
    l_filter: float = 15e-6
    r_damp: float = 0.25
    c_in: float = 1e-3
    esr_in: float = 0.025
    choke: float = 180e-6
    c_out: float = 1.2e-3
    kp_i: float = 0.00446
    ki_i: float = 10.5
    kp_v: float = 5.5
    ki_v: float = 1700.0
    slew: float = 4000.0
    filter_hz: float = 5000.0


PLATES = (380.0, 400.0, 360.0, 380.0, 400.0, 380.0)
EVENING = (60e3, 20e3, 60e3, 45e3, 60e3, 30e3)
BERTHS = tuple(Stage(v) for v in PLATES)
LIGHTS = Stage(110.0, choke=150e-6, c_out=2.2e-3, kp_i=0.0037, ki_i=8.8, kp_v=4.2, ki_v=980.0)
PUMPS = Stage(400.0, choke=400e-6, c_out=470e-6, kp_i=0.0099, ki_i=23.0, kp_v=0.89, ki_v=210.0)
STATES = 2 + 6 * 11 + 2 * 8 + 2 * 6 + 3 * 5
BATTERY_AT = 2 + 66 + 16


class Curve:
    """Monotone cubic through points (Fritsch & Carlson 1980), slopes the means of the secants beside them, held inside a circle of radius 3."""

    def __init__(self, xs: tuple[float, ...], ys: tuple[float, ...]) -> None:
        self.x, self.y = np.array(xs), np.array(ys)
        secant = np.diff(self.y) / np.diff(self.x)
        slope = np.concatenate([secant[:1], 0.5 * (secant[1:] + secant[:-1]), secant[-1:]])
        for k in range(len(secant)):
            size = float(np.hypot(slope[k], slope[k + 1]) / secant[k])
            if size > 3.0:
                slope[k : k + 2] *= 3.0 / size
        self.slope = slope

    def at(self, x: float) -> tuple[float, float]:
        """Value and slope (Hermite form)."""
        k = int(np.clip(np.searchsorted(self.x, x) - 1, 0, len(self.x) - 2))
        h = self.x[k + 1] - self.x[k]
        u = (x - self.x[k]) / h
        y0, y1, m0, m1 = self.y[k], self.y[k + 1], h * self.slope[k], h * self.slope[k + 1]
        value = y0 * (1 + 2 * u) * (1 - u) ** 2 + m0 * u * (1 - u) ** 2 + y1 * u * u * (3 - 2 * u) + m1 * u * u * (u - 1)
        rate = 6 * u * (1 - u) * (y1 - y0) + m0 * (1 - u) * (1 - 3 * u) + m1 * u * (3 * u - 2)
        return float(value), float(rate / h)


CELLS = Curve((0.0, 0.1, 0.3, 0.6, 0.9, 1.0), (540.0, 580.0, 602.0, 620.0, 640.0, 660.0))
KNEE = Curve((0.0, 250.0, 350.0, 400.0, 430.0, 450.0, 465.0, 480.0, 500.0), (0.0, 0.1, 0.5, 2.0, 6.8, 15.0, 28.0, 51.0, 114.0))


def load_node(v_cap: float, esr: float, current_in: float, power: float) -> float:
    """Potential of a node fed with a current, with a capacitor behind a resistance and a constant power: v = v_cap + esr*(i - P/v)."""
    b = v_cap + esr * current_in
    return 0.5 * (b + float(np.sqrt(b * b - 4.0 * esr * power)))


@dataclass
class Pier:
    """The right-hand side, with what events change."""

    demands: list[float] = field(default_factory=lambda: list(EVENING))
    sun: float = 0.8
    shore: float = 770.0

    def rates(self, _t: float, y: Array) -> Array:
        """dy/dt."""
        d = np.empty_like(y)
        v_bus = self._bus(y, d)
        del v_bus
        return d

    def bus(self, y: Array) -> float:
        """Potential of the bus."""
        return self._bus(y, np.empty_like(y))

    def _bus(self, y: Array, d: Array) -> float:
        """Solve the bus node's current balance (the bank's resistance, the controllers and the arrester all read its potential)."""
        v, v_before, g_before = float(y[1]), None, 0.0
        for _ in range(40):
            g = self._balance(y, v, d)
            if v_before is None:
                v_new = v + 1e-3
            elif g == g_before:
                break
            else:
                v_new = v - g * (v - v_before) / (g - g_before)
            if abs(v_new - v) < 1e-13 * abs(v):
                break
            v_before, g_before, v = v, g, v_new
        return v

    def _balance(self, y: Array, v: float, d: Array) -> float:
        """Current into the bus node at a trial potential; fills d on the way."""
        i_shore, v_bank = y[0], y[1]
        diode = (i_shore + 0.8 / 1e-3) / (1.0 / 1e-3 + 1.0 / LEAK)
        d[0] = (self.shore - v - (CLOSED + 0.020) * i_shore - diode) / 40e-6
        pre = (self.shore - v - 0.8) / (1e6 + 10.0 + 1e-3)  # through the open pre-charge breaker
        i_bank = (v - v_bank) / 0.003
        d[1] = i_bank / 6.6e-3
        total = i_shore + pre - i_bank - (v / 900.0) ** 25
        k = 2
        for stage, power in zip(BERTHS, self.demands, strict=True):
            total -= self._berth(stage, power, y[k : k + 11], v, d[k : k + 11])
            k += 11
        for stage, power in ((LIGHTS, 8e3), (PUMPS, 12e3)):
            total -= self._service(stage, power, y[k : k + 8], v, d[k : k + 8])
            k += 8
        for _ in range(2):
            total += self._battery(y[k : k + 6], v, d[k : k + 6])
            k += 6
        for _ in range(3):
            total += self._roof(y[k : k + 5], v, d[k : k + 5])
            k += 5
        return float(total)

    @staticmethod
    def _converter(stage: Stage, y: Array, d: Array, out: float) -> float:
        """Controllers; returns the duty. y: filter current, input capacitor, choke, output capacitor, reference, two integrals, filtered current."""
        d[4] = min(max((stage.setpoint - y[4]) / 10e-3, -stage.slew), stage.slew)
        error_v = y[4] - out
        error_i = stage.kp_v * error_v + y[5] - y[7]
        d[5] = stage.ki_v * error_v
        d[6] = stage.ki_i * error_i
        d[7] = 2.0 * np.pi * stage.filter_hz * (y[2] - y[7])
        return float(stage.kp_i * error_i + y[6])

    @staticmethod
    def _power_stage(stage: Stage, duty: float, front: float, out: float, y: Array, d: Array) -> None:
        i = y[2]
        mid = duty * (front - 0.004 * i) - (1.0 - duty) * (0.9 + 0.0015 * i)
        d[2] = (mid - 0.003 * i - out) / stage.choke

    def _berth(self, stage: Stage, power: float, y: Array, v: float, d: Array) -> float:
        i_tap, i_filter, v_in, i_choke, v_out = y[0], y[1], y[2], y[3], y[4]
        i_plug, v_boat = y[9], y[10]
        out = v_out + 0.002 * (i_choke - i_plug)
        plug = load_node(v_boat, 0.020, i_plug, power)
        duty = self._converter(stage, y[1:9], d[1:9], out)
        feed = v
        for _ in range(4):  # the feeder's end leaks through the 1 Mohm of the fault that is not there
            arrives = i_tap - feed / 1e6
            front = (v_in + stage.esr_in * (arrives - duty * i_choke)) / (1.0 + stage.esr_in / LEAK)
            feed = front + stage.r_damp * (arrives - i_filter)
        d[0] = (v - (CLOSED + 0.004) * i_tap - feed) / 20e-6
        d[1] = (feed - front) / stage.l_filter
        d[2] = (front - v_in) / stage.esr_in / stage.c_in
        self._power_stage(stage, duty, front, out, y[1:9], d[1:9])
        d[4] = (i_choke - i_plug) / stage.c_out
        d[9] = (out - 0.012 * i_plug - plug) / 4e-6
        d[10] = (plug - v_boat) / 0.020 / 1e-3
        return float(i_tap)

    def _service(self, stage: Stage, power: float, y: Array, v: float, d: Array) -> float:
        i_filter, v_in, i_choke, v_out = y[0], y[1], y[2], y[3]
        out = load_node(v_out, 0.002, i_choke, power)
        duty = self._converter(stage, y, d, out)
        front = (v_in + stage.esr_in * (i_filter + v / stage.r_damp - duty * i_choke)) / (1.0 + stage.esr_in / stage.r_damp + stage.esr_in / LEAK)
        d[0] = (v - front) / stage.l_filter
        d[1] = (front - v_in) / stage.esr_in / stage.c_in
        self._power_stage(stage, duty, front, out, y, d)
        d[3] = (out - v_out) / 0.002 / stage.c_out
        return float(i_filter + (v - front) / stage.r_damp)

    def _battery(self, y: Array, v: float, d: Array) -> float:
        i, v_pair, q_v, q_i, charge, seen = y
        error_v = 760.0 - 0.05 * i - v
        error_i = 6.0 * error_v + q_v - seen
        cells = CELLS.at(charge)[0]
        lower = 1.0 - cells / v + 0.0015 * error_i + q_i
        mid = (1.0 - lower) * (v + 0.003 * i) + lower * 0.003 * i
        d[0] = (cells - v_pair - (CLOSED + 0.018 + 0.002) * i - mid) / 150e-6
        d[1] = (i - v_pair / 0.008) / 2500.0
        d[2] = 300.0 * error_v
        d[3] = 1.4 * error_i
        d[4] = -i / (94.0 * 3600.0)
        d[5] = 2.0 * np.pi * 2500.0 * (i - seen)
        return float((1.0 - lower) * i)

    def _roof(self, y: Array, v: float, d: Array) -> float:
        v_cap, i, q_v, q_i, seen = y
        pv = v_cap
        for _ in range(30):  # Newton on the node's current balance; the string lies behind its closed breaker
            current = (pv - v_cap) / 0.010 + i
            taken, slope = KNEE.at(pv + CLOSED * current)
            g = current + taken - self.sun * 53.0
            pv -= g / (100.0 + slope)
            if abs(g) < 1e-11:
                break
        error_v = pv - 400.0
        error_i = 0.63 * error_v + q_v - seen
        duty = 0.005 * error_i + q_i
        mid = (1.0 - duty) * (v + 1.1 + 0.004 * i) + duty * 0.012 * i
        d[0] = (pv - v_cap) / 0.010 / 500e-6
        d[1] = (pv - 0.008 * i - mid) / 400e-6
        d[2] = 130.0 * error_v
        d[3] = 5.8 * error_i
        d[4] = 2.0 * np.pi * 3750.0 * (i - seen)
        return float((1.0 - duty) * i)


def first_guess() -> Array:
    """Near the state of rest."""
    y = [370.0, 761.4]
    for stage, power in zip(BERTHS, EVENING, strict=True):
        v, i = stage.setpoint, power / stage.setpoint
        y += [i * v / 750, i * v / 750, 758.0, i, v, v, i, v / 755, i, i, v - 1.0]
    y += [11.0, 760.0, 73.0, 110.0, 110.0, 73.0, 0.147, 73.0, 16.0, 760.0, 30.0, 400.0, 400.0, 30.0, 0.53, 30.0]
    y += [-25.0, -0.2, -25.0, 0.0, 0.6, -25.0] * 2
    y += [400.0, 41.0, 41.0, 0.475, 41.0] * 3
    return np.array(y)


def at_rest(pier: Pier) -> Array:
    """The state of rest with the batteries' charge held, by Newton with a difference quotient."""
    y = first_guess()
    held = [BATTERY_AT + 4, BATTERY_AT + 10]
    free = [k for k in range(STATES) if k not in held]
    for _ in range(50):
        f = pier.rates(0.0, y)[free]
        jacobian = np.empty((len(free), len(free)))
        for column, k in enumerate(free):
            h = 1e-6 * max(1.0, abs(y[k]))
            up, down = y.copy(), y.copy()
            up[k] += h
            down[k] -= h
            jacobian[:, column] = (pier.rates(0.0, up)[free] - pier.rates(0.0, down)[free]) / (2.0 * h)
        step = np.linalg.solve(jacobian, f)
        y[free] -= step
        if np.max(np.abs(step) / np.maximum(1.0, np.abs(y[free]))) < 1e-13:
            return y
    raise AssertionError("the hand-written pier finds no rest")
