"""A small rig, and a real keeper process to deliver to."""

from __future__ import annotations

import contextlib
import os
import signal
import socket
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

from nearhand.client.desk import Desk
from nearhand.client.link import RigLink
from nearhand.service.bus.desk_messages import PutRig, RigReply
from nearhand.service.config import ServiceSettings
from nearhand.service.rigs import Rig, rig_from_toml
from tests.client.pretenders import Context, Pace, Pretender, Rigged, Server, crane, policy_bytes

RIG_TOML = """
name = "cart"
title = "Cart on a track"
observations = [
    { name = "position", unit = "m", low = -2.0, high = 2.0 },
    { name = "speed", unit = "m/s", low = -1.0, high = 1.0 },
    { name = "angle", unit = "rad", low = -0.5, high = 0.5 },
]
actions = [{ name = "push", unit = "m/s2", low = -1.0, high = 1.0, slew_per_s = 10.0 }]

[timing]
period_s = 0.02
deadline_s = 0.06
lease_s = 0.06
"""


@pytest.fixture(scope="session")
def rig() -> Rig:
    """A rig with three observation channels and one action channel."""
    return rig_from_toml(RIG_TOML)


def free_port() -> int:
    """Return a port that is free at this moment."""
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


class KeeperProcess:
    """The keeper in a process of its own, which can be killed and started again on the same folder and ports."""

    def __init__(self, folder: Path) -> None:
        self.settings = ServiceSettings(
            data=folder,
            action="tcp://127.0.0.1:1",
            intake=f"tcp://127.0.0.1:{free_port()}",
            desk=f"tcp://127.0.0.1:{free_port()}",
            feed=f"tcp://127.0.0.1:{free_port()}",
            control=f"ipc://{folder}/control",
            progress=f"ipc://{folder}/progress",
        )
        folder.mkdir(parents=True, exist_ok=True)
        self._file = folder / "settings.json"
        self._file.write_text(self.settings.model_dump_json(), encoding="utf-8")
        self._log = (folder / "keeper.log").open("ab")
        self._process: subprocess.Popen[bytes] | None = None
        self.start()

    def start(self) -> None:
        """Start it and return once it listens."""
        readable, writable = os.pipe()
        self._process = subprocess.Popen(
            [
                sys.executable, "-m", "nearhand.service.keeper.process", "--settings", str(self._file),
                "--ready-fd", str(writable), "--parent", str(os.getpid()),
            ],
            pass_fds=[writable], stderr=self._log,
        )  # fmt: skip
        os.close(writable)
        said = os.read(readable, 16)
        os.close(readable)
        assert said == b"ready\n", Path(self._log.name).read_text(encoding="utf-8")

    def kill(self) -> None:
        """End it with SIGKILL."""
        assert self._process is not None
        self._process.send_signal(signal.SIGKILL)
        self._process.wait()

    def stop(self) -> None:
        """End it."""
        assert self._process is not None
        with contextlib.suppress(ProcessLookupError):
            self._process.terminate()
        self._process.wait(20)
        self._log.close()


@pytest.fixture
def keeper(tmp_path: Path) -> Iterator[KeeperProcess]:
    """A running keeper that knows the rig."""
    process = KeeperProcess(tmp_path / "data")
    with Desk(process.settings.desk) as desk:
        desk.ask(PutRig, RigReply, toml=RIG_TOML, who="test")
    yield process
    process.stop()


@pytest.fixture
def pretender(context: Context) -> Iterator[Pretender]:
    """A service that can be told what to answer."""
    made = Pretender(context)
    yield made
    made.close()


@pytest.fixture
def rigged(pretender: Pretender) -> Iterator[Rigged]:
    """A link to the pretender."""
    made = Rigged(crane(), pretender.address)
    yield made
    made.link.close()


@pytest.fixture
def server(context: Context, tmp_path: Path) -> Iterator[Server]:
    """A running action server process."""
    made = Server(context, tmp_path)
    yield made
    made.close()


@pytest.fixture
def pace(server: Server) -> Iterator[Pace]:
    """A link to an armed server, armed as well."""
    server.load(policy_bytes())
    with RigLink(crane(), server.settings.action) as link:
        paced = Pace(link)
        # A busy machine may already have tripped the deadline while starting.
        while not (paced.drives and paced.drives[-1].mode == "armed" and paced.drives[-1].fresh):
            server.arm()
            paced.until(lambda drive: drive.fresh)
        yield paced
