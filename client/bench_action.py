"""How long one query takes, beside a bare echo of the same bytes over the same transport in the same run.

Both servers are processes of their own; both are asked by the same kind of client, alternately, so that whatever else
the machine does meets both alike: first as fast as they answer, then at 1 kHz while a service trains and takes in
episodes on the same processors. What is measured is from sending a ready frame to having the reply's frame.
"""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from itertools import islice
from pathlib import Path
from typing import Any

import numpy as np
import zmq
from numpy.typing import NDArray

from nearhand.client.bench_load import MachineLoad
from nearhand.service.bus.action_messages import ACTION_REPLIES, Act, Action, Hello, Welcome
from nearhand.service.bus.arrays import pack
from nearhand.service.bus.codec import decode, encode
from nearhand.service.bus.control_messages import CONTROL_REPLIES, Arm, ControlReply, Load
from nearhand.service.bus.keys import ClientKey
from nearhand.service.bus.message import Message
from nearhand.service.bus.sockets import ACTION_QUEUE, BULK_QUEUE, connect, make_socket
from nearhand.service.config import ServiceSettings
from nearhand.service.envelope.novelty import calibrate
from nearhand.service.errors import LinkError
from nearhand.service.rigs import Rig

OBSERVATIONS, ACTIONS, HIDDEN = 24, 6, 128
QUERIES = 6_000
WARM_UP = 300
#: Queries to one server before the other has its turn.
TURN = 25
#: On the loaded machine both are asked at this rate, in turns of half a second.
RATE_HZ = 1_000.0
LOADED_TURN = 500
PERCENTILES = (("p50", 50.0), ("p99", 99.0), ("p99.9", 99.9))
REPLY_TIMEOUT_MS = 5_000

#: The echo: nothing but the transport.
ECHO = """
import sys, zmq
socket = zmq.Context().socket(zmq.ROUTER)
socket.setsockopt(zmq.LINGER, 0)
socket.bind("tcp://127.0.0.1:*")
print(socket.getsockopt_string(zmq.LAST_ENDPOINT).rstrip(chr(0)), flush=True)
while True:
    socket.send_multipart(socket.recv_multipart())
"""

Socket = zmq.Socket[bytes]
Times = dict[str, list[int]]


def bench_rig(name: str = "bench") -> Rig:
    """Return the rig that is measured: 24 observations, 6 actions, two braking axes."""
    axes = [("o0", "o1", "a0", "acceleration"), ("o2", "o3", "a1", "velocity")]
    return Rig.model_validate(
        {
            "name": name,
            "title": "24 observations, 6 actions",
            "observations": [{"name": f"o{k}", "unit": "", "low": -5.0, "high": 5.0} for k in range(OBSERVATIONS)],
            "actions": [
                {"name": f"a{k}", "unit": "", "low": -1.0, "high": 1.0, "slew_per_s": 20.0} for k in range(ACTIONS)
            ],
            "timing": {"period_s": 0.02, "deadline_s": 5.0, "lease_s": 0.06},
            "braking": [
                {
                    "position": position, "velocity": velocity, "action": action, "drives": drives,
                    "low": -50.0, "high": 50.0, "deceleration": 0.8,
                }
                for position, velocity, action, drives in axes
            ],
        }
    )  # fmt: skip


def bench_policy(rig: Rig) -> bytes:
    """Return a policy file of random weights with a calibrated confidence gate."""
    from nearhand.service.policy.format import PolicyFile, write_policy
    from nearhand.service.policy.network import Policy

    generator = np.random.default_rng(7)

    def draw(*shape: int) -> NDArray[np.float32]:
        return np.asarray(0.1 * generator.standard_normal(shape), dtype=np.float32)

    policy = Policy(
        weights=(draw(OBSERVATIONS, HIDDEN), draw(HIDDEN, HIDDEN), draw(HIDDEN, ACTIONS)),
        biases=(draw(HIDDEN), draw(HIDDEN), draw(ACTIONS)),
        observation_mean=np.zeros(OBSERVATIONS, dtype=np.float32),
        observation_scale=np.ones(OBSERVATIONS, dtype=np.float32),
        action_middle=np.zeros(ACTIONS, dtype=np.float32),
        action_half=np.ones(ACTIONS, dtype=np.float32),
        log_sd=np.zeros(ACTIONS, dtype=np.float32),
    )
    reference = generator.standard_normal((1000, OBSERVATIONS)).astype(np.float32)
    episodes = [3 * generator.standard_normal((20, OBSERVATIONS)).astype(np.float32) for _ in range(20)]
    names = tuple(c.name for c in rig.observations), tuple(c.name for c in rig.actions)
    return write_policy(PolicyFile(policy, rig.name, *names, "clone", calibrate(reference, episodes), {}))


