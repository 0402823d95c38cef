"""Random linear networks: operating points and transients against dense nodal analysis; Kirchhoff's laws and Tellegen's theorem at every point."""

from __future__ import annotations

import numpy as np
from hypothesis import HealthCheck, assume, given, settings

import polewise

from .networks import RandomNetwork, branches, dense, netlist, networks

SETTINGS = {"deadline": None, "suppress_health_check": [HealthCheck.too_slow, HealthCheck.filter_too_much]}
RUN_S = 3e-3


def kirchhoff(network: RandomNetwork, read, size: float) -> None:
    """Currents into every node sum to zero, voltages are differences of potentials, and powers of all branches sum to zero.

    read: name → value or array. size: of the largest voltage and current, for absolute room.
    """
    paths = branches(network)
    current = {name: np.asarray(read(f"{name}.i")) for name, _, _ in paths}
    voltage = {name: np.asarray(read(f"{name}.v")) for name, _, _ in paths}
    nodes = {node for _, left, right in paths for node in (left, right)}
    potential = {node: np.asarray(read(f"{node}.v")) for node in nodes if node != "gnd"} | {"gnd": np.zeros(1)}
    for node in nodes:
        total = sum(current[name] * ((left == node) - (right == node)) for name, left, right in paths)
        assert np.max(np.abs(total)) <= 1e-10 * size, node
    for name, left, right in paths:
        assert np.max(np.abs(voltage[name] - (potential[left] - potential[right]))) <= 1e-10 * size, name
    power = sum(voltage[name] * current[name] for name, _, _ in paths)
    assert np.max(np.abs(power)) <= 1e-10 * size * size


@settings(max_examples=60, **SETTINGS)
@given(network=networks(stores=False))
def test_operating_point_equals_dense_analysis(network: RandomNetwork) -> None:
    system = dense(network)
    assume(np.linalg.cond(system.a) < 1e8)
    wanted = system.rest()
    assume(np.max(np.abs(wanted)) < 1e6)
    point = polewise.from_text(netlist(network)).settled()
    size = max(1.0, float(np.max(np.abs(wanted))))
    got = np.array([point[f"{name}.v"] for name in system.potentials])
    np.testing.assert_allclose(got, wanted[: len(got)], rtol=0, atol=1e-9 * size)
    kirchhoff(network, point.__getitem__, size)
    balance = point.power_balance
    assert abs(balance.residual_w) <= 1e-9 * size * size
    # what the sources give is what the resistors take
    # (one alone between a node and the reference stands for a load)
    taken = {k: point[f"e{k}.p"] for k, e in enumerate(network.elements) if e.kind == "R"}
    loads = sum(p for k, p in taken.items() if 0 in (network.elements[k].a, network.elements[k].b))
    lost = sum(taken.values()) - loads
    lost += sum(point[f"e{k}.r.p"] for k, e in enumerate(network.elements) if e.kind in "VE")
    assert abs(balance.losses[""] - lost) <= 1e-9 * size * size


@settings(max_examples=30, **SETTINGS)
@given(network=networks())
def test_transient_keeps_kirchhoffs_laws_and_equals_dense_solution(network: RandomNetwork) -> None:
    system = dense(network)
    assume(np.linalg.cond(system.a) < 1e8)
    assume(system.growth() < 1e3)
    text = f"""
latch on = 0
{netlist(network, share="on")}
study step {{
    start cold
    run for 4 ms
    at 1 ms: set on = 1
    keep {", ".join([f"{name}.i, {name}.v" for name, _, _ in branches(network)] + [f"{n}.v" for n in system.potentials])}
}}
"""
    result = polewise.from_text(text).run("step", tolerance=1e-8)
    after = result.time > 1e-3
    wanted = system.step_response(result.time[after] - 1e-3)
    size = max(1.0, float(np.max(np.abs(wanted))))
    assume(size < 1e6)
    kirchhoff(network, lambda name: result[name], size)
    for k, name in enumerate(system.potentials):
        got = result[f"{name}.v"]
        assert np.max(np.abs(got[result.time < 1e-3])) == 0.0
        np.testing.assert_allclose(got[after], wanted[k], rtol=0, atol=1e-6 * size, err_msg=name)
