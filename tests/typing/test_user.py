"""The typed surface: mypy accepts a user's file in strict mode, and what it says is true when run."""

from __future__ import annotations

import importlib.util
import math
import subprocess
import sys
from pathlib import Path

import pytest

import polewise

USER = Path(__file__).with_name("user.py")


def test_mypy_accepts_a_users_file() -> None:
    pytest.importorskip("mypy")
    done = subprocess.run(
        [sys.executable, "-m", "mypy", "--strict", "--cache-dir", ".mypy_cache/user", "--config-file", "", str(USER)],
        capture_output=True,
        text=True,
        check=False,
        cwd=USER.parents[2],
    )
    assert done.returncode == 0, done.stdout + done.stderr


def test_it_runs() -> None:
    spec = importlib.util.spec_from_file_location("user_of_polewise", USER)
    assert spec is not None
    assert spec.loader is not None
    user = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(user)
    system = user.read()
    assert user.use(system) == pytest.approx(10.0 * math.exp(-0.5), rel=1e-6)
    assert user.rest(system) == pytest.approx(0.0, abs=1e-9)


def test_every_public_name_resolves_and_is_documented() -> None:
    for name in polewise.__all__:
        value = getattr(polewise, name)
        if name != "__version__":
            assert value.__doc__, name
    assert set(polewise.__all__) <= set(dir(polewise))
    with pytest.raises(AttributeError):
        _ = polewise.no_such_name  # type: ignore[attr-defined]


def test_importing_the_package_loads_nothing_heavy() -> None:
    script = "import sys, polewise; print([m for m in ('numpy', 'numba', 'scipy', 'networkx', 'lark', 'click') if m in sys.modules])"
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"
