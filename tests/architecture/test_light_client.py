"""The rig's computer: what the client imports and does where nothing but its four dependencies is installed."""

from __future__ import annotations

import importlib.metadata
import re
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]
CODE = """
import importlib.util, sys
sys.path[:0] = [sys.argv[1]]
for absent in ("torch", "scipy", "safetensors", "rich", "matplotlib", "jinja2", "pytest", "gymnasium"):
    assert importlib.util.find_spec(absent) is None, absent
from pathlib import Path
import numpy as np
from nearhand.client.demos import DemonstrationStream
from nearhand.client.desk import Desk, Feed
from nearhand.client.link import RigLink
from nearhand.configs import builtin_text
from nearhand.service.rigs import rig_from_toml
rig = rig_from_toml(builtin_text("rigs", "crane"))
with RigLink(rig, "ipc://" + sys.argv[2] + "/action", wait_s=0.0) as link:
    drive = link.exchange(np.zeros(len(rig.observations)))
    assert drive.mode == "latched" and np.isfinite(drive.action).all()
with DemonstrationStream(rig, "ipc://" + sys.argv[2] + "/intake", Path(sys.argv[2]) / "spool") as stream:
    recording = stream.open("ann")
    recording.add(0.0, np.zeros(len(rig.observations)), np.zeros(len(rig.actions)))
    recording.close("success", np.zeros(len(rig.observations)))
    stream.close(timeout_s=0.0)
assert not {"torch", "sqlite3", "asyncio"} & set(sys.modules), "heavier than it need be"
print("light")
"""


def installed_with(names: list[str]) -> set[str]:
    """Return the distributions that these packages need, themselves included."""
    found: set[str] = set()
    waiting = list(names)
    while waiting:
        name = re.sub(r"[-_.]+", "-", waiting.pop()).lower()
        if name in found:
            continue
        found.add(name)
        for line in importlib.metadata.distribution(name).requires or []:
            if ";" not in line:
                waiting.append(re.split(r"[\s<>=!~\[(]", line, maxsplit=1)[0])
    return found


@pytest.fixture
def bare(tmp_path: Path) -> Path:
    """A folder that holds the product and its four dependencies and nothing else, to be the whole of sys.path."""
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    folder = tmp_path / "bare"
    (folder / "nearhand").mkdir(parents=True)
    for top in ("service", "client", "configs"):
        (folder / "nearhand" / top).symlink_to(ROOT / top)
    for name in installed_with([re.split(r"[<>=\[]", line)[0] for line in project["dependencies"]]):
        distribution = importlib.metadata.distribution(name)
        for top in {file.parts[0] for file in distribution.files or [] if file.parts[0] not in ("..", "__pycache__")}:
            (folder / top).symlink_to(str(distribution.locate_file(top)))
    return folder


def test_the_light_client_works_with_its_four_dependencies_alone(bare: Path, tmp_path: Path) -> None:
    """``-I -S`` leaves out site-packages, the environment and the current folder."""
    answer = subprocess.run(
        [sys.executable, "-I", "-S", "-c", CODE, str(bare), str(tmp_path)],
        capture_output=True, text=True, timeout=60, check=False,
    )  # fmt: skip
    assert (answer.stdout.strip(), answer.stderr) == ("light", "")
