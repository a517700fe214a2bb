"""The command line: every verb explains itself quickly, every failure is one line and an exit status."""

from __future__ import annotations

import subprocess
import sys
import time
from pathlib import Path

import pytest

from nearhand.client.command import VERBS

ROOT = Path(__file__).parents[2]
NEARHAND = [sys.executable, "-m", "nearhand.client.command"]


def run(*words: str) -> subprocess.CompletedProcess[str]:
    """Run the command line in a process of its own."""
    return subprocess.run([*NEARHAND, *words], capture_output=True, text=True, timeout=60, check=False)


@pytest.mark.parametrize("verb", VERBS)
def test_help_of_each_verb(verb: str) -> None:
    answer = run(verb, "--help")
    assert answer.returncode == 0
    assert answer.stdout.startswith(f"usage: nearhand {verb}")
    assert "--json" in answer.stdout


def test_help_appears_quickly() -> None:
    """Goal: under 0.4 s on an idle machine, or so many starts of a bare interpreter where the machine is busy."""
    seconds, bare = [], []
    for _ in range(5):
        begin = time.perf_counter()
        run("distil", "--help")
        seconds.append(time.perf_counter() - begin)
        begin = time.perf_counter()
        subprocess.run([sys.executable, "-c", ""], check=True, timeout=60)
        bare.append(time.perf_counter() - begin)
    assert min(seconds) < max(0.4, 16 * min(bare)), (seconds, bare)


def test_no_help_text_loads_the_learning_library() -> None:
    code = (
        "import sys, importlib\n"
        "from nearhand.client.command import VERBS\n"
        "for verb in VERBS: importlib.import_module(f'nearhand.client.commands.{verb}')\n"
        "print('torch' in sys.modules)"
    )
    answer = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True, timeout=60)
    assert answer.stdout.strip() == "False"


def test_the_overview_names_every_verb_and_the_version() -> None:
    answer = run("--help")
    assert answer.returncode == 0
    assert all(f"  {verb}" in answer.stdout for verb in VERBS)
    assert run("--version").stdout.startswith("nearhand ")


@pytest.mark.parametrize(
    ("words", "status", "part"),
    [
        (("frobnicate",), 2, "no verb 'frobnicate'"),
        (("measure", "--service", "tcp://127.0.0.1:9", "1"), 4, "nearhand serve"),
        (("collect", "--service", "tcp://127.0.0.1:9", "--rig", "missing.toml"), 1, "missing.toml"),
        (("serve", "--host", "0.0.0.0"), 1, "loopback"),
    ],
)
def test_failures_are_one_line_and_an_exit_status(words: tuple[str, ...], status: int, part: str) -> None:
    answer = run(*words)
    assert answer.returncode == status
    lines = answer.stderr.strip().splitlines()
    assert len(lines) == 1, answer.stderr
    assert part in lines[0]
    assert "Traceback" not in answer.stderr


def test_each_verb_is_described_in_the_readme() -> None:
    text = (ROOT / "README.md").read_text(encoding="utf-8")
    assert [verb for verb in VERBS if f"nearhand {verb}" not in text] == []
