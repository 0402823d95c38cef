"""One thousand converters on one bus: the 20 least damped modes of a region with their cluster sizes, and a 400-point impedance.

Run by hand: python -m tests.bench.small_signal [number of converters]. Figure to reach: modes and impedance together under 30 s on two cores.
"""

from __future__ import annotations

import sys
import time

import numpy as np

import polewise

STATES_EACH = 6  # input filter 2, choke, capacitor, two integrators


def netlist(count: int) -> str:
    """An invented pier; the first tenth of the berths has another choke, so that there are two families."""
    return f"""
        title "large pier"
        reference gnd
        supply: src --[800 V]-- gnd
        feeder: src --[r: 2 mohm]--[l: 5 uH]-- bus
        bank: bus --[esr: 1 mohm]--[c: 20 mF]-- gnd
        assembly berth(inp, inn, out) {{
            given L = 180 uH
            link:  inp --[l: 2 uH]--[r: 20 mohm]-- near
            buff:  near --[esr: 50 mohm]--[c: 200 uF]-- inn
            leg:   pole(near, inn, x, upper_duty = drive, rate = 40 kHz, upper = transistor(9 mohm), lower = transistor(9 mohm))
            choke: x --[rl: 4 mohm]--[l: L]-- out
            cap:   out --[1.2 mF]-- inn
            signal err   = 400 V - (out.v - inn.v)
            signal ask   = slow + 0.4 A/V * err
            signal drive = fast + 0.004 /A * (ask - choke.i)
            d/dt slow    = 8 A/V/s * err  initially 50 A
            d/dt fast    = 2 /A/s * (ask - choke.i)  initially 0.5
        }}
        each n in 1..{count // 10} {{
            berth{{n}}: berth(bus, gnd, b{{n}}, L = 120 uH)
            boat{{n}}:  b{{n}} --[r: 8 ohm]-- gnd
        }}
        each n in {count // 10 + 1}..{count} {{
            berth{{n}}: berth(bus, gnd, b{{n}})
            boat{{n}}:  b{{n}} --[r: 8 ohm]-- gnd
        }}
    """


def main(count: int) -> None:
    """Print the figures."""
    began = time.perf_counter()
    system = polewise.from_text(netlist(count))
    print(f"read: {time.perf_counter() - began:.2f} s")
    began = time.perf_counter()
    modes = system.modes(region=(5.0, 50e3, 0.5), count=20)
    modes_s = time.perf_counter() - began
    print(f"modes: {modes_s:.2f} s, {modes.linear.n} unknowns")
    for mode in modes:
        print(f"  {mode.multiplicity:4d} x {mode.frequency_hz:10.2f} Hz, damping {mode.damping:.4f}")
    began = time.perf_counter()
    system.impedance("bus", np.geomspace(1.0, 100e3, 400))
    impedance_s = time.perf_counter() - began
    print(f"impedance, 400 points: {impedance_s:.2f} s")
    print(f"together: {modes_s + impedance_s:.2f} s (figure: 30 s)")


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 1000)
