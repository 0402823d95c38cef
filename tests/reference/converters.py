"""Netlists of the basic converters from values in SI, and what tests read from their operating points."""

from __future__ import annotations

from dataclasses import dataclass

import polewise


@dataclass(frozen=True)
class Stage:
    """One converter at fixed duty. Zero resistances are left out, so that lossless cases have no resistor at all.

    l, c: choke (each of two in SEPIC and Ćuk) and output capacitor. r1, r2: series resistances; r1 of the only or first choke.
    couple: coupling capacitor of SEPIC and Ćuk.
    """

    vg: float
    d: float
    r: float
    l: float = 1e-3  # noqa: E741 the formula's letter
    c: float = 220e-6
    f: float = 100e3
    r1: float = 0.0
    r2: float = 0.0
    r_on: float = 0.0
    r_d: float = 0.0
    v_d: float = 0.0
    couple: float = 47e-6


def ohms(name: str, value: float) -> str:
    """A resistor box with its wire, or nothing."""
    return f"[{name}: {value!r} ohm]--" if value else ""


def _pole(s: Stage, terminals: str, *, lower_diode: bool, choke: str = "") -> str:
    diode, transistor = f"diode({s.v_d!r} V, {s.r_d!r} ohm)", f"transistor({s.r_on!r} ohm)"
    upper, lower = (transistor, diode) if lower_diode else (diode, transistor)
    return f"leg: pole({terminals}, duty = {s.d!r}, rate = {s.f!r} Hz, upper = {upper}, lower = {lower}{choke})"


def step_down(s: Stage) -> str:
    """Output `out`."""
    return f"""
reference gnd
supply: vin --[{s.vg!r} V]-- gnd
{_pole(s, "vin, gnd, x", lower_diode=True)}
choke: x --{ohms("rl", s.r1)}[l: {s.l!r} H]-- out
store: out --[c: {s.c!r} F]-- gnd
load: out --[r: {s.r!r} ohm]-- gnd
signal v_out = out.v
"""


def step_up(s: Stage) -> str:
    """Output `out`."""
    return f"""
reference gnd
supply: vin --[{s.vg!r} V]-- gnd
choke: vin --{ohms("rl", s.r1)}[l: {s.l!r} H]-- x
{_pole(s, "out, gnd, x", lower_diode=False)}
store: out --[c: {s.c!r} F]-- gnd
load: out --[r: {s.r!r} ohm]-- gnd
signal v_out = out.v
"""


def inverting(s: Stage) -> str:
    """Output `out`, below ground; `v_out` is its magnitude."""
    return f"""
reference gnd
supply: vin --[{s.vg!r} V]-- gnd
{_pole(s, "vin, out, x", lower_diode=True)}
choke: x --{ohms("rl", s.r1)}[l: {s.l!r} H]-- gnd
store: out --[c: {s.c!r} F]-- gnd
load: out --[r: {s.r!r} ohm]-- gnd
signal v_out = -out.v
"""


def sepic(s: Stage) -> str:
    """The coupling capacitor stands in the return, which changes no branch voltage or current (circuits/basics/sepic.pole)."""
    return f"""
reference gnd
supply: vin --[{s.vg!r} V]-- gnd
first: vin --{ohms("r1", s.r1)}[l: {s.l!r} H]-- m
second: m --[l: {s.l!r} H]--{ohms("r2", s.r2)} out_n
{_pole(s, "out_p, gnd, m", lower_diode=False, choke=", choke = (first.l, second.l)")}
couple: out_n --[{s.couple!r} F]-- gnd
store: out_p --[c: {s.c!r} F]-- out_n
load: out_p --[r: {s.r!r} ohm]-- out_n
signal v_out = out_p.v - out_n.v
"""


def cuk(s: Stage) -> str:
    """The coupling capacitor is the pole's port; `v_out` is the output's magnitude."""
    return f"""
reference gnd
supply: vin --[{s.vg!r} V]-- gnd
first: vin --{ohms("r1", s.r1)}[l: {s.l!r} H]-- m
{_pole(s, "far, gnd, m", lower_diode=False, choke=", choke = (first.l, second.l)")}
couple: far --[{s.couple!r} F]-- gnd
second: m --[l: {s.l!r} H]--{ohms("r2", s.r2)} o
store: o --[c: {s.c!r} F]-- far
load: o --[r: {s.r!r} ohm]-- far
signal v_out = far.v - o.v
"""


TOPOLOGIES = {"step-down": step_down, "step-up": step_up, "inverting": inverting, "SEPIC": sepic, "Ćuk": cuk}


def settle(topology: str, stage: Stage) -> polewise.Settled:
    """The operating point of one stage."""
    return polewise.from_text(TOPOLOGIES[topology](stage)).settled()


def efficiency(point: polewise.Settled) -> float:
    """Power into the load over power out of the supply."""
    return point["load.p"] / -point["supply.p"]
