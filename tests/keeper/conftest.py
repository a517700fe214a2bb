"""The real keeper process, clients for its lanes, and an action server that only pretends to have rigs."""

from __future__ import annotations

import contextlib
import json
import os
import select
import shutil
import signal
import subprocess
import sys
import tempfile
import threading
import time
import zlib
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, TypeVar

import numpy as np
import pytest
import zmq

from nearhand.service.bus.codec import decode, encode
from nearhand.service.bus.control_messages import CONTROL_REQUESTS, Arm, ControlReply, Drain, DrainReply, Latch, Load
from nearhand.service.bus.desk_messages import DESK_REPLIES, EventsReply, ListEvents, PutRig, RigReply
from nearhand.service.bus.intake_messages import INTAKE_REPLIES, Ack, Chunk, CloseEpisode, OpenEpisode
from nearhand.service.bus.message import ErrorReply, Message
from nearhand.service.config import ServiceSettings
from nearhand.service.keeper.process import Keeper
from nearhand.service.policy.format import PolicyFile, write_policy
from nearhand.service.policy.network import Policy
from nearhand.service.process import StopSignal

ANSWER_MS = 20_000
Reply = TypeVar("Reply", bound=Message)
Context = zmq.Context[zmq.Socket[bytes]]

RIG_TOML = """
name = "yard-crane"
title = "Travelling crane in a stone yard"
[[observations]]
name = "position"
unit = "m"
low = 0.0
high = 12.0
[[observations]]
name = "swing"
unit = "rad"
low = -1.0
high = 1.0
[[actions]]
name = "acceleration"
unit = "m/s2"
low = -0.6
high = 0.6
slew_per_s = 2.0
[timing]
period_s = 0.05
deadline_s = 0.1
lease_s = 0.1
"""
GATE_TOML = """
[[gate]]
figure = "action error"
at_most = 0.2
"""


class Samples:
    """A crane, policies for it, and the messages of an episode of it."""

    rig_toml = RIG_TOML
    gated_toml = RIG_TOML + GATE_TOML

    @staticmethod
    def policy(seed: int, *, rig: str = "yard-crane") -> bytes:
        """Return a small policy file for the crane."""
        generator = np.random.default_rng(seed)
        policy = Policy(
            weights=(generator.standard_normal((2, 4)).astype(np.float32), np.ones((4, 1), dtype=np.float32)),
            biases=(np.zeros(4, dtype=np.float32), np.zeros(1, dtype=np.float32)),
            observation_mean=np.zeros(2, dtype=np.float32),
            observation_scale=np.ones(2, dtype=np.float32),
            action_middle=np.zeros(1, dtype=np.float32),
            action_half=np.ones(1, dtype=np.float32),
            log_sd=np.zeros(1, dtype=np.float32),
        )
        channels = (("position", "swing"), ("acceleration",))
        return write_policy(PolicyFile(policy, rig, *channels, "clone", {}, {"seed": seed}))

    @staticmethod
    def open(episode: str, operator: str = "ann", **changes: Any) -> OpenEpisode:
        """Return the opening of an episode of the crane."""
        fields = {"rig": "yard-crane", "started_utc": "2024-05-01", "observations": 2, "actions": 1, **changes}
        return OpenEpisode(episode=episode, operator=operator, **fields)

    @staticmethod
    def chunk(episode: str, number: int, *, count: int = 5, seed: int = 0, **changes: Any) -> Chunk:
        """Return a chunk whose content follows from its number and the seed."""
        generator = np.random.default_rng([seed, number])
        times = (np.arange(count) * 0.05 + 0.05 * count * number).astype("<f8").tobytes()
        obs = generator.standard_normal((count, 2)).astype("<f4").tobytes()
        act = generator.uniform(-0.6, 0.6, (count, 1)).astype("<f4").tobytes()
        fields: dict[str, Any] = {"times": times, "obs": obs, "act": act, **changes}
        fields.setdefault("crc", zlib.crc32(fields["times"] + fields["obs"] + fields["act"]))
        return Chunk(episode=episode, chunk=number, count=count, **fields)

    @staticmethod
    def close(episode: str, chunks: int, *, count: int = 5, **changes: Any) -> CloseEpisode:
        """Return the closing of an episode."""
        fields = {"outcome": "success", "final_obs": b"\0" * 8, "samples": chunks * count, **changes}
        return CloseEpisode(episode=episode, chunks=chunks, **fields)


