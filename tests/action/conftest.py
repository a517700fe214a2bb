"""A small rig, policies whose output is known, and an action server of its own."""

from __future__ import annotations

import os
import threading
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import zmq

from nearhand.service.action.server import ActionServer
from nearhand.service.bus.action_messages import ACTION_REPLIES, Act, Action, Hello
from nearhand.service.bus.arrays import pack
from nearhand.service.bus.codec import decode, encode
from nearhand.service.bus.control_messages import CONTROL_REPLIES, Arm, Load
from nearhand.service.bus.message import Message
from nearhand.service.bus.sockets import BULK_QUEUE, make_socket
from nearhand.service.clock import FakeClock
from nearhand.service.envelope.novelty import calibrate
from nearhand.service.policy.format import PolicyFile, sha256, write_policy
from nearhand.service.policy.network import Float32, Policy
from nearhand.service.rigs import Rig

Context = zmq.Context[zmq.Socket[bytes]]
N, M = 3, 2


def make_rig(**changes: Any) -> Rig:
    """Return a rig with three observation and two action channels; tables are merged."""
    table: dict[str, Any] = {
        "name": "rig",
        "title": "rig",
        "observations": [{"name": f"o{k}", "unit": "m", "low": -5.0, "high": 5.0} for k in range(N)],
        "actions": [
            {"name": "u", "unit": "", "low": -1.0, "high": 1.0, "slew_per_s": 10.0},
            {"name": "v", "unit": "", "low": -0.5, "high": 2.0, "rest": 0.25, "slew_per_s": 10.0},
        ],
        "timing": {"period_s": 0.02, "deadline_s": 0.1, "lease_s": 0.06},
        "novelty": {"epsilon": 0.1, "trip_m": 2, "window_n": 3},
    }
    for key, value in changes.items():
        table[key] = {**table.get(key, {}), **value} if isinstance(value, dict) else value
    return Rig.model_validate(table)


def make_file(
    bias: tuple[float, ...] = (0.5, 0.5), *, gain: float = 0.0, past: tuple[int, int] = (0, 0), gate: bool = False,
    poison: bool = False, rig: str = "rig",
) -> PolicyFile:  # fmt: skip
    """Return a linear policy: ``bias`` plus ``gain`` times the first observation on the first action.

    ``gate``: with a confidence gate calibrated on standard normal observations. ``poison``: infinite weights, as only a
    file that was never checked could have.
    """
    width = N * (1 + past[0]) + M * past[1]
    weight = np.zeros((width, M), dtype=np.float32)
    weight[0, 0] = gain
    if poison:
        weight[:] = np.inf
    generator = np.random.default_rng(3)
    novelty: dict[str, Float32] = {}
    if gate:
        episodes = [generator.standard_normal((10, width)).astype(np.float32) for _ in range(19)]
        novelty = calibrate(generator.standard_normal((500, width)).astype(np.float32), episodes)
    policy = Policy(
        weights=(weight,),
        biases=(np.array(bias, dtype=np.float32),),
        observation_mean=np.zeros(N, dtype=np.float32),
        observation_scale=np.ones(N, dtype=np.float32),
        action_middle=np.zeros(M, dtype=np.float32),
        action_half=np.ones(M, dtype=np.float32),
        log_sd=np.zeros(M, dtype=np.float32),
        past_observations=past[0],
        past_actions=past[1],
    )
    return PolicyFile(policy, rig, ("o0", "o1", "o2"), ("u", "v"), "clone", novelty, {})


@pytest.fixture(scope="session")
def rig_with() -> Callable[..., Rig]:
    """A function that returns a small rig with changes."""
    return make_rig


@pytest.fixture(scope="session")
def file_with() -> Callable[..., PolicyFile]:
    """A function that returns a small policy file."""
    return make_file


