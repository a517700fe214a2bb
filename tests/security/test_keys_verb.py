"""``nearhand keys`` as it is typed, and the other verbs with a key."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path
from typing import Any

from nearhand.client.tryout.service_process import ServiceProcess
from nearhand.service.bus.keys import KEY_VARIABLE, ClientKey, read_client_key

NEARHAND = [sys.executable, "-m", "nearhand.client.command"]


def run(*words: str | Path, key: Path | None = None) -> tuple[int, dict[str, Any]]:
    """Return exit status and the printed object; ``key`` goes by the environment."""
    environment = {name: value for name, value in os.environ.items() if name != KEY_VARIABLE}
    if key is not None:
        environment[KEY_VARIABLE] = str(key)
    answer = subprocess.run(
        [*NEARHAND, *map(str, words), "--json"],
        capture_output=True, text=True, timeout=120, check=False, env=environment,
    )  # fmt: skip
    return answer.returncode, json.loads(answer.stdout)


def test_new_list_revoke(tmp_path: Path) -> None:
    data, file = tmp_path / "data", tmp_path / "ann.key"
    assert run("keys", "list", "--data", data) == (0, {"keys": []})
    status, made = run("keys", "new", "ann", "--roles", "view, teach", "--data", data, "-o", file)
    assert (status, made["first"]) == (0, True)
    assert read_client_key(file).public == made["public"]
    assert "secret" not in made
    status, listed = run("keys", "list", "--data", data)
    assert [(row["name"], row["roles"], row["revoked_utc"]) for row in listed["keys"]] == [
        ("ann", ["view", "teach"], None)
    ]
    for words, code in (
        (("new", "ann", "--roles", "view", "-o", tmp_path / "2.key"), "conflict.key"),
        (("new", "bob", "--roles", "root", "-o", tmp_path / "3.key"), "config.roles"),
        (("new", "bob", "-o", tmp_path / "3.key"), "config.roles"),
        (("new",), "config.option"),
        (("revoke", "bob"), "unknown.name"),
    ):
        status, told = run("keys", *words, "--data", data)
        assert (status, told["error"]["code"]) == (1, code)
    status, revoked = run("keys", "revoke", "ann", "--data", data)
    assert status == 0
    assert revoked["revoked_utc"]


def test_verbs_take_a_key_by_option_and_by_environment_and_hand_it_on(
    service: ServiceProcess, chief: ClientKey, tmp_path: Path
) -> None:
    """``collect`` starts a process of its own for the simulated rig, which needs the key as well."""
    desk = ("--service", service.lanes["desk"])
    status, told = run("watch", *desk)
    assert (status, told["error"]["code"]) == (3, "refused.key")
    status, collected = run("collect", "--episodes", "1", *desk, "--key", tmp_path / "chief.key")
    assert status == 0
    assert collected["episodes"][0]["sent"] == collected["episodes"][0]["acknowledged"] > 0
    status, health = run("watch", *desk, key=tmp_path / "chief.key")
    assert (status, list(health["rigs"])) == (0, ["crane"])
    status, told = run("watch", *desk, "--key", tmp_path / "nowhere.key")
    assert (status, told["error"]["code"]) == (1, "config.key_unreadable")
