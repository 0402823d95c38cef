"""What was probably meant."""

from itertools import product

import pytest

from polewise.circuit.near import distance, looks_mistyped, nearest


def slow_distance(a: str, b: str) -> int:
    """Edits by plain recursion over all ways: insert, drop, replace, swap neighbours."""
    if not a or not b:
        return len(a) + len(b)
    best = min(slow_distance(a[1:], b) + 1, slow_distance(a, b[1:]) + 1, slow_distance(a[1:], b[1:]) + (a[0] != b[0]))
    if len(a) > 1 and len(b) > 1 and a[0] == b[1] and a[1] == b[0]:
        best = min(best, slow_distance(a[2:], b[2:]) + 1)
    return best


def test_distance_agrees_with_its_slow_twin():
    words = ["".join(w) for n in range(4) for w in product("ab", repeat=n)] + ["abc", "acb", "bca"]
    for a in words:
        for b in words:
            assert distance(a, b, 9) == slow_distance(a, b)
            assert distance(a, b, 1) == min(slow_distance(a, b), 2)


@pytest.mark.parametrize(
    ("name", "candidates", "expected"),
    [
        ("dirve", ["drive", "dive", "derive"], "drive"),
        ("setpiont", ["setpoint", "L"], "setpoint"),
        ("BUS", ["bus", "bas"], "bus"),
        ("x", ["y", "z"], None),
        ("voltage", ["current", "power"], None),
        ("berth7", ["berth1", "boat7"], "berth1"),
    ],
)
def test_nearest(name, candidates, expected):
    assert nearest(name, candidates) == expected


@pytest.mark.parametrize(
    ("a", "b", "expected"),
    [
        ("batery", "battery", True),
        ("b1", "b2", False),
        ("bus", "bus2", False),
        ("Bus", "bus", True),
        ("in", "inn", False),
        ("feed1", "feed12", False),
    ],
)
def test_mistyped(a, b, expected):
    assert looks_mistyped(a, b) is expected
