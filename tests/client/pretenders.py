"""What the link is tested against: a service that answers as it is told to, and a real action server process."""

from __future__ import annotations

import contextlib
import os
import select
import signal
import socket
import subprocess
import sys
import threading
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import msgpack
import numpy as np
import zmq

from nearhand.client.link import Drive, RigLink
from nearhand.service.bus.action_messages import ACTION_REQUESTS, Act, Hello, Welcome
from nearhand.service.bus.arrays import pack
from nearhand.service.bus.codec import decode, encode
from nearhand.service.bus.control_messages import CONTROL_REPLIES, Arm, ControlReply, Load
from nearhand.service.bus.message import Message
from nearhand.service.bus.sockets import BULK_QUEUE, make_socket
from nearhand.service.clock import FakeClock
from nearhand.service.config import ServiceSettings
from nearhand.service.envelope.novelty import calibrate
from nearhand.service.policy.format import PolicyFile, sha256, write_policy
from nearhand.service.policy.network import Float32, Policy
from nearhand.service.rigs import Rig

Context = zmq.Context[zmq.Socket[bytes]]
PERIOD_S, DEADLINE_S, LEASE_S = 0.02, 0.1, 0.06
STILL = np.zeros(2, dtype=np.float32)
#: Generous for a busy machine; nothing waits this long unless it fails.
PATIENCE_S = 20.0


def crane(**changes: Any) -> Rig:
    """Return a small crane: position and velocity, one acceleration."""
    table: dict[str, Any] = {
        "name": "crane",
        "title": "crane",
        "observations": [
            {"name": "position", "unit": "m", "low": -50.0, "high": 50.0},
            {"name": "velocity", "unit": "m/s", "low": -2.0, "high": 2.0},
        ],
        "actions": [{"name": "drive", "unit": "m/s²", "low": -1.0, "high": 1.0, "slew_per_s": 10.0}],
        "timing": {"period_s": PERIOD_S, "deadline_s": DEADLINE_S, "lease_s": LEASE_S},
        "braking": [
            {"position": "position", "velocity": "velocity", "action": "drive", "low": -40.0, "high": 40.0,
             "deceleration": 0.8},
        ],
        "novelty": {"epsilon": 0.1, "trip_m": 2, "window_n": 3},
    }  # fmt: skip
    return Rig.model_validate({**table, **changes})


def policy_bytes(bias: float = 0.5, *, weight: float = 0.0, gate: bool = False) -> bytes:
    """Return a policy whose action is ``bias + weight·position``; with a gate calibrated on standard normal values."""
    generator = np.random.default_rng(3)
    novelty: dict[str, Float32] = {}
    if gate:
        episodes = [generator.standard_normal((10, 2)).astype(np.float32) for _ in range(19)]
        novelty = calibrate(generator.standard_normal((500, 2)).astype(np.float32), episodes)
    one = np.ones(1, dtype=np.float32)
    policy = Policy(
        weights=(np.array([[weight], [0.0]], dtype=np.float32),), biases=(one * np.float32(bias),),
        observation_mean=np.zeros(2, dtype=np.float32), observation_scale=np.ones(2, dtype=np.float32),
        action_middle=0 * one, action_half=one, log_sd=0 * one,
    )  # fmt: skip
    return write_policy(PolicyFile(policy, "crane", ("position", "velocity"), ("drive",), "clone", novelty, {}))


class Pretender:
    """A service in a thread that answers as it is told to; the clock of the link moves one period per query."""

    def __init__(self, context: Context) -> None:
        self._socket = context.socket(zmq.ROUTER)
        self._socket.setsockopt(zmq.LINGER, 0)
        self.address = f"tcp://127.0.0.1:{self._socket.bind_to_random_port('tcp://127.0.0.1')}"
        self.answer: Callable[[Act], list[bytes]] = lambda act: [self.action(act)]
        self.welcomes = True
        self.acts: list[Act] = []
        self.hellos: list[Hello] = []
        self._ended = threading.Event()
        self._thread = threading.Thread(target=self._run)
        self._thread.start()

    def action(self, act: Act, value: float = 0.1, **changes: Any) -> bytes:
        """Return a good reply, with changes."""
        table: dict[str, Any] = {
            "v": 1, "kind": "action", "seq": act.seq, "sent_ns": act.sent_ns, "action": pack([value]), "mode": "armed",
            "version": 1, "lease_s": LEASE_S, "reasons": 0, "novelty": 1.0,
        }  # fmt: skip
        return bytes(msgpack.packb({**table, **changes}))

    def _run(self) -> None:
        while not self._ended.is_set():
            if not self._socket.poll(20):
                continue
            name, frame = self._socket.recv_multipart()
            message = decode(frame, ACTION_REQUESTS)
            replies: list[bytes] = []
            if isinstance(message, Hello):
                self.hellos.append(message)
                welcome = Welcome(
                    rig=message.rig, session=message.session, mode="armed", version=1, deadline_s=DEADLINE_S,
                    lease_s=LEASE_S,
                )  # fmt: skip
                replies = [encode(welcome)] if self.welcomes else []
            elif isinstance(message, Act):
                self.acts.append(message)
                replies = self.answer(message)
            for reply in replies:
                self._socket.send_multipart([name, reply])

    def close(self) -> None:
        """End the thread."""
        self._ended.set()
        self._thread.join(10)
        self._socket.close(linger=0)


