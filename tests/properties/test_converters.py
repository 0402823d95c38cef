"""Random converters at rest: power balances to rounding, Kirchhoff's current law holds at every node, devices lose power and never give any."""

from __future__ import annotations

from hypothesis import HealthCheck, assume, example, given, settings
from hypothesis import strategies as st

import polewise

SETTINGS = {"deadline": None, "suppress_health_check": [HealthCheck.too_slow, HealthCheck.filter_too_much]}

share = st.integers(4, 16).map(lambda k: k / 20)
small = st.sampled_from([0.0, 0.002, 0.01, 0.05])
KINDS = ("step-down", "step-up", "inverting", "two-transistor step-down", "two-transistor step-up")


@st.composite
def stages(draw: st.DrawFn, k: int) -> str:
    """One converter between `bus` and an output `o{k}` with its load; every loss from zero upwards, chokes from tiny to large."""
    kind = draw(st.sampled_from(KINDS))
    d, rate = draw(share), draw(st.sampled_from([20e3, 100e3]))
    transistor = f"transistor({draw(small)!r} ohm)"
    diode = f"diode({draw(st.sampled_from([0.0, 0.7]))!r} V, {draw(small)!r} ohm)"
    rl = draw(small)
    choke = (f"[rl: {rl!r} ohm]--" if rl else "") + f"[l: {draw(st.sampled_from([2.0, 20.0, 200.0, 2000.0]))!r} uH]"
    load = draw(st.sampled_from(["[r: 2 ohm]", "[r: 20 ohm]", "[r: 200 ohm]"]))
    cap = f"c{k}: o{k} --[100 uF]-- gnd\nload{k}: o{k} --{load}-- gnd"
    if kind == "step-down":
        return (
            f"leg{k}: pole(bus, gnd, x{k}, duty = {d}, rate = {rate} Hz, upper = {transistor}, lower = {diode})\nq{k}: x{k} --{choke}-- o{k}\n{cap}"
        )
    if kind == "step-up":
        return (
            f"leg{k}: pole(o{k}, gnd, x{k}, duty = {d}, rate = {rate} Hz, upper = {diode}, lower = {transistor})\nq{k}: bus --{choke}-- x{k}\n{cap}"
        )
    if kind == "inverting":
        return (
            f"leg{k}: pole(bus, o{k}, x{k}, duty = {d}, rate = {rate} Hz, upper = {transistor}, lower = {diode})\nq{k}: x{k} --{choke}-- gnd\n{cap}"
        )
    pair = f"upper = {transistor}, lower = {transistor}"
    if kind == "two-transistor step-down":
        return f"leg{k}: pole(bus, gnd, x{k}, upper_duty = {d}, rate = {rate} Hz, {pair})\nq{k}: x{k} --{choke}-- o{k}\n{cap}"
    return f"leg{k}: pole(o{k}, gnd, x{k}, lower_duty = {d}, rate = {rate} Hz, {pair})\nq{k}: bus --{choke}-- x{k}\n{cap}"


@st.composite
def systems(draw: st.DrawFn) -> tuple[str, int]:
    """One to four converters on one bus behind a line."""
    number = draw(st.integers(1, 4))
    lines = [draw(stages(k)) for k in range(number)]
    return "reference gnd\nsupply: src --[48 V]-- gnd\nline: src --[r: 5 mohm]-- bus\n" + "\n".join(lines), number


# Found by this test: discontinuous stages whose operating point no search reached.
TWO_SMALL_CHOKES = """reference gnd
supply: src --[48 V]-- gnd
line: src --[r: 5 mohm]-- bus
leg0: pole(o0, gnd, x0, duty = 0.2, rate = 20000.0 Hz, upper = diode(0.0 V, 0.0 ohm), lower = transistor(0.0 ohm))
q0: bus --[l: 2.0 uH]-- x0
c0: o0 --[100 uF]-- gnd
load0: o0 --[r: 20 ohm]-- gnd
leg1: pole(bus, o1, x1, duty = 0.2, rate = 20000.0 Hz, upper = transistor(0.002 ohm), lower = diode(0.0 V, 0.0 ohm))
q1: x1 --[l: 20.0 uH]-- gnd
c1: o1 --[100 uF]-- gnd
load1: o1 --[r: 2 ohm]-- gnd"""
# A light load: the output overshoots the rail, the pole blocks, and unblocks where the output has sunk back to the rail.
OVERSHOOT = """reference gnd
supply: src --[48 V]-- gnd
line: src --[r: 5 mohm]-- bus
leg0: pole(bus, gnd, x0, duty = 0.55, rate = 100000.0 Hz, upper = transistor(0.0 ohm), lower = diode(0.0 V, 0.0 ohm))
q0: x0 --[l: 200.0 uH]-- o0
c0: o0 --[100 uF]-- gnd
load0: o0 --[r: 20 ohm]-- gnd"""
# An inverting stage that starts with nothing at its output.
FROM_NOTHING = """reference gnd
supply: src --[48 V]-- gnd
line: src --[r: 5 mohm]-- bus
leg0: pole(bus, o0, x0, duty = 0.2, rate = 20000.0 Hz, upper = transistor(0.002 ohm), lower = diode(0.0 V, 0.01 ohm))
q0: x0 --[l: 2.0 uH]-- gnd
c0: o0 --[100 uF]-- gnd
load0: o0 --[r: 2 ohm]-- gnd"""