@dataclass
class PretendedServer:
    """Answers the control lane as the contract says, with rigs that exist only in its memory.

    Attributes:
        loads: (rig, version) of every accepted load.
        refuse: answer the next load with this error code.
        silent: take requests in, but answer nothing.
    """

    address: str
    instance: str = "life-1"
    loads: list[tuple[str, int]] = field(default_factory=list)
    refuse: str = ""
    silent: bool = False
    states: dict[str, dict[str, Any]] = field(default_factory=dict)
    occurrences: list[dict[str, Any]] = field(default_factory=list)
    drained_after: list[int] = field(default_factory=list)

    def __post_init__(self) -> None:
        self._lock = threading.Condition()
        self._end = threading.Event()
        self._ready = threading.Event()
        self._thread: threading.Thread | None = None
        self._number = 0

    def start(self) -> None:
        """Bind and answer."""
        self._end.clear()
        self._ready.clear()
        self._thread = threading.Thread(target=self._serve, name="pretended-server")
        self._thread.start()
        assert self._ready.wait(10)

    def stop(self) -> None:
        """Unbind and end, as a killed server would."""
        self._end.set()
        if self._thread is not None:
            self._thread.join(10)
            assert not self._thread.is_alive()
            self._thread = None

    def begin_life(self, instance: str, *happened: str) -> None:
        """Start again at once with nothing in memory but what has just happened."""
        self.stop()
        self.instance, self.states, self.occurrences, self.loads, self._number = instance, {}, [], [], 0
        for what in happened:
            self.happen(what)
        self.start()

    def happen(self, what: str, rig: str = "yard-crane", **detail: Any) -> None:
        """Note an occurrence."""
        with self._lock:
            self._number += 1
            self.occurrences.append({"number": self._number, "utc": "u", "rig": rig, "what": what, "detail": detail})

    def wait_for(self, holds: Callable[[PretendedServer], bool]) -> None:
        """Wait, bounded, until something holds; looked at after each answer."""
        with self._lock:
            assert self._lock.wait_for(lambda: holds(self), timeout=15)

    def _serve(self) -> None:
        context: Context = zmq.Context()
        socket = context.socket(zmq.ROUTER)
        socket.setsockopt(zmq.LINGER, 0)
        socket.bind(self.address)
        self._ready.set()
        while not self._end.is_set():
            if not socket.poll(20):
                continue
            *envelope, frame = socket.recv_multipart()
            with self._lock:
                reply = self._answer(decode(frame, CONTROL_REQUESTS))
                if reply is not None and not self.silent:
                    socket.send_multipart([*envelope, encode(reply)])
                self._lock.notify_all()
        context.destroy(linger=0)

    def _answer(self, request: Message) -> Message | None:
        if isinstance(request, Drain):
            self.drained_after.append(request.after)
            # As the contract allows: whatever was asked to be passed over may be forgotten.
            self.occurrences = [item for item in self.occurrences if item["number"] > request.after]
            return DrainReply(
                request=request.request, instance=self.instance, occurrences=tuple(self.occurrences),
                rigs=dict(self.states), counters={"queries": 7},
            )  # fmt: skip
        if isinstance(request, Load):
            if self.silent:
                return None
            if self.refuse:
                code, self.refuse = self.refuse, ""
                return ErrorReply(code=code, message="the pretended server does not want it", request=request.request)
            self.loads.append((request.rig, request.version))
            self.states[request.rig] = {"mode": "latched", "version": request.version, "reasons": 2048}
            return self._state(request.request, request.rig)
        assert isinstance(request, Arm | Latch)
        if request.rig not in self.states:
            return ErrorReply(code="unknown.rig", message="not loaded", request=request.request)
        self.states[request.rig] |= {"mode": "armed" if isinstance(request, Arm) else "latched"}
        return self._state(request.request, request.rig)

    def _state(self, request: str, rig: str) -> ControlReply:
        state = self.states[rig]
        return ControlReply(
            request=request, rig=rig, mode=state["mode"], version=state["version"], reasons=state["reasons"]
        )