class Rigged:
    """A link on a fake clock that moves one period per exchange."""

    def __init__(self, rig: Rig, address: str, wait_s: float = 2.0) -> None:
        self.clock = FakeClock(10**12)
        self.link = RigLink(rig, address, clock=self.clock, wait_s=wait_s)

    def exchange(self, observation: Any = STILL, operator: Any = None) -> Drive:
        """Exchange one observation, one period later."""
        self.clock.advance_s(PERIOD_S)
        return self.link.exchange(observation, operator)


def silent(act: Act) -> list[bytes]:
    """Answer nothing."""
    return []


class Server:
    """A real action server process, with its control lane."""

    def __init__(self, context: Context, folder: Path) -> None:
        with socket.socket() as probe:
            probe.bind(("127.0.0.1", 0))
            port = probe.getsockname()[1]
        unused = f"ipc://{folder / 'u'}"
        self.settings = ServiceSettings(
            data=folder, action=f"tcp://127.0.0.1:{port}", intake=unused, desk=unused, feed=unused,
            control=f"ipc://{folder / 'c'}", progress=unused,
        )  # fmt: skip
        self._path = folder / "settings.json"
        self._path.write_text(self.settings.model_dump_json(), encoding="utf-8")
        self._context = context
        self.process: subprocess.Popen[bytes] | None = None
        self.start()

    def start(self) -> None:
        """Start it and wait until it is ready."""
        read, write = os.pipe()
        words = ["-m", "nearhand.service.action.process", "--settings", str(self._path), "--ready-fd", str(write)]
        self.process = subprocess.Popen(
            [sys.executable, *words, "--parent", str(os.getpid())], pass_fds=[write],
            env={**os.environ, "OMP_NUM_THREADS": "1"},
        )  # fmt: skip
        os.close(write)
        assert select.select([read], [], [], PATIENCE_S)[0] and os.read(read, 16) == b"ready\n"
        os.close(read)

    def signal(self, number: int) -> None:
        """Send a signal."""
        assert self.process is not None
        self.process.send_signal(number)

    def kill(self) -> None:
        """Kill it, as nothing can be handled."""
        self.signal(signal.SIGKILL)
        assert self.process is not None
        self.process.wait(PATIENCE_S)

    def do(self, message: Message) -> ControlReply:
        """Send a control request that changes something and return its reply."""
        reply = self.ask(message)
        assert isinstance(reply, ControlReply), reply
        return reply

    def ask(self, message: Message) -> Message:
        """Send a control request and return its reply."""
        control = make_socket(self._context, zmq.DEALER, queue=BULK_QUEUE, role="connect")
        try:
            control.connect(self.settings.control)
            control.send(encode(message))
            assert control.poll(round(PATIENCE_S * 1e3))
            reply = decode(control.recv(), CONTROL_REPLIES)
        finally:
            control.close(linger=0)
        return reply

    def load(self, data: bytes, version: int = 1) -> ControlReply:
        """Load a version of the crane."""
        description = crane().model_dump(mode="json")
        return self.do(
            Load(
                request="1", rig="crane", description=description, version=version, sha256=sha256(data), policy=data
            )
        )  # fmt: skip

    def arm(self) -> ControlReply:
        """Arm the crane."""
        return self.do(Arm(request="2", rig="crane", who="ann", why="clear"))

    def close(self) -> None:
        """End it in an orderly way."""
        assert self.process is not None
        if self.process.poll() is None:
            with contextlib.suppress(ProcessLookupError):
                self.signal(signal.SIGCONT)
            self.signal(signal.SIGTERM)
            assert self.process.wait(PATIENCE_S) == 0


class Pace:
    """Exchanges in real time, one per control period, as a rig's program would."""

    def __init__(self, link: RigLink) -> None:
        self.link = link
        self.drives: list[Drive] = []
        self.operator: Float32 | None = None

    def until(self, wanted: Callable[[Drive], bool], observation: Float32 = STILL) -> Drive:
        """Exchange until a drive is as wanted; every action on the way is checked."""
        end_s = time.monotonic() + PATIENCE_S
        previous = self.drives[-1].action if self.drives else np.zeros(1, dtype=np.float32)
        while time.monotonic() < end_s:
            begin_s = time.monotonic()
            drive = self.link.exchange(observation, self.operator)
            assert np.isfinite(drive.action).all() and abs(drive.action[0]) <= 1.0
            assert abs(drive.action[0] - previous[0]) <= 0.2 + 2e-7
            previous = drive.action
            self.drives.append(drive)
            if wanted(drive):
                return drive
            time.sleep(max(0.0, PERIOD_S - (time.monotonic() - begin_s)))
        raise AssertionError(f"not within {PATIENCE_S} s; last: {self.drives[-1]}")