# The neighbour's inrush pulls the rail below a stage's output, which it was charging in discontinuous conduction.
SINKING_RAIL = """reference gnd
supply: src --[48 V]-- gnd
line: src --[r: 5 mohm]-- bus
leg0: pole(bus, gnd, x0, duty = 0.45, rate = 20000.0 Hz, upper = transistor(0.0 ohm), lower = diode(0.0 V, 0.0 ohm))
q0: x0 --[l: 2.0 uH]-- o0
c0: o0 --[100 uF]-- gnd
load0: o0 --[r: 20 ohm]-- gnd
leg1: pole(o1, gnd, x1, lower_duty = 0.2, rate = 20000.0 Hz, upper = transistor(0.0 ohm), lower = transistor(0.0 ohm))
q1: bus --[l: 2.0 uH]-- x1
c1: o1 --[100 uF]-- gnd
load1: o1 --[r: 2 ohm]-- gnd"""


@settings(max_examples=60, **SETTINGS)
@given(drawn=systems())
@example(drawn=(TWO_SMALL_CHOKES, 2))
def test_power_balances_at_rest(drawn: tuple[str, int]) -> None:
    text, number = drawn
    point = polewise.from_text(text).settled()
    delivered = -point["supply.p"]
    size = max(1.0, abs(delivered), *(abs(point[f"q{k}.i"]) * 48.0 for k in range(number)))
    assume(size < 1e5)
    # every watt out of the supply is in the line, a choke's resistance, a load or a pole
    absorbed = point["line.p"] + sum(point[f"q{k}.p"] + point[f"load{k}.p"] + point[f"leg{k}.loss"] for k in range(number))
    assert abs(delivered - absorbed) <= 1e-9 * size
    assert abs(point.power_balance.residual_w) <= 1e-9 * size
    assert abs(point.power_balance.delivered_w - delivered) <= 1e-9 * size
    # Kirchhoff at the bus: the line brings what poles and chokes take
    taken = 0.0
    for k in range(number):
        top, bottom, mid = (point[f"leg{k}.{t}.i"] for t in ("top", "bottom", "mid"))
        assert abs(top + bottom + mid) <= 1e-9 * size
        taken += point[f"q{k}.i"] if f"q{k}: bus" in text else top
        loss = point[f"leg{k}.loss"]
        assert loss >= -1e-9 * size
        if f"leg{k}" in point.modes and point.modes[f"leg{k}"] == "discontinuous":
            assert 0.0 < point[f"leg{k}.conduction"] < 1.0
    assert abs(point["line.i"] - taken) <= 1e-9 * size


@settings(max_examples=12, **SETTINGS)
@given(drawn=systems(), load=st.sampled_from([0.5, 3.0]))
@example(drawn=(OVERSHOOT, 1), load=0.5)
@example(drawn=(FROM_NOTHING, 1), load=0.5)
@example(drawn=(SINKING_RAIL, 2), load=0.5)
def test_tellegen_in_transients(drawn: tuple[str, int], load: float) -> None:
    # The sum of v i over everything, poles by their terminals, is zero at every instant, whatever the mode of conduction.
    text, number = drawn
    watched = [f"q{k}.p, c{k}.p, load{k}.p, leg{k}.loss" for k in range(number)]
    result = polewise.from_text(
        f"""
{text}
more: o0 --[draw]-- gnd
latch draw = 0 A
study step {{
    start cold
    run for 2 ms
    at 1 ms: set draw = {load} A
    keep supply.p, line.p, more.p, {", ".join(watched)}
}}
"""
    ).run("step")
    total = result["supply.p"] + result["line.p"] + result["more.p"]
    size = abs(result["supply.p"]) + abs(result["more.p"])
    for k in range(number):
        for part in ("q", "c", "load"):
            total = total + result[f"{part}{k}.p"]
            size = size + abs(result[f"{part}{k}.p"])
        total = total + result[f"leg{k}.loss"]
    assert (abs(total) <= 1e-7 * (size.max() + 1.0)).all()  # the run's tolerance is 1e-6
