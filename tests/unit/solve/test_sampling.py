"""Counting sample instants and asking for a choice."""

from __future__ import annotations

import pytest

from polewise.errors import EXIT_NETLIST_WRONG, SamplingChoice
from polewise.solve.sampling import count_instants, require_choice


def _system(build):
    b = build()
    b.state("v", 0.0)
    b.parameter("held", 0.0)
    b.parameter("other", 0.0)
    b.clock("one", 25e-6, 0, held=b.x("v"))
    b.clock("two", 25e-6, 1, other=b.x("v"))
    b.clock("slow", 1e-3, 0, held=b.x("v"))
    return b.system()


def test_clocks_of_one_period_share_their_instants(build):
    assert count_instants(_system(build), 1e-3) == 41 + 2


def test_a_million_instants_need_a_choice(build):
    system = _system(build)
    require_choice(system, 20.0, None, study="short", span=None)
    require_choice(system, 3600.0, "exact", study="long", span=None)
    with pytest.raises(SamplingChoice) as caught:
        require_choice(system, 3600.0, None, study="long", span=None)
    assert "1.48e+08" in caught.value.diagnostic.headline
    assert "`sampling = exact`" in caught.value.diagnostic.hint
    assert "`sampling = mean`" in caught.value.diagnostic.hint
    assert caught.value.exit_code == EXIT_NETLIST_WRONG