class Client:
    """One client of the keeper's lanes: a DEALER each, one request at a time."""

    def __init__(self, context: Context, settings: ServiceSettings) -> None:
        self._context = context
        self._settings = settings
        self._count = 0
        self._sockets: dict[str, zmq.Socket[bytes]] = {}

    def socket(self, lane: str) -> zmq.Socket[bytes]:
        """Return the client's socket on a lane."""
        if lane not in self._sockets:
            socket = self._context.socket(zmq.DEALER)
            socket.setsockopt(zmq.LINGER, 0)
            socket.setsockopt(zmq.RECONNECT_IVL, 10)
            socket.connect(getattr(self._settings, lane))
            self._sockets[lane] = socket
        return self._sockets[lane]

    def close(self) -> None:
        """Close all sockets; what was under way is lost."""
        for socket in self._sockets.values():
            socket.close(linger=0)
        self._sockets.clear()

    def raw(self, lane: str, *frames: bytes) -> list[bytes]:
        """Send frames as they are and return the reply's frames."""
        socket = self.socket(lane)
        socket.send_multipart(list(frames))
        assert socket.poll(ANSWER_MS), "no reply"
        return socket.recv_multipart()

    def desk(self, request: type[Message], **fields: Any) -> Message:
        """Return the desk's reply, an error too."""
        self._count += 1
        message = request(request=f"r{self._count}", **fields)  # type: ignore[call-arg]
        reply = decode(self.raw("desk", encode(message))[-1], DESK_REPLIES)
        assert getattr(reply, "request", None) == f"r{self._count}"
        return reply

    def ask(self, request: type[Message], expected: type[Reply], **fields: Any) -> Reply:
        """Return the desk's reply, of the expected kind."""
        reply = self.desk(request, **fields)
        assert isinstance(reply, expected), reply
        return reply

    def refused(self, request: type[Message], **fields: Any) -> str:
        """Return the code of the desk's error reply."""
        return self.ask(request, ErrorReply, **fields).code

    def until(
        self, holds: Callable[[Reply], bool], request: type[Message], expected: type[Reply], **fields: Any
    ) -> Reply:
        """Ask the desk until its reply is as wished, for at most a while; in between, leave the processor to others."""
        end_s = time.monotonic() + 90
        while True:
            reply = self.ask(request, expected, **fields)
            if holds(reply):
                return reply
            assert time.monotonic() < end_s, reply
            self.socket("desk").poll(20)

    def events(self, *what: str) -> list[dict[str, Any]]:
        """Return the events of some kinds, or all."""
        rows = self.ask(ListEvents, EventsReply).events
        return [row for row in rows if not what or row["what"] in what]

    def intake(self, message: Message) -> Message:
        """Return the intake's reply."""
        return decode(self.raw("intake", encode(message))[-1], INTAKE_REPLIES)

    def ack(self, message: Message) -> Ack:
        """Return the intake's acknowledgement."""
        reply = self.intake(message)
        assert isinstance(reply, Ack), reply
        return reply

    def put_rig(self, toml: str = RIG_TOML) -> RigReply:
        """Register the crane."""
        return self.ask(PutRig, RigReply, who="an operator", toml=toml)

    def record(self, episode: str, *, operator: str = "ann", chunks: int = 2, seed: int = 0) -> None:
        """Send a whole episode."""
        self.ack(Samples.open(episode, operator))
        for number in range(chunks):
            assert self.ack(Samples.chunk(episode, number, seed=seed)).durable == number + 1
        self.ack(Samples.close(episode, chunks))


