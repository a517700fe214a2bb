"""Checking, backing up and restoring a data folder as an operator types it, with and without a service running."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path
from typing import Any

from nearhand.client.desk import Desk
from nearhand.client.tryout.service_process import ServiceProcess
from nearhand.configs import builtin_text
from nearhand.service.bus import desk_messages as messages

NEARHAND = [sys.executable, "-m", "nearhand.client.command"]


def run(*words: str | Path) -> tuple[int, dict[str, Any]]:
    """Return exit status and the printed object."""
    answer = subprocess.run(
        [*NEARHAND, *map(str, words), "--json"], capture_output=True, text=True, timeout=60, check=False
    )
    return answer.returncode, json.loads(answer.stdout)


def put(desk: Desk, name: str) -> None:
    """Register the crane under a name."""
    toml = builtin_text("rigs", "crane").replace('name = "crane"', f'name = "{name}"', 1)
    desk.ask(messages.PutRig, messages.RigReply, toml=toml, who="test")


def test_back_up_while_serving_check_damage_and_restore(tmp_path: Path) -> None:
    data = tmp_path / "data"
    with ServiceProcess(data) as service, Desk(service.lanes["desk"]) as desk:
        put(desk, "first")
        status, made = run("backup", "make", "--data", data)
        assert status == 0
        put(desk, "second")
        status, found = run("serve", "--check", data)
        assert (status, found["intact"]) == (0, True)
        status, refused = run("backup", "restore", "--data", data, "--who", "ann")
        assert (status, refused["error"]["code"]) == (1, "store.in_use")
        assert len(desk.ask(messages.ListRigs, messages.RigsReply).rigs) == 2
    database = data / "nearhand.sqlite3"
    content = database.read_bytes()
    database.write_bytes(content[:8192] + b"\xa5" * (len(content) - 8192))
    status, found = run("serve", "--check", data)
    assert (status, found["intact"]) == (1, False)
    assert any("backup restore" in row["advice"] for row in found["findings"])
    answer = subprocess.run(
        [*NEARHAND, "serve", "--data", str(data), "--pick-ports"],
        capture_output=True, text=True, timeout=60, check=False,
    )  # fmt: skip
    assert answer.returncode == 1
    assert "damaged" in answer.stderr
    assert run("backup", "list", "--data", data)[1]["backups"] == [
        {key: made[key] for key in ("file", "utc", "size_bytes", "events")}
    ]
    status, done = run("backup", "restore", "--data", data, "--who", "ann", "--why", "the disk was damaged")
    assert status == 0
    assert (Path(done["aside"]) / "nearhand.sqlite3").exists()
    with ServiceProcess(data) as service, Desk(service.lanes["desk"]) as desk:
        assert [rig["rig"] for rig in desk.ask(messages.ListRigs, messages.RigsReply).rigs] == ["first"]
        events = desk.ask(messages.ListEvents, messages.EventsReply).events
        assert [(event["who"], event["why"]) for event in events if event["what"] == "restored"] == [
            ("ann", "the disk was damaged")
        ]
        assert desk.ask(messages.VerifyEvents, messages.VerifyReply).intact


def test_a_folder_without_a_database_is_said_to_have_none(tmp_path: Path) -> None:
    status, found = run("serve", "--check", tmp_path)
    assert (status, found["intact"]) == (1, False)
    status, error = run("serve", "--check", tmp_path / "nowhere")
    assert (status, error["error"]["code"]) == (1, "config.data")
    status, error = run("backup", "make", "--data", tmp_path)
    assert (status, error["error"]["code"]) == (1, "store.access")


def test_a_newer_database_is_refused_by_the_service_with_what_to_do(tmp_path: Path) -> None:
    with ServiceProcess(tmp_path / "data") as service, Desk(service.lanes["desk"]) as desk:
        put(desk, "first")
    code = (
        "import sqlite3, sys; c = sqlite3.connect(sys.argv[1], isolation_level=None); "
        "c.execute(\"INSERT INTO migrations VALUES (99, 'later', '')\")"
    )
    subprocess.run([sys.executable, "-c", code, str(tmp_path / "data" / "nearhand.sqlite3")], check=True, timeout=30)
    answer = subprocess.run(
        [*NEARHAND, "serve", "--data", str(tmp_path / "data"), "--pick-ports"],
        capture_output=True, text=True, timeout=60, check=False,
    )  # fmt: skip
    assert answer.returncode == 1
    assert "newer release" in answer.stderr
    assert run("serve", "--check", tmp_path / "data")[0] == 1
