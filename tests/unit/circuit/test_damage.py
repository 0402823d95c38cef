"""Damaged netlists end in diagnostics, never in a traceback, and a circuit comes out exactly where there is no error."""

import random
import re
from pathlib import Path

import pytest

from polewise.circuit.expand import expand
from polewise.circuit.load import load_text
from polewise.circuit.quantities import all_quantities

EXAMPLES = sorted((Path(__file__).parents[2] / "examples").glob("*.pole"))
_WORDS = re.compile(r"[A-Za-z_]\w*|\d+\.?\d*|\S|\s+")


def damaged(text: str, rng: random.Random) -> str:
    """A netlist with a few of its words dropped, swapped, doubled or put elsewhere."""
    words = _WORDS.findall(text)
    for _ in range(rng.randint(1, 5)):
        k, j = rng.randrange(len(words)), rng.randrange(len(words))
        act = rng.randrange(4)
        if act == 0:
            del words[k]
        elif act == 1:
            words[k], words[j] = words[j], words[k]
        elif act == 2:
            words.insert(k, f" {words[j]} ")
        else:
            words[j:j] = words[k : k + rng.randint(1, 20)]
    return "".join(words)


@pytest.mark.parametrize("seed", range(120))
def test_damaged_netlists(seed):
    rng = random.Random(seed)
    text = damaged(rng.choice(EXAMPLES).read_text(encoding="utf-8"), rng)
    sources, first = load_text(text)
    circuit, second = expand(sources)
    assert (circuit is None) == any(d.is_error for d in (*first, *second))
    for diagnostic in second:
        assert diagnostic.headline
        assert 0 <= diagnostic.span.start <= diagnostic.span.end <= len(diagnostic.span.source.text)
    if circuit is not None:
        assert sum(1 for _ in all_quantities(circuit))


def test_an_error_is_said_once_in_each_place():
    for seed in range(40):
        rng = random.Random(seed)
        sources, _ = load_text(damaged(rng.choice(EXAMPLES).read_text(encoding="utf-8"), rng))
        _, found = expand(sources)
        places = [(d.code, d.span.source.name, d.span.start, d.span.end) for d in found]
        assert len(set(places)) == len(places)