class KeeperProcess:
    """The keeper as a real process, with a data folder that outlives it."""

    def __init__(self, settings: ServiceSettings, settings_file: Path) -> None:
        self.settings = settings
        self._file = settings_file
        self.process: subprocess.Popen[bytes] | None = None

    def start(self) -> float:
        """Start it, wait until it is ready and return the seconds that took."""
        begin_s = time.monotonic()
        ready, write = os.pipe()
        command = [sys.executable, "-m", "nearhand.service.keeper.process", "--settings", str(self._file)]
        command += ["--ready-fd", str(write), "--parent", str(os.getpid())]
        with (self._file.parent / "keeper.log").open("ab") as log:
            self.process = subprocess.Popen(command, pass_fds=[write], stderr=log, stdin=subprocess.DEVNULL)
        os.close(write)
        readable, _, _ = select.select([ready], [], [], 30)
        word = os.read(ready, 16) if readable else b""
        os.close(ready)
        assert word, self.log()
        return time.monotonic() - begin_s

    def kill(self) -> None:
        """End it with SIGKILL."""
        assert self.process is not None
        self.process.kill()
        self.process.wait(10)
        self.process = None

    def stop(self) -> int:
        """End it with SIGTERM and return its exit status."""
        assert self.process is not None
        self.process.send_signal(signal.SIGTERM)
        status = self.process.wait(10)
        self.process = None
        return status

    def children(self) -> list[int]:
        """Return the process numbers of its children (Linux)."""
        assert self.process is not None
        number = self.process.pid
        return [int(word) for word in Path(f"/proc/{number}/task/{number}/children").read_text().split()]

    def log(self) -> str:
        """Return what it has logged."""
        return (self._file.parent / "keeper.log").read_text()


class StopByHand(StopSignal):
    """A stop signal that no signal sets."""

    def __init__(self) -> None:
        self.stopped = False
        self.fileno_read, self._hand = os.pipe()

    def give(self) -> None:
        """Stop."""
        self.stopped = True
        os.write(self._hand, b"x")

    def close(self) -> None:
        """Give the descriptors back."""
        os.close(self.fileno_read)
        os.close(self._hand)


@pytest.fixture(scope="session")
def samples() -> Samples:
    """A crane and messages about it."""
    return Samples()


@pytest.fixture
def settings() -> Iterator[ServiceSettings]:
    """Settings with a fresh data folder; local sockets need a short path."""
    folder = Path(tempfile.mkdtemp(prefix="nh-"))
    lanes = ("action", "intake", "desk", "feed", "control", "progress")
    yield ServiceSettings(data=folder / "data", **{lane: f"ipc://{folder / lane}" for lane in lanes})
    shutil.rmtree(folder, ignore_errors=True)


@pytest.fixture(scope="session")
def make_keeper() -> Callable[[ServiceSettings, Path, Context], tuple[KeeperProcess, Client]]:
    """A function that returns a keeper, not started, and a client of it; the caller ends both."""
    return lambda settings, file, context: (KeeperProcess(settings, file), Client(context, settings))


@pytest.fixture
def stopped_keeper(settings: ServiceSettings) -> Iterator[KeeperProcess]:
    """A keeper that is not started yet."""
    file = settings.data.parent / "settings.json"
    file.write_text(json.dumps(settings.model_dump(mode="json")))
    keeper = KeeperProcess(settings, file)
    yield keeper
    if keeper.process is not None:
        with contextlib.suppress(subprocess.TimeoutExpired):
            keeper.stop()
    if keeper.process is not None:
        keeper.kill()


@pytest.fixture
def keeper(stopped_keeper: KeeperProcess) -> KeeperProcess:
    """A running keeper."""
    stopped_keeper.start()
    return stopped_keeper


@pytest.fixture
def keeper_thread(settings: ServiceSettings) -> Iterator[None]:
    """A running keeper in a thread of its own: the same but for the process, and there at once."""
    stop, ready = StopByHand(), threading.Event()

    def run() -> None:
        keeper = Keeper(settings)
        ready.set()
        keeper.run(stop)
        keeper.close()

    thread = threading.Thread(target=run, name="keeper")
    thread.start()
    assert ready.wait(20)
    yield
    stop.give()
    thread.join(20)
    assert not thread.is_alive()
    stop.close()


@pytest.fixture
def client(context: Context, settings: ServiceSettings) -> Iterator[Client]:
    """A client of the keeper."""
    made = Client(context, settings)
    yield made
    made.close()


@pytest.fixture
def server(settings: ServiceSettings) -> Iterator[PretendedServer]:
    """A pretended action server that answers."""
    made = PretendedServer(settings.control)
    made.start()
    yield made
    made.stop()
