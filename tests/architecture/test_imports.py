"""Who may import whom: over the source, and over what is truly loaded."""

from __future__ import annotations

import ast
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]
TOPS = ("service", "client", "sim", "configs")
SOURCES = sorted(path for top in TOPS for path in (ROOT / top).rglob("*.py"))

#: Package prefix → prefixes that nothing below it may import.
INSIDE = "nearhand.service"
LIBRARIES = ("torch", "sqlite3", "scipy")
FORBIDDEN = {
    INSIDE: ("nearhand.client", "nearhand.sim"),
    f"{INSIDE}.bus": (
        *LIBRARIES,
        *(f"{INSIDE}.{part}" for part in ("action", "envelope", "keeper", "learn", "measure", "store", "policy")),
    ),
    f"{INSIDE}.envelope": (*LIBRARIES, "zmq", f"{INSIDE}.bus", f"{INSIDE}.action"),
    f"{INSIDE}.policy": (*LIBRARIES, "zmq", f"{INSIDE}.bus", f"{INSIDE}.action"),
    f"{INSIDE}.action": (*LIBRARIES, *(f"{INSIDE}.{part}" for part in ("keeper", "learn", "measure", "store"))),
    f"{INSIDE}.store": ("torch", "zmq", *(f"{INSIDE}.{part}" for part in ("action", "keeper", "learn"))),
    f"{INSIDE}.learn": ("sqlite3", *(f"{INSIDE}.{part}" for part in ("action", "keeper", "measure", "store"))),
    f"{INSIDE}.measure": ("torch", "sqlite3", *(f"{INSIDE}.{part}" for part in ("keeper", "learn", "store"))),
    f"{INSIDE}.keeper": ("torch", "sqlite3", f"{INSIDE}.learn"),
    "nearhand.client": ("torch", "sqlite3", "nearhand.sim", *(f"{INSIDE}.{p}" for p in ("keeper", "learn", "store"))),
    "nearhand.sim": ("torch", "sqlite3", *(f"{INSIDE}.{part}" for part in ("keeper", "learn", "store"))),
}


def module_name(path: Path) -> str:
    """Return a source file's full module name."""
    parts = ("nearhand", *path.relative_to(ROOT).with_suffix("").parts)
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


def imported(path: Path) -> set[str]:
    """Return the full names that a file imports, wherever in it, type checking aside."""
    names: set[str] = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            names.update(alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative import"
            names.add(str(node.module))
            names.update(f"{node.module}.{alias.name}" for alias in node.names)
    return names


def within(name: str, prefix: str) -> bool:
    """Tell whether a module is ``prefix`` or lies in it."""
    return name == prefix or name.startswith(f"{prefix}.")


@pytest.mark.parametrize("path", SOURCES, ids=module_name)
def test_each_file_imports_only_what_its_package_may(path: Path) -> None:
    name = module_name(path)
    for package, banned in FORBIDDEN.items():
        if within(name, package):
            crossing = {one for one in imported(path) for prefix in banned if within(one, prefix)}
            assert not crossing, f"{name} is in {package}, which must not import {sorted(crossing)}"


def test_only_their_owner_imports_torch_and_sqlite() -> None:
    owners = {"torch": "nearhand.service.learn", "sqlite3": "nearhand.service.store"}
    for path in SOURCES:
        for library, owner in owners.items():
            if any(within(one, library) for one in imported(path)):
                assert within(module_name(path), owner), f"{module_name(path)} imports {library}"


def test_only_the_loop_of_the_simulator_imports_the_client() -> None:
    allowed = {"nearhand.sim.loop", "nearhand.sim.rig_process"}
    for path in (ROOT / "sim").rglob("*.py"):
        if any(within(one, "nearhand.client") for one in imported(path)):
            assert module_name(path) in allowed


def test_imports_form_no_circle() -> None:
    names = {module_name(path): path for path in SOURCES}
    graph = {
        name: {one for one in imported(path) if one in names and one != name and not one.startswith(f"{name}.")}
        for name, path in names.items()
    }
    done: set[str] = set()

    def visit(name: str, trail: tuple[str, ...]) -> None:
        assert name not in trail, " → ".join((*trail[trail.index(name) :], name))
        if name not in done:
            for one in sorted(graph[name]):
                visit(one, (*trail, name))
            done.add(name)

    for name in sorted(graph):
        visit(name, ())


@pytest.mark.parametrize(
    ("module", "absent"),
    [
        ("nearhand.service.action.process", ("torch", "sqlite3", "scipy", "nearhand.service.keeper")),
        ("nearhand.service.keeper.process", ("torch", "nearhand.service.learn", "nearhand.sim", "nearhand.client")),
        ("nearhand.client.link", ("torch", "sqlite3", "scipy", "safetensors", "rich", "matplotlib")),
        ("nearhand.client.demos", ("torch", "sqlite3", "scipy", "safetensors", "rich", "matplotlib")),
        ("nearhand.client.command", ("torch", "sqlite3", "scipy", "numpy", "zmq", "rich", "matplotlib")),
    ],
)
def test_a_fresh_process_loads_no_more_than_it_may(module: str, absent: tuple[str, ...]) -> None:
    code = f"import sys, {module}; print([name for name in {absent!r} if name in sys.modules])"
    answer = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True, timeout=60)
    assert answer.stdout.strip() == "[]"


def test_every_package_on_disk_is_listed_for_the_wheel() -> None:
    table = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))
    listed = set(table["tool"]["setuptools"]["packages"])
    found = {module_name(path) for path in SOURCES if path.name == "__init__.py"}
    assert listed == found


def test_nothing_but_the_agreed_names_stands_at_the_top() -> None:
    answer = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=True, timeout=60)
    tops = {line.split("/", 1)[0] for line in answer.stdout.splitlines()}
    agreed = {"README.md", "DEVELOPERS.md", "SAFETY.md", "pyproject.toml", "LICENSE", *TOPS, "tests"}
    assert {name for name in tops if not name.startswith(".")} <= agreed


def test_no_source_file_is_longer_than_one_room() -> None:
    long = {module_name(path): n for path in SOURCES if (n := len(path.read_text(encoding="utf-8").splitlines())) > 450}
    assert not long
