"""How a service starts and stops: quickly, in order, alone on its data, whatever a dead one has left behind."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from nearhand.client.desk import Desk
from nearhand.client.tryout.service_process import ServiceProcess
from nearhand.configs import builtin_text
from nearhand.service.bus import desk_messages as messages
from nearhand.service.errors import StoreError
from nearhand.service.main import take_lock
from nearhand.service.store.store import Store

NEARHAND = [sys.executable, "-m", "nearhand.client.command"]
ACTION_SERVER = "nearhand.service.action.process"
KEEPER = "nearhand.service.keeper.process"


def processor_s(number: int) -> float:
    """Return the processor time that a process has used (proc(5): utime and stime, in clock ticks)."""
    fields = Path(f"/proc/{number}/stat").read_text(encoding="ascii").rsplit(")", 1)[1].split()
    return (int(fields[11]) + int(fields[12])) / os.sysconf("SC_CLK_TCK")


def is_running(number: int) -> bool:
    """Return whether a process still runs; one that only waits to be collected does not (proc(5): state Z)."""
    try:
        return Path(f"/proc/{number}/stat").read_text(encoding="ascii").rsplit(")", 1)[1].split()[0] not in "ZX"
    except (FileNotFoundError, ProcessLookupError):
        return False


def test_a_clean_start_takes_under_two_seconds_of_processor_and_loads_no_torch(tmp_path: Path) -> None:
    with ServiceProcess(tmp_path / "data") as service:
        numbers = [service.process_number(module) for module in (ACTION_SERVER, KEEPER)]
        assert sum(map(processor_s, [*numbers, service.number])) < 2.0
        for number in numbers:
            assert "torch" not in Path(f"/proc/{number}/maps").read_text(encoding="utf-8")
        assert "sqlite" not in Path(f"/proc/{numbers[0]}/maps").read_text(encoding="utf-8")


def test_sigterm_latches_the_rigs_and_the_record_says_so(tmp_path: Path) -> None:
    with ServiceProcess(tmp_path / "data") as service, Desk(service.lanes["desk"]) as desk:
        desk.ask(messages.PutRig, messages.RigReply, toml=builtin_text("rigs", "crane"), who="test")
        end_s = time.monotonic() + 5.0
        while not desk.ask(messages.GetHealth, messages.HealthReply).rigs["crane"].get("mode"):
            assert time.monotonic() < end_s
        service.stop()
        assert "killed" not in service.log.read_text(encoding="utf-8")
    store = Store(tmp_path / "data" / "nearhand.sqlite3")
    last = store.events.after(0)[-1]
    store.close()
    assert (last.rig, last.what, last.detail["who"]) == ("crane", "latched", "service")


def test_ctrl_c_in_a_terminal_ends_it_in_order_as_well(tmp_path: Path) -> None:
    """A terminal sends SIGINT to the whole foreground process group."""
    words = [*NEARHAND, "serve", "--data", str(tmp_path / "data"), "--pick-ports", "--json"]
    with subprocess.Popen(words, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, process_group=0) as process:
        assert process.stdout is not None
        assert json.loads(process.stdout.readline())["desk"]
        os.killpg(process.pid, signal.SIGINT)
        _, log = process.communicate(timeout=20)
    assert process.returncode == 0
    assert "Traceback" not in log
    assert log.splitlines()[-1].endswith("stopped")
    assert "ended process" not in log


def test_what_a_dead_service_has_left_holds_nobody_up(tmp_path: Path) -> None:
    data = tmp_path / "data"
    with ServiceProcess(data) as first:
        children = [first.process_number(module) for module in (ACTION_SERVER, KEEPER)]
        os.kill(first.number, signal.SIGKILL)
        for name in ("lock", "settings.json", "control.ipc", "progress.ipc"):
            assert (data / "run" / name).exists()
        with ServiceProcess(data) as second, Desk(second.lanes["desk"]) as desk:
            desk.ask(messages.ListRigs, messages.RigsReply)
            assert [second.process_number(module) for module in (ACTION_SERVER, KEEPER)] != children
            assert not any(map(is_running, children))


def test_a_lock_of_garbage_is_taken_over_and_a_living_one_is_not(tmp_path: Path) -> None:
    (tmp_path / "run").mkdir()
    (tmp_path / "run" / "lock").write_text("999999999 no such process\n" * 50)
    with take_lock(tmp_path, patience_s=0.0) as lock:
        with pytest.raises(StoreError, match=str(os.getpid())) as caught:
            take_lock(tmp_path, patience_s=0.0)
        assert caught.value.code == "store.in_use"
        assert not lock.closed
    take_lock(tmp_path, patience_s=0.0).close()