@contextmanager
def _process(words: list[str], **options: Any) -> Iterator[subprocess.Popen[str]]:
    """Run a child with single-threaded numerics; end it afterwards."""
    environment = {**os.environ, "OMP_NUM_THREADS": "1", "OPENBLAS_NUM_THREADS": "1"}
    process = subprocess.Popen([sys.executable, *words], env=environment, text=True, **options)
    try:
        yield process
    finally:
        process.send_signal(signal.SIGTERM)
        try:
            process.wait(5.0)
        except subprocess.TimeoutExpired:
            process.kill()
            process.wait()
        if process.stdout is not None:
            process.stdout.close()


@contextmanager
def echo_server() -> Iterator[str]:
    """Run the echo; yield its address."""
    with _process(["-c", ECHO], stdout=subprocess.PIPE) as process:
        assert process.stdout is not None
        address = process.stdout.readline().strip()
        if not address:
            raise LinkError("the echo did not start")
        yield address


@contextmanager
def action_server(
    context: zmq.Context[Socket], folder: Path, names: Sequence[str], *, keys: Path | None = None
) -> Iterator[str]:
    """Run an action server with a policy loaded and armed for rigs of these names; yield its address.

    Args:
        keys: folder of the service's keys, where it shall have some.
    """
    probe = context.socket(zmq.ROUTER)
    probe.bind("tcp://127.0.0.1:*")
    address = probe.getsockopt_string(zmq.LAST_ENDPOINT).rstrip("\x00")
    probe.close(linger=0)
    unused = f"ipc://{folder / 'unused.ipc'}"
    settings = ServiceSettings(
        data=folder, action=address, intake=unused, desk=unused, feed=unused,
        control=f"ipc://{folder / 'control.ipc'}", progress=unused, keys=keys,
    )  # fmt: skip
    path = folder / "settings.json"
    path.write_text(settings.model_dump_json(), encoding="utf-8")
    read, write = os.pipe()
    words = ["-m", "nearhand.service.action.process", "--settings", str(path), "--ready-fd", str(write)]
    with _process([*words, "--parent", str(os.getpid())], pass_fds=[write]):
        os.close(write)
        ready = os.read(read, 16)
        os.close(read)
        if not ready:
            raise LinkError("the action server did not start; its log above says why")
        from nearhand.service.policy.format import sha256

        requests: list[Message] = []
        for name in names:
            rig = bench_rig(name)
            data, description = bench_policy(rig), rig.model_dump(mode="json")
            requests += [
                Load(request="1", rig=name, description=description, version=1, sha256=sha256(data), policy=data),
                Arm(request="2", rig=name, who="bench", why="measuring"),
            ]
        control = make_socket(context, zmq.DEALER, queue=BULK_QUEUE, role="connect")
        try:
            connect(control, settings.control)
            for request in requests:
                control.send(encode(request))
                reply = decode(control.recv(), CONTROL_REPLIES) if control.poll(REPLY_TIMEOUT_MS) else None
                if not isinstance(reply, ControlReply):
                    raise LinkError(f"the action server did not accept {request.kind}: {reply!r}")
        finally:
            control.close(linger=0)
        yield address


def make_queries(rig: Rig, count: int) -> Iterator[bytes]:
    """Yield queries, stamped as they are taken: observations that move as a machine's do, within their ranges."""
    generator = np.random.default_rng(1)
    phases, rates = generator.uniform(0, 2 * np.pi, (2, OBSERVATIONS))
    time_s = rig.timing.period_s * np.arange(count)[:, None]
    rows = np.sin(phases + (0.2 + 0.3 * rates) * time_s) + 0.02 * generator.standard_normal((count, OBSERVATIONS))
    for seq, row in enumerate(rows, start=1):
        yield encode(Act(rig=rig.name, session="bench", seq=seq, sent_ns=time.monotonic_ns(), obs=pack(row)))


def ask(socket: Socket, frame: bytes) -> tuple[bytes, int]:
    """Return the reply and how long it took, ns."""
    begin_ns = time.perf_counter_ns()
    socket.send(frame)
    reply = socket.recv()
    return reply, time.perf_counter_ns() - begin_ns


def make_client(context: zmq.Context[Socket], address: str, key: ClientKey | None = None) -> Socket:
    """Return a socket that asks and waits."""
    socket = make_socket(context, zmq.REQ, queue=ACTION_QUEUE, role="connect")
    socket.setsockopt(zmq.RCVTIMEO, REPLY_TIMEOUT_MS)
    connect(socket, address, key)
    return socket


