"""Every statement of the language, read into its node."""

from __future__ import annotations

import pytest

from .shown import check


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ('title "Pier"', "Title(Pier)"),
        ('use "parts/berth.pole"', "Use(parts/berth.pole)"),
        ("reference gnd", "ReferenceNode(gnd)"),
        ("reference frame (rad/s)", "ReferenceNode(frame, rad/s)"),
        ("given L = 180 uH", "Given(L, 180 uH)"),
        ('given C = 6.6 mF +- 20 %  "all units"', "Given(C, 6.6 mF, Tolerance(20 %), all units)"),
        ("given C = 6.6 mF +- 0.2 mF normal", "Given(C, 6.6 mF, Tolerance(0.2 mF, True))"),
        ("given berth2.L = 200 uH", "Given(berth2.L, 200 uH)"),
        ("input enable = true", "Input(enable, true)"),
        ('input want "no default"', "Input(want, no default)"),
        ("signal x = a.v - b.v", "Signal(x, (a.v - b.v))"),
        ("d/dt x = 3 V", "StateRate(x, 3 V)"),
        ("d/dt x = a initially 0.5 within 0 .. 1", "StateRate(x, a, 0.5, <0 1>)"),
        ("d/dt x = a within -1 .. 1 held initially 2", "StateRate(x, a, 2, <(- 1) 1>, True)"),
        ("latch demand{n} = 20 kW", "Latch(demand{n}, 20 kW)"),
        ("solve x from x^2 = a initially 1", "Solve(x, (x ^ 2), a, 1)"),
        ("function f(x, y) = x * y", "Function(f, <x y>, (x * y))"),
        ("table f(x) = (0 A, 0 Wb) (20 A, 4 mWb) smooth odd extend", "Table(f, x, <<0 A 0 Wb> <20 A 4 mWb>>, True, True, extend)"),
        ("table f(x) = (0, 1), (2, 3) hold", "Table(f, x, <<0 1> <2 3>>, hold)"),
        ("wires grid(a, b, c)", "Wires(grid, <a b c>)"),
        ('assembly berth(p, n) "a berth" {\n given L = 1 uH\n}', "Assembly(berth, <p n>, a berth, <Given(L, 1 uH)>)"),
        ("each n in 1..3 { a{n} -- b }", "Each(n, 1, 3, <Path(<a{n} b>)>)"),
        ("each n in 1 .. count - 1 {\n latch x{n} = 0\n}", "Each(n, 1, (count - 1), <Latch(x{n}, 0)>)"),
        ("leg: pole(a, b, c, duty = d, upper = transistor(5 mohm))", "Placement(leg, pole, <a b c>, <duty=d upper=Call(transistor, <5 mohm>)>)"),
        ("leg: pole(unconnected, choke = (L1, L2))", "Placement(leg, pole, <unconnected>, <choke=ListOf(<L1 L2>)>)"),
        ('loop: thing() "said"', "Placement(loop, thing, said)"),
    ],
)
def test_a_statement(text: str, expected: str) -> None:
    check(text, expected)


def test_a_given_from_outside_has_its_unit() -> None:
    check('given i_max in A "largest"', "Given(i_max, A, largest)")


