"""Controlled converters on one bus, twice: as a netlist, and as equations written out by hand from docs/models.md.

An invented charging hall: N step-down stages (transistor and diode, 40 kHz) with cascaded current and voltage control hang on a bus behind
cables; the bus has a feeder and a capacitor bank with series resistance; each stage feeds a constant-power load. Values differ from stage
to stage by sines of its number, so that no two are alike and any N is defined; about a fifth of the loads are light enough for
discontinuous conduction. At 20 ms the load of stage 2 steps up.

The hand-written form is what a patient engineer derives: every algebraic unknown is eliminated on paper (bus voltage by the bank's series
resistance, output voltage by a quadratic), leaving 6 N + 2 ordinary differential equations.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field, fields

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

STEP_TIME_S = 20e-3
END_TIME_S = 50e-3
STEPPED = 2  # number of the stage whose load steps
STEPPED_POWER_W = 60e3
RATE_HZ = 40e3

_CIRCUIT = """\
title "Charging hall, {count} controlled step-down stages on one bus"
reference rail_n

supply: src --[770 V]-- rail_n
feeder: src --[r: {feeder_r!r} ohm]--[l: {feeder_l!r} H]-- bus
bank:   bus --[esr: {bank_esr!r} ohm]--[c: {bank_c!r} F initially 760 V]-- rail_n

assembly stage(inp, inn, out) "step-down stage: cable, input capacitor, pole, choke, output capacitor, cascaded control" {{
    given setpoint = 380 V
    given L = 180 uH
    given c_out = 2.2 mF
    given i_max = 260 A
    given kp_v = 5.5 A/V
    given ki_v = 1700 A/V/s
    given kp_i = 0.0045 /A
    given ki_i = 10 /A/s

    cable: inp --[r: 30 mohm]--[l: 10 uH]-- front
    film:  front --[470 uF initially 760 V]-- inn
    leg:   pole(front, inn, x, duty = {duty}, rate = 40 kHz, upper = transistor(4 mohm), lower = diode(0.9 V, 1.5 mohm))
    choke: x --[rl: 3 mohm]--[l: L initially 50 A]-- out
    store: out --[esr: 2 mohm]--[c: c_out initially 380 V]-- inn

{control}
}}

each n in 1..{count} {{
    berth{{n}}: stage(bus, rail_n, plug{{n}}, setpoint = 380 V + 30 V * sin(n),
                     L = 180 uH * (1 + 0.15 * sin(2*n)), c_out = 2.2 mF * (1 + 0.1 * cos(3*n)))
    boat{{n}}:  plug{{n}} --[demand{{n}} above 200 V]-- rail_n
    latch demand{{n}} = 21 kW - 19.5 kW * cos(2.2*n)
}}

