"""House rules that a reader of the code may rely on, each failing with a sentence."""

from __future__ import annotations

import ast
import importlib.util
import re
import subprocess
import sys
import tomllib
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
PROJECT = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))
FOLDERS: dict[str, str] = PROJECT["tool"]["setuptools"]["package-dir"]

# Imports point down this list only; parts on one line do not know each other.
LAYERS = (
    ("__main__",),
    ("terminal",),
    ("api",),
    ("analysis",),
    ("analysis",),
    ("results",),
    ("solve",),
    ("equations",),
    ("network",),
    ("circuit",),
    ("devices",),
    ("expression",),
    ("errors",),
    ("grammar", "kernels"),
)
DEPTH = {part: depth for depth, parts in enumerate(LAYERS) for part in parts}
LEAVES = {  # parts that import nothing of ours but themselves, and what else they may import
    "grammar": {"lark"},
    "kernels": {"numpy", "numba"},
}
LONGEST_FILE_LINES = 800  # files that only word messages are lists and may be longer
TEXT_SUFFIXES = {".py", ".md", ".pole", ".lark", ".toml", ".csv", ".yml", ".yaml", ".cfg", ".txt", ""}


def _modules() -> list[tuple[str, Path]]:
    """Every module of the package as (dotted name, file)."""
    found = []
    for package, folder in FOLDERS.items():
        for file in sorted((ROOT / folder).rglob("*.py")):
            parts = file.relative_to(ROOT / folder).with_suffix("").parts
            found.append((".".join((package, *(p for p in parts if p != "__init__"))), file))
    return found


MODULES = _modules()
TREES = {name: ast.parse(file.read_text(encoding="utf-8")) for name, file in MODULES}


def _part(module: str) -> str | None:
    """The part of the house a module belongs to: second name of its dotted path, None for the root itself."""
    names = module.split(".")
    return names[1] if len(names) > 1 else None


def _imports(tree: ast.Module) -> Iterator[tuple[str, int, int]]:
    """Imported module, relative level, line."""
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            for alias in node.names:
                yield alias.name, 0, node.lineno
        elif isinstance(node, ast.ImportFrom):
            yield node.module or "", node.level, node.lineno


@pytest.mark.parametrize(("module", "file"), MODULES, ids=[name for name, _ in MODULES])
def test_imports_point_down(module: str, file: Path) -> None:
    own = _part(module)
    for target, level, line in _imports(TREES[module]):
        place = f"{file.relative_to(ROOT)}:{line}"
        assert level == 0, f"{place}: a relative import; write `from polewise.… import …`"
        first = target.split(".")[0]
        assert first not in {"engine", "circuits"}, f"{place}: `{target}` is a folder's name; the package is `polewise`"
        assert first != "grammar", f"{place}: `{target}` is a folder's name; the package is `polewise.grammar`"
        if own is None:
            continue  # the root re-exports lazily
        if first != "polewise":
            if own in LEAVES:
                allowed = first in LEAVES[own] or first in sys.stdlib_module_names
                assert allowed, f"{place}: {own} may not import `{target}`"
            continue
        other = _part(target)
        assert other is not None, f"{place}: nobody inside imports the `polewise` root"
        if other == own:
            continue
        assert own in DEPTH, f"{place}: `{own}` has no place in the order of imports"
        assert other in DEPTH, f"{place}: `{other}` has no place in the order of imports"
        assert DEPTH[other] > DEPTH[own], f"{place}: {own} may not import {other}: imports point down"


def test_every_folder_is_listed() -> None:
    listed = set(PROJECT["tool"]["setuptools"]["packages"])
    for name, file in MODULES:
        package = name if file.name == "__init__.py" else name.rpartition(".")[0]
        assert package in listed, f"{file.relative_to(ROOT)}: package `{package}` is missing in pyproject.toml, tool.setuptools.packages"
        assert (file.parent / "__init__.py").exists(), f"{file.parent.relative_to(ROOT)} has no __init__.py"


@pytest.mark.parametrize("module", [name for name, _ in MODULES])
def test_every_module_is_installed(module: str) -> None:
    assert importlib.util.find_spec(module) is not None, f"`{module}` is not installed: run `pip install -e .` again"


@pytest.mark.parametrize(("module", "file"), MODULES, ids=[name for name, _ in MODULES])
def test_docstring_says_what_the_file_is_for(module: str, file: Path) -> None:
    document = ast.get_docstring(TREES[module])
    assert document, f"{file.relative_to(ROOT)} has no docstring"
    first = document.splitlines()[0]
    assert len(first) > 15, f"{file.relative_to(ROOT)}: the docstring's first line should say which idea the file owns"
    lines = len(file.read_text(encoding="utf-8").splitlines())
    assert lines <= LONGEST_FILE_LINES or file.name == "messages.py", f"{file.relative_to(ROOT)} has {lines} lines: it holds more than one idea"