def test_a_table_from_a_file() -> None:
    text = 'table load(t in s) in kW from "day.csv" columns "t_s", "P_kW" hold'
    check(text, "Table(load, t, s, kW, day.csv, <t_s P_kW>, hold)")


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("a -- b", "Path(<a b>)"),
        ("w: a -- b -- c", "Path(w, <a b c>)"),
        ("w: a --[12 mohm]-- b", "Path(w, <a Box(12 mohm) b>)"),
        ("w: a --[r: 6 mohm]--[l: 25 uH]-- b", "Path(w, <a Box(r, 6 mohm) Box(l, 25 uH) b>)"),
        ("w: a --[c: C initially 760 V]-- b", "Path(w, <a Box(c, C, 760 V) b>)"),
        ("w: a --[20 kW above 300 V]-- b", "Path(w, <a Box(PowerBox(20 kW, above, 300 V)) b>)"),
        ("w: a --[-5 kW below 850 V]-- b", "Path(w, <a Box(PowerBox((- 5 kW), below, 850 V)) b>)"),
        ("w: a --[i = 1 A * (v / 900 V)^25]-- b", "Path(w, <a Box(EquationBox(i, (1 A * ((v / 900 V) ^ 25)))) b>)"),
        ("w: a --[v = d/dt flux(i)]-- b", "Path(w, <a Box(EquationBox(v, Derivative(Call(flux, <i>)))) b>)"),
        ("w: a --[k: breaker(false)]-- b", "Path(w, <a Box(k, Call(breaker, <false>)) b>)"),
        ("w: a --[switch(on = x > 3)]-- b", "Path(w, <a Box(Call(switch, <on=(x > 3)>)) b>)"),
        ("w: a --[1 ohm | c: 2 mF]-- b", "Path(w, <a ParallelBoxes(<Box(1 ohm) Box(c, 2 mF)>) b>)"),
        ("boat{n}: b{n} --[demand{n} above 200 V]-- gnd", "Path(boat{n}, <b{n} Box(PowerBox(demand{n}, above, 200 V)) gnd>)"),
        ("w: cell{n}_{m+1}x.out -- b", "Path(w, <cell{n}_{(m + 1)}x.out b>)"),
    ],
)
def test_a_path(text: str, expected: str) -> None:
    check(text, expected)


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("at 50 ms: set x = 90 kW", "At(50 ms, <SetAction(x, 90 kW)>)"),
        ("at 50 ms: open a.k; close b", "At(50 ms, <SwitchAction(a.k) SwitchAction(b, True)>)"),
        (
            "every 1 / rate {\n set a = b   # read first\n set b = a; open k\n}",
            "Every((1 / rate), <SetAction(a, b) SetAction(b, a) SwitchAction(k)>)",
        ),
        ("every 25 us { set a = b }", "Every(25 us, <SetAction(a, b)>)"),
        ("whenever bus.v falls below 640 V for 2 ms: open k", "Whenever(bus.v, falls below, 640 V, 2 ms, <SwitchAction(k)>)"),
        ("whenever x rises above y { set t = true; }", "Whenever(x, rises above, y, <SetAction(t, true)>)"),
        ("whenever a > b and not c: open k", "Whenever(((a > b) and (not c)), <SwitchAction(k)>)"),
        (
            "sequence start_up {\n step charge { close pre.k } until bus.v > 0.95 * src.v else fault after 2 s\n"
            " step connect { close k } until after 50 ms\n step run { }\n step fault {\n open a; open b\n }\n}",
            "Sequence(start_up, <Step(charge, <SwitchAction(pre.k, True)>, (bus.v > (0.95 * src.v)), fault, 2 s)"
            " Step(connect, <SwitchAction(k, True)>, 50 ms) Step(run) Step(fault, <SwitchAction(a) SwitchAction(b)>)>)",
        ),
        ("sequence q { step a { open k } until x after 3 s }", "Sequence(q, <Step(a, <SwitchAction(k)>, x, 3 s)>)"),
    ],
)
def test_an_event(text: str, expected: str) -> None:
    check(text, expected)


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("start settled", "Start(settled)"),
        ("start cold", "Start(cold)"),
        ("start from black_start at 1.5 s", "Start(from, black_start, 1.5 s)"),
        ("run for 30 min", "RunFor(30 min)"),
        ("keep bus.v, berth{*}.leg.duty", "Keep(<bus.v berth{*}.leg.duty>)"),
        ("tolerance 1e-6", "StudyTolerance(1e-6)"),
        ("sampling = exact", "Sampling(exact)"),
        ("sampling = mean", "Sampling(mean)"),
        ("given berth2.L = 200 uH", "Given(berth2.L, 200 uH)"),
        ("at 20 ms: set x = 1", "At(20 ms, <SetAction(x, 1)>)"),
        ("require bus.v within 700 V .. 820 V after 25 ms", "Require(bus.v, within, 700 V, 820 V, 25 ms)"),
        (
            'recover: require settling_time(bus.v, 1 %) below 15 ms after 20 ms "why"',
            "Require(recover, Call(settling_time, <bus.v 1 %>), below, 15 ms, 20 ms, why)",
        ),
        ("require t above -40 degC during 1 s .. 2 s", "Require(t, above, (- 40 degC), 1 s, 2 s)"),
        ('require start_up.run after 800 ms "reached"', "Require(start_up.run, 800 ms, reached)"),
        ("require a > b", "Require((a > b))"),
        ("run: require a", "Require(run, a)"),
    ],
)
def test_an_order_of_a_study(text: str, expected: str) -> None:
    check(f"study rest {{\n    {text}\n}}", f"Study(rest, <{expected}>)")
    check(f"study rest {{ {text} }}", f"Study(rest, <{expected}>)")


def test_a_study_with_a_document() -> None:
    check('study rest "says why" { }', "Study(rest, says why)")


def test_words_are_names_where_the_word_cannot_stand() -> None:
    check("run: open -- above.keep", "Path(run, <open above.keep>)")
    check("leg: pole(in, by, low = over)", "Placement(leg, pole, <in by>, <low=over>)")
    check("signal after = within + bus.signal", "Signal(after, (within + bus.signal))")
    check("given from = in", "Given(from, in)")
    check("step: set -- close", "Path(step, <set close>)")


def test_a_port_may_be_called_as_a_reading_but_a_value_may_not() -> None:
    check("assembly unit(p, n) {\n p --[3 ohm]-- n\n}", "Assembly(unit, <p n>, <Path(<p Box(3 ohm) n>)>)")
