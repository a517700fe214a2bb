"""Dependencies: every one has a lower bound that is tested, a version to reproduce, a reason and a licence."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path

ROOT = Path(__file__).parents[2]
#: Not needed to run the tests without torch, so without a place among the lower bounds that are tested there.
ELSEWHERE = {"torch", "gymnasium", "mujoco", "mypy", "ruff", "scikit-learn", "statsmodels"}


def pins(name: str) -> dict[str, tuple[int, ...]]:
    """Return package → version from a file of ``name==version`` lines."""
    lines = (ROOT / ".ci" / name).read_text(encoding="utf-8").splitlines()
    found = dict(line.split("==") for line in lines if line and not line.startswith("#"))
    return {package: numbers(version) for package, version in found.items()}


def numbers(version: str) -> tuple[int, ...]:
    """Return a version's first three numbers."""
    parts = [int(part) for part in re.findall(r"\d+", version)[:3]]
    return tuple(parts + [0] * (3 - len(parts)))


def bounds() -> dict[str, tuple[int, ...]]:
    """Return package → lower bound, of all extras."""
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    lines = [*project["dependencies"], *(line for extra in project["optional-dependencies"].values() for line in extra)]
    found = {}
    for line in lines:
        match = re.fullmatch(r"([a-z0-9-]+)(?:\[\w+\])?(?:>=|==)([\d.]+)", line.strip())
        if match is None:
            assert line.startswith("nearhand["), f"{line}: no lower bound"
            continue
        found[match[1]] = numbers(match[2])
    return found


def test_the_tested_lower_bounds_are_those_that_are_admitted() -> None:
    tested = pins("lower-bounds.txt")
    assert {name: tested.get(name) for name in bounds() if name not in ELSEWHERE} == {
        name: version for name, version in bounds().items() if name not in ELSEWHERE
    }


def test_the_constraints_name_every_dependency_within_its_bounds() -> None:
    pinned = pins("constraints.txt")
    assert {name for name, lowest in bounds().items() if pinned.get(name, (0,)) < lowest} == set()


def test_each_dependency_has_a_licence_in_the_developers_page() -> None:
    text = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
    told = re.search(r"Licences, as the packages state them: (.*?)\n\n", text, re.DOTALL)
    assert told is not None
    entries = {part.strip().split()[0] for part in re.split(r"[,.:]\s|Tests only:", told[1]) if part.strip()}
    assert {name for name in bounds() if name not in entries} == set()


def test_the_systemd_unit_stops_as_the_service_does() -> None:
    readme = (ROOT / "README.md").read_text(encoding="utf-8")
    unit = readme.split("<!-- systemd-unit -->\n```ini\n")[1].split("```")[0]
    settings = dict(line.split("=", 1) for line in unit.splitlines() if "=" in line)
    assert settings["ExecStart"].split()[1:3] == ["serve", "--data"]
    assert settings["KillMode"] == "mixed", "SIGTERM for the supervisor alone, which ends the others in order"
    assert settings["ReadWritePaths"] == settings["ExecStart"].split()[-1]