def run(seconds: float = 60.0) -> dict[str, Any]:
    """Measure; return bench, figures (µs), ratios and targets.

    Args:
        seconds: how long each of both is asked at 1 kHz on the loaded machine; 0 leaves that part out.

    Raises:
        LinkError: a server did not start, or a query was not answered by the armed policy.
    """
    rig = bench_rig()
    paced = round(seconds * RATE_HZ)
    queries = make_queries(rig, WARM_UP + QUERIES + paced)
    context: zmq.Context[Socket] = zmq.Context()
    idle: Times = {"action": [], "echo": []}
    loaded: Times = {"action": [], "echo": []}
    try:
        with (
            tempfile.TemporaryDirectory(prefix="nearhand-") as folder,
            echo_server() as echo_address,
            action_server(context, Path(folder), [rig.name]) as action_address,
        ):
            sockets = {"action": make_client(context, action_address), "echo": make_client(context, echo_address)}
            welcome_session(rig, sockets["action"])
            replies = _measure(sockets, islice(queries, WARM_UP + QUERIES), idle, TURN, 0.0)
            if paced:
                with MachineLoad(Path(folder) / "load") as load:
                    replies += _measure(sockets, queries, loaded, LOADED_TURN, 1.0 / RATE_HZ)
                    load.check()
                    episodes = load.episodes
    except zmq.Again as error:
        raise LinkError(f"no reply within {REPLY_TIMEOUT_MS} ms") from error
    finally:
        context.destroy(linger=0)
    check_replies(replies)
    idle = {name: values[WARM_UP:] for name, values in idle.items()}
    figures, ratios = _compared("", idle)
    goals: dict[str, tuple[float, float]] = {name: (ratios[name], 1.5) for name in ("p50 ratio", "p99 ratio")}
    if paced:
        more, compared = _compared("loaded ", loaded)
        period_ns = rig.timing.period_s * 1e9
        late = {name: sum(value > period_ns for value in values) for name, values in loaded.items()}
        figures |= more | {f"loaded {name} over one period": float(count) for name, count in late.items()}
        figures["episodes taken in under load"] = float(episodes)
        ratios |= compared
        goals |= {name: (compared[name], 1.5) for name in ("loaded p50 ratio", "loaded p99 ratio")}
        goals["over one period beyond the echo's"] = (float(max(late["action"] - late["echo"], 0)), 0.0)
    return {
        "bench": "action-latency",
        "figures": figures,
        "ratios": ratios,
        "targets": {n: {"value": value, "goal": goal, "met": value <= goal} for n, (value, goal) in goals.items()},
    }


def _compared(prefix: str, times: Times) -> tuple[dict[str, float], dict[str, float]]:
    """Return percentiles of both, µs, and their ratios."""
    figures = {
        f"{prefix}{name} {label} (µs)": float(np.percentile(values, percent)) / 1e3
        for name, values in times.items()
        for label, percent in PERCENTILES
    }
    ratios = {
        f"{prefix}{label} ratio": figures[f"{prefix}action {label} (µs)"] / figures[f"{prefix}echo {label} (µs)"]
        for label, _ in PERCENTILES
    }
    return figures, ratios


def welcome_session(rig: Rig, socket: Socket) -> None:
    """Begin the session that the queries belong to.

    Raises:
        LinkError: the action server does not take it.
    """
    hello = Hello(
        rig=rig.name, session="bench", observations=tuple(c.name for c in rig.observations),
        actions=tuple(c.name for c in rig.actions), period_s=rig.timing.period_s,
    )  # fmt: skip
    welcome, _ = ask(socket, encode(hello))
    if not isinstance(decode(welcome, ACTION_REPLIES), Welcome):
        raise LinkError(f"the action server did not welcome the session: {decode(welcome, ACTION_REPLIES)!r}")


def _measure(
    sockets: dict[str, Socket], queries: Iterator[bytes], times: Times, turn: int, every_s: float
) -> list[bytes]:
    """Ask the action server in turns, and the echo the same after it; return the action server's replies.

    Args:
        turn: how many queries before the other has its turn.
        every_s: least time between two queries; 0 for as soon as the last is answered.
    """
    replies: list[bytes] = []
    asked: list[bytes] = []
    while len(asked) == turn or not replies:
        asked = []
        due_s = time.monotonic()
        for frame in islice(queries, turn):
            asked.append(frame)
            due_s = _wait_until(due_s) + every_s
            reply, taken_ns = ask(sockets["action"], frame)
            replies.append(reply)
            times["action"].append(taken_ns)
        due_s = time.monotonic()
        for frame in asked:
            due_s = _wait_until(due_s) + every_s
            times["echo"].append(ask(sockets["echo"], frame)[1])
    return replies


def _wait_until(due_s: float) -> float:
    """Sleep until a time that may have passed; return it."""
    if (early_s := due_s - time.monotonic()) > 0:
        time.sleep(early_s)
    return due_s


def check_replies(replies: list[bytes]) -> None:
    """Make sure that what was measured is the policy at work."""
    for frame in replies:
        reply = decode(frame, ACTION_REPLIES)
        if not isinstance(reply, Action) or reply.mode != "armed" or reply.version != 1:
            raise LinkError(f"a query was not answered by the armed policy: {reply!r}")