study load_step {{
    start settled
    run for {run_for}
    at 20 ms: set demand2 = 60 kW
    keep {keep}
}}
"""
_CONTINUOUS = """\
    signal e_v  = setpoint - (out.v - inn.v)
    signal want = limit(kp_v * e_v + acc_v, 0 A, i_max)
    signal e_i  = want - choke.i
    signal drive = limit(kp_i * e_i + acc_i, 0.01, 0.97)
    d/dt acc_v = ki_v * e_v  initially 50 A  within 0 A .. i_max
    d/dt acc_i = ki_i * e_i  initially 0.5   within 0 .. 0.97"""
_SAMPLED = """\
    latch acc_v = 50 A
    latch acc_i = 0.5
    latch drive = 0.5
    signal e_v  = setpoint - (out.v - inn.v)
    signal want = limit(kp_v * e_v + acc_v, 0 A, i_max)
    signal e_i  = want - choke.i
    every 25 us {
        set acc_v = limit(acc_v + 25 us * ki_v * e_v, 0 A, i_max)
        set acc_i = limit(acc_i + 25 us * ki_i * e_i, 0, 0.97)
        set drive = limit(kp_i * e_i + acc_i, 0.01, 0.97)
    }"""
KEEP = "bus.v, plug{*}.v, berth{*}.choke.i"


def feed_values(count: int) -> dict[str, float]:
    """Feeder and bank in proportion to the number of stages, SI units."""
    return {"feeder_r": 0.2 / count, "feeder_l": 400e-6 / count, "bank_esr": 30e-3 / count, "bank_c": 0.66e-3 * count}


def netlist(count: int = 10, *, sampled: bool = False, run_for: str = "50 ms", keep: str = KEEP) -> str:
    """The circuit as text.

    Args:
        count: number of stages, at least 2.
        sampled: control in `every 25 us` (with one period's hold) instead of continuous.
        run_for: length of the study, in the language's spelling.
        keep: what the study keeps.
    """
    return _CIRCUIT.format(count=count, control=_SAMPLED if sampled else _CONTINUOUS, duty="drive", run_for=run_for, keep=keep, **feed_values(count))


def flat_netlist(count: int) -> str:
    """The same circuit without assembly or `each`: every stage written out, ten lines each."""
    feed = feed_values(count)
    lines = [
        f'title "Charging hall, {count} stages, written out"',
        "reference rail_n",
        "supply: src --[770 V]-- rail_n",
        f"feeder: src --[r: {feed['feeder_r']!r} ohm]--[l: {feed['feeder_l']!r} H]-- bus",
        f"bank: bus --[esr: {feed['bank_esr']!r} ohm]--[c: {feed['bank_c']!r} F initially 760 V]-- rail_n",
    ]
    for n in range(1, count + 1):
        own = _own_values(n)
        lines += [
            f"cable{n}: bus --[r: 30 mohm]--[l: 10 uH]-- front{n}",
            f"film{n}: front{n} --[470 uF initially 760 V]-- rail_n",
            f"leg{n}: pole(front{n}, rail_n, x{n}, duty = drive{n}, rate = 40 kHz, upper = transistor(4 mohm), lower = diode(0.9 V, 1.5 mohm))",
            f"choke{n}: x{n} --[rl: 3 mohm]--[l: {own[1]!r} H initially 50 A]-- plug{n}",
            f"store{n}: plug{n} --[esr: 2 mohm]--[c: {own[2]!r} F initially 380 V]-- rail_n",
            f"boat{n}: plug{n} --[{own[3]!r} W above 200 V]-- rail_n",
            f"signal want{n} = limit(5.5 A/V * ({own[0]!r} V - plug{n}.v) + acc_v{n}, 0 A, 260 A)",
            f"signal drive{n} = limit(0.0045 /A * (want{n} - choke{n}.i) + acc_i{n}, 0.01, 0.97)",
            f"d/dt acc_v{n} = 1700 A/V/s * ({own[0]!r} V - plug{n}.v)  initially 50 A  within 0 A .. 260 A",
            f"d/dt acc_i{n} = 10 /A/s * (want{n} - choke{n}.i)  initially 0.5  within 0 .. 0.97",
        ]
    lines += ["study load_step {", "    start settled", "    run for 50 ms", "    keep bus.v", "}"]
    return "\n".join(lines) + "\n"


def _own_values(n: int) -> tuple[float, float, float, float]:
    """Set point V, choke H, output capacitor F, load W of stage n."""
    setpoint, inductance = 380.0 + 30.0 * math.sin(n), 180e-6 * (1 + 0.15 * math.sin(2 * n))
    return setpoint, inductance, 2.2e-3 * (1 + 0.1 * math.cos(3 * n)), 21e3 - 19.5e3 * math.cos(2.2 * n)


# ------------------------------------------------------------------------------------------------ written by hand


@dataclass(frozen=True, slots=True)
class Stages:
    """Values of the stages, shape (N,) or (N, 1), SI units; scalars are common to all."""

    setpoint: FloatArray
    L: FloatArray
    c_out: FloatArray
    power: FloatArray
    feeder_r: float
    feeder_l: float
    bank_esr: float
    bank_c: float
    supply: float = 770.0
    cable_r: float = 30e-3
    cable_l: float = 10e-6
    c_in: float = 470e-6
    r_on: float = 4e-3
    drop: float = 0.9
    r_diode: float = 1.5e-3
    r_choke: float = 3e-3
    esr: float = 2e-3
    rate: float = RATE_HZ
    kp_v: float = 5.5
    ki_v: float = 1700.0
    kp_i: float = 0.0045
    ki_i: float = 10.0
    i_max: float = 260.0

    def as_columns(self) -> Stages:
        """The same values, arrays of shape (N, 1), for many states at once."""
        return Stages(*(v[:, None] if isinstance(v := getattr(self, f.name), np.ndarray) else v for f in fields(self)))


def stages(count: int = 10, *, stepped: bool = False) -> Stages:
    """The values that `netlist` states; with `stepped`, after the load step."""
    own = np.array([_own_values(n) for n in range(1, count + 1)])
    power = own[:, 3].copy()
    if stepped:
        power[STEPPED - 1] = STEPPED_POWER_W
    return Stages(own[:, 0].copy(), own[:, 1].copy(), own[:, 2].copy(), power, **feed_values(count))


def split(y: FloatArray) -> tuple[FloatArray, ...]:
    """y, shape (6N + 2,) or (6N + 2, k), as: feeder current, bank voltage, then per stage cable current, input voltage, choke current,
    output capacitor's voltage, voltage integral, current integral."""
    count = (len(y) - 2) // 6
    return (y[0], y[1], *(y[2 + k * count : 2 + (k + 1) * count] for k in range(6)))


def output_voltage(s: Stages, i_choke: FloatArray, v_store: FloatArray) -> FloatArray:
    """v = v_store + esr (i_choke - P/v), solved for v: the upper root."""
    idle = v_store + s.esr * i_choke
    return 0.5 * (idle + np.sqrt(idle * idle - 4.0 * s.esr * s.power))


def bus_voltage(s: Stages, i_feed: FloatArray, v_bank: FloatArray, i_cable: FloatArray) -> FloatArray:
    """Bank voltage plus what the net current drops in its series resistance."""
    return v_bank + s.bank_esr * (i_feed - i_cable.sum(axis=0))


def rates(s: Stages, y: FloatArray) -> FloatArray:
    """dy/dt, same shape as y. Averaged pole of continuous and discontinuous conduction: Sun, Mitchell, Greuel, Krein & Bass 2001."""
    i_feed, v_bank, i_cable, v_in, i_choke, v_store, acc_v, acc_i = split(y)
    v_bus = bus_voltage(s, i_feed, v_bank, i_cable)
    v_out = output_voltage(s, i_choke, v_store)

    e_v = s.setpoint - v_out
    want = np.clip(s.kp_v * e_v + acc_v, 0.0, s.i_max)
    e_i = want - i_choke
    d = np.clip(s.kp_i * e_i + acc_i, 0.01, 0.97)

    slope = 2.0 * s.L * s.rate + (s.r_on + s.r_choke) * d
    charge, reach = i_choke * slope, (v_in - v_out) * d
    delta = np.clip(charge / reach, d, 1.0)
    half_peak = reach / slope
    i_on = np.where(charge > reach, i_choke * d, np.where(reach * d > charge, i_choke, half_peak * d))
    d_2 = delta - d
    v_mid = d * v_in - s.r_on * i_on - d_2 * s.drop - s.r_diode * (i_choke - i_on) + (1.0 - delta) * v_out
    ripple_loss = (s.r_on * d + s.r_diode * d_2) * half_peak**2 / 3.0 * np.clip((1.0 - delta) / 0.05, 0.0, 1.0)

    rate_v, rate_i = s.ki_v * e_v, s.ki_i * e_i
    out = np.empty_like(y)
    parts = split(out)
    out[0] = (s.supply - s.feeder_r * i_feed - v_bus) / s.feeder_l
    out[1] = (i_feed - i_cable.sum(axis=0)) / s.bank_c
    parts[2][:] = (v_bus - v_in - s.cable_r * i_cable) / s.cable_l
    parts[3][:] = (i_cable - i_on - ripple_loss / v_in) / s.c_in
    parts[4][:] = (v_mid - v_out - s.r_choke * i_choke) / s.L
    parts[5][:] = (i_choke - s.power / v_out) / s.c_out
    parts[6][:] = np.where(((acc_v >= s.i_max) & (rate_v > 0)) | ((acc_v <= 0) & (rate_v < 0)), 0.0, rate_v)
    parts[7][:] = np.where(((acc_i >= 0.97) & (rate_i > 0)) | ((acc_i <= 0) & (rate_i < 0)), 0.0, rate_i)
    return out


def kept(s: Stages, y: FloatArray) -> FloatArray:
    """What the study keeps, in its order: bus voltage, N output voltages, N choke currents. y (6N + 2, k) → shape (2N + 1, k)."""
    i_feed, v_bank, i_cable, _, i_choke, v_store, _, _ = split(y)
    column = s.as_columns()
    return np.vstack([bus_voltage(s, i_feed, v_bank, i_cable), output_voltage(column, i_choke, v_store), i_choke])


def kept_names(count: int = 10) -> list[str]:
    """The same in the netlist's spelling."""
    return ["bus.v", *(f"plug{n}.v" for n in range(1, count + 1)), *(f"berth{n}.choke.i" for n in range(1, count + 1))]


def natural_scales(count: int = 10) -> FloatArray:
    """Size of each entry of y: A, V and 1; what absolute tolerances are a fraction of. Shape (6N + 2,)."""
    one = np.ones(count)
    return np.concatenate([[100.0 * count / 10, 760.0], 30.0 * one, 760.0 * one, 50.0 * one, 380.0 * one, 50.0 * one, one])


def settled(s: Stages, *, iterations: int = 50) -> FloatArray:
    """y with dy/dt = 0 by Newton's method from a power balance, Jacobian by complex-free central differences. Shape (6N + 2,)."""
    count = len(s.power)
    i_out = s.power / s.setpoint
    i_cable = s.power / 760.0
    v_bus = s.supply - s.feeder_r * i_cable.sum()
    v_in = v_bus - s.cable_r * i_cable
    full = s.setpoint / v_in
    light = np.sqrt(i_out * 2 * s.L * s.rate * s.setpoint / ((v_in - s.setpoint) * v_in))  # discontinuous: P = d^2 a v_in / (2 L f)
    y = np.concatenate([[i_cable.sum(), v_bus], i_cable, v_in, i_out, s.setpoint, i_out, np.minimum(full, light)])
    size, columns = natural_scales(count), s.as_columns()
    for _ in range(iterations):
        step = 1e-6 * size
        plus, minus = y[:, None] + np.diag(step), y[:, None] - np.diag(step)
        jacobian = (rates(columns, plus) - rates(columns, minus)) / (2 * step)
        change = np.linalg.solve(jacobian, -rates(s, y))
        y = y + change
        if np.max(np.abs(change) / size) < 1e-13:
            break
    return y


@dataclass(frozen=True, slots=True)
class Case:
    """The load step as two stretches of smooth equations."""

    count: int
    before: Stages
    after: Stages
    start: FloatArray
    step_s: float = STEP_TIME_S
    end_s: float = END_TIME_S
    scale: FloatArray = field(default_factory=lambda: np.zeros(0))


def load_step(count: int = 10, *, end_s: float = END_TIME_S) -> Case:
    """The study `load_step` for the hand-written equations, from the settled state."""
    before = stages(count)
    return Case(count, before, stages(count, stepped=True), settled(before), end_s=end_s, scale=natural_scales(count))


def sample_times(end_s: float = END_TIME_S) -> tuple[FloatArray, FloatArray]:
    """Times of output, before and after the step: evenly spread, and crowded just after it. The step itself ends the first and begins the second."""
    before = np.linspace(0.0, STEP_TIME_S, 41)
    rest = end_s - STEP_TIME_S
    after = np.concatenate([np.linspace(0.0, rest, 121), rest * np.geomspace(2e-4, 0.5, 60)])
    return before, np.unique(np.round(STEP_TIME_S + after, 9))


def compared_times(end_s: float = END_TIME_S) -> FloatArray:
    """Times at which runs are compared: those of output but the instant of the step, where quantities jump."""
    before, after = sample_times(end_s)
    return np.concatenate([before[:-1], after[1:]])


def compared(case: Case, before: FloatArray, after: FloatArray) -> FloatArray:
    """Kept quantities at `compared_times` from states at `sample_times`, shape (6N + 2, times) each."""
    return np.hstack([kept(case.before, before[:, :-1]), kept(case.after, after[:, 1:])])


def relative_error(got: FloatArray, reference: FloatArray, count: int = 10) -> float:
    """Largest |got - reference| over all kept quantities and times, over the largest value of the quantity's kind (V of the bus, V, A)."""
    kinds = (slice(0, 1), slice(1, 1 + count), slice(1 + count, 1 + 2 * count))
    return float(max(np.max(np.abs(got[kind] - reference[kind])) / np.max(np.abs(reference[kind])) for kind in kinds))