def _cached_kernels(tree: ast.Module) -> Iterator[tuple[ast.FunctionDef, list[ast.FunctionDef]]]:
    """Functions with a decorator that has cache=True, with the functions around them."""

    def visit(node: ast.AST, around: list[ast.FunctionDef]) -> Iterator[tuple[ast.FunctionDef, list[ast.FunctionDef]]]:
        for child in ast.iter_child_nodes(node):
            if isinstance(child, ast.FunctionDef):
                for decorator in child.decorator_list:
                    keywords = decorator.keywords if isinstance(decorator, ast.Call) else []
                    if any(k.arg == "cache" and not (isinstance(k.value, ast.Constant) and k.value.value is False) for k in keywords):
                        yield child, around
                yield from visit(child, [*around, child])
            else:
                yield from visit(child, around)

    yield from visit(tree, [])


def test_cached_kernels_carry_the_stamp() -> None:
    """numba's cache does not see edits in other files: every cached kernel closes over the hash of the kernels' folder."""
    seen = 0
    for module, file in MODULES:
        for kernel, around in _cached_kernels(TREES[module]):
            seen += 1
            place = f"{file.relative_to(ROOT)}:{kernel.lineno}"
            assert _part(module) == "kernels", f"{place}: compiled code belongs to engine/kernels"
            takes = any(argument.arg == "stamp" for outer in around for argument in outer.args.args)
            reads = any(isinstance(n, ast.Name) and n.id == "stamp" for n in ast.walk(kernel))
            closes_over_stamp = takes and reads
            assert closes_over_stamp, f"{place}: `{kernel.name}` is cached but does not close over `stamp`; see kernels/stamp.py"
    assert seen > 0, "no cached kernel found: has the way of writing them changed?"


def test_nothing_executes_text() -> None:
    for module, file in MODULES:
        for node in ast.walk(TREES[module]):
            if isinstance(node, ast.Call) and isinstance(node.func, ast.Name):
                assert node.func.id not in {"eval", "exec", "compile", "__import__"}, f"{file.relative_to(ROOT)}:{node.lineno}: `{node.func.id}`"
        for target, _, line in _imports(TREES[module]):
            assert target.split(".")[0] not in {"pickle", "marshal", "shelve", "dill"}, f"{file.relative_to(ROOT)}:{line}: `{target}` can run code"


def test_only_the_terminal_prints() -> None:
    for module, file in MODULES:
        if _part(module) == "terminal":
            continue
        for node in ast.walk(TREES[module]):
            prints = isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and node.func.id == "print"
            assert not prints, f"{file.relative_to(ROOT)}:{getattr(node, 'lineno', 0)}: only the terminal prints"


def test_import_is_light() -> None:
    """Importing the package, or reading a netlist's text, loads no kernel, no scipy, no networkx."""
    code = (
        "import sys, polewise, polewise.grammar.parser\n"
        "heavy = sorted(m for m in ('numba', 'scipy', 'networkx', 'pandas', 'matplotlib', 'pyarrow', 'polewise.kernels') if m in sys.modules)\n"
        "print(' '.join(heavy))\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True, timeout=60)
    assert done.stdout.strip() == "", f"importing polewise loads {done.stdout.strip()}"


def _tracked_files() -> list[Path]:
    done = subprocess.run(["git", "ls-files", "-z"], cwd=ROOT, capture_output=True, text=True, check=False, timeout=60)
    if done.returncode != 0:
        pytest.skip("not a git checkout")
    return [ROOT / name for name in done.stdout.split("\0") if name and (ROOT / name).suffix in TEXT_SUFFIXES]


# Written in pieces so that this file does not find itself.
_MACHINE_PATHS = re.compile(r"(?<![\w.])/(?:" + "|".join(("wo" + "rk", "ro" + "ot", "ho" + "me", "Use" + "rs", "t" + "mp")) + r")/\w")
_MACHINE_HOSTS = re.compile("files[.]python" + "hosted|pypi[.]" + "org/simple|index-" + "url|local" + "host:|127[.]0[.]0[.]1")


def test_no_machine_paths() -> None:
    for file in _tracked_files():
        if not file.is_file():
            continue
        for number, line in enumerate(file.read_text(encoding="utf-8", errors="replace").splitlines(), 1):
            for pattern in (_MACHINE_PATHS, _MACHINE_HOSTS):
                found = pattern.search(line)
                assert not found, f"{file.relative_to(ROOT)}:{number}: `{found.group() if found else ''}` belongs to one machine"