@dataclass
class Lane:
    """A client of the action lane that sees every reply."""

    socket: zmq.Socket[bytes]
    rig: Rig
    session: str = "s1"
    seq: int = 0
    errors: list[Message] = field(default_factory=list)

    def send(self, frame: bytes) -> None:
        """Send one frame."""
        self.socket.send(frame)

    def receive(self, timeout_ms: int = 5_000) -> Message:
        """Return the next reply."""
        assert self.socket.poll(timeout_ms), "no reply"
        return decode(self.socket.recv(), ACTION_REPLIES)

    def ask(self, message: Message) -> Message:
        """Send a message and return its reply."""
        self.send(encode(message))
        return self.receive()

    def hello(self, **changes: Any) -> Message:
        """Open the session."""
        fields: dict[str, Any] = {
            "rig": self.rig.name,
            "session": self.session,
            "observations": tuple(c.name for c in self.rig.observations),
            "actions": tuple(c.name for c in self.rig.actions),
            "period_s": self.rig.timing.period_s,
        }
        return self.ask(Hello(**{**fields, **changes}))

    def act(self, observation: tuple[float, ...] = (0.0, 0.0, 0.0), *, sent_ns: int = 0, **changes: Any) -> Message:
        """Send one observation with the next number."""
        self.seq += 1
        fields: dict[str, Any] = {
            "rig": self.rig.name,
            "session": self.session,
            "seq": self.seq,
            "sent_ns": sent_ns,
            "obs": pack(np.array(observation, dtype=np.float32)),
        }
        return self.ask(Act(**{**fields, **changes}))

    def action(self, *args: Any, **changes: Any) -> Action:
        """Send one observation and return its action."""
        reply = self.act(*args, **changes)
        assert isinstance(reply, Action), reply
        return reply


class Stop:
    """A stop signal for a server in a thread: no process signals are involved."""

    def __init__(self) -> None:
        self.stopped = False
        self._read, self._write = os.pipe()

    def fileno(self) -> int:
        """Return the descriptor to poll."""
        return self._read

    def stop(self) -> None:
        """Wake the server and let it end."""
        self.stopped = True
        os.write(self._write, b"x")

    def close(self) -> None:
        """Close the pipe."""
        os.close(self._read)
        os.close(self._write)


class Served:
    """An action server in a thread, on a clock that moves only when told to, with clients for both lanes."""

    def __init__(self, context: Context, control: str) -> None:
        self.clock = FakeClock(10**12)
        self._context = context
        self._control_address = control
        self._stop = Stop()
        self._sockets: list[zmq.Socket[bytes]] = []
        started = threading.Event()
        self.address = ""

        def serve() -> None:
            server = ActionServer(context, "tcp://127.0.0.1:*", control, self.clock, "life-1")
            self.address = server.address
            started.set()
            try:
                server.run(self._stop)
            finally:
                server.close()

        self._thread = threading.Thread(target=serve, name="action-server")
        self._thread.start()
        assert started.wait(10)
        self._requests = 0
        self._control = self._connect(control, zmq.DEALER)

    def _connect(self, address: str, kind: int) -> zmq.Socket[bytes]:
        socket = make_socket(self._context, kind, queue=BULK_QUEUE, role="connect")
        socket.connect(address)
        self._sockets.append(socket)
        return socket

    def lane(self, rig: Rig, session: str = "s1", kind: int = zmq.DEALER) -> Lane:
        """Return a client of the action lane."""
        return Lane(self._connect(self.address, kind), rig, session)

    def control(self, frame: bytes) -> Message:
        """Send a frame on the control lane and return its reply."""
        self._control.send(frame)
        assert self._control.poll(5_000), "no reply on the control lane"
        return decode(self._control.recv(), CONTROL_REPLIES)

    def do(self, kind: type[Message], **fields: Any) -> Message:
        """Send a control request and return its reply."""
        self._requests += 1
        return self.control(encode(kind(**{"request": str(self._requests), **fields})))

    def load(self, rig: Rig, version: int, file: PolicyFile | None) -> Message:
        """Load a version; None takes it out of service."""
        data = b"" if file is None else write_policy(file)
        return self.do(
            Load, rig=rig.name, description=rig.model_dump(mode="json"), version=version, policy=data,
            sha256=sha256(data) if data else "",
        )  # fmt: skip

    def arm(self, rig: Rig) -> Message:
        """Arm a rig."""
        return self.do(Arm, rig=rig.name, who="ann", why="clear")

    def close(self) -> None:
        """End the thread and close the sockets."""
        self._stop.stop()
        self._thread.join(10)
        assert not self._thread.is_alive()
        for socket in self._sockets:
            socket.close(linger=0)
        self._stop.close()


@pytest.fixture
def served(context: Context, tmp_path: Path) -> Iterator[Served]:
    """A running action server."""
    running = Served(context, f"ipc://{tmp_path / 'c'}")
    yield running
    running.close()
