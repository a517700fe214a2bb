"""The rig's end of the wire: its watchdog, its fallback, and how it and a real action server agree after trouble."""

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
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import msgpack
import numpy as np
import pytest
import zmq
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from nearhand.client.link import Drive, RigLink
from nearhand.service.bus.action_messages import ACTION_REQUESTS, Act, Hello, Reason, Welcome
from nearhand.service.bus.arrays import pack
from nearhand.service.bus.codec import decode, encode
from nearhand.service.bus.control_messages import CONTROL_REPLIES, Arm, ControlReply, Load
from nearhand.service.bus.message import ErrorReply, Message
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


@pytest.fixture
def pretender(context: Context) -> Iterator[Pretender]:
    """A service that can be told what to answer."""
    made = Pretender(context)
    yield made
    made.close()


class Rigged:
    """A link on a fake clock that moves one period per exchange."""

    def __init__(self, rig: Rig, address: str, wait_s: float = 2.0) -> None:
        self.clock = FakeClock(10**12)
        self.link = RigLink(rig, address, clock=self.clock, wait_s=wait_s)

    def exchange(self, observation: Any = STILL) -> Drive:
        """Exchange one observation, one period later."""
        self.clock.advance_s(PERIOD_S)
        return self.link.exchange(observation)


@pytest.fixture
def rigged(pretender: Pretender) -> Iterator[Rigged]:
    """A link to the pretender."""
    made = Rigged(crane(), pretender.address)
    yield made
    made.link.close()


def silent(act: Act) -> list[bytes]:
    """Answer nothing."""
    return []


def test_a_good_reply_is_followed(rigged: Rigged, pretender: Pretender) -> None:
    drive = rigged.exchange()
    assert drive.fresh and drive.mode == "armed" and drive.version == 1 and drive.reasons == 0
    assert drive.action == pytest.approx([0.1])
    rigged.exchange()
    assert [act.seq for act in pretender.acts] == [1, 2]
    assert pretender.acts[1].applied == pack([0.1])
    assert len(pretender.hellos) == 1


def test_silence_holds_for_the_lease_then_falls_back_latches_and_stays_silent_itself(
    rigged: Rigged, pretender: Pretender
) -> None:
    rigged.link._wait_s = 0.05
    while not rigged.exchange().fresh:
        pass
    pretender.answer = silent
    held = [rigged.exchange() for _ in range(2)]
    assert all(drive.mode == "armed" and not drive.fresh and drive.reasons == Reason.LINK for drive in held)
    assert all(drive.action == pytest.approx([0.1]) for drive in held)
    asked = rigged.link._seq
    fallen = rigged.exchange()
    assert fallen.mode == "latched" and fallen.version == 0
    assert fallen.reasons == Reason.LINK | Reason.LATCHED
    # A silence of a deadline and two periods lets the server latch too.
    pretender.answer = lambda act: [pretender.action(act, 0.0, mode="latched", reasons=512 | 4)]
    quiet = [rigged.exchange() for _ in range(round((DEADLINE_S + 2 * PERIOD_S) / PERIOD_S) - 1)]
    assert not any(drive.fresh for drive in quiet)
    assert rigged.link._seq == asked + 1
    rigged.link._wait_s = 2.0
    back = rigged.exchange()
    assert back.fresh and back.mode == "latched" and back.reasons & Reason.GAP
    assert len(pretender.hellos) == 2 and pretender.hellos[1].session != pretender.hellos[0].session
    pretender.answer = lambda act: [pretender.action(act, 0.1)]
    assert rigged.exchange().mode == "armed"


def test_a_service_that_never_was_there_leaves_the_rig_at_rest() -> None:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        address = f"tcp://127.0.0.1:{probe.getsockname()[1]}"
    rigged = Rigged(crane(), address, wait_s=0.001)
    try:
        for _ in range(30):
            drive = rigged.exchange()
            assert drive.mode == "latched" and drive.action == pytest.approx([0.0]) and drive.reasons & Reason.LINK
    finally:
        rigged.link.close()


def test_a_late_reply_is_never_taken_for_the_present_one(rigged: Rigged, pretender: Pretender) -> None:
    assert rigged.exchange().fresh
    kept: list[bytes] = []

    def late(act: Act) -> list[bytes]:
        kept.append(pretender.action(act, -0.1))
        return []

    pretender.answer = late
    rigged.link._wait_s = 0.05
    assert rigged.exchange().action == pytest.approx([0.1])
    pretender.answer = lambda act: [*kept, pretender.action(act, 0.2)]
    rigged.link._wait_s = 2.0
    drive = rigged.exchange()
    assert drive.fresh and drive.action == pytest.approx([0.2])


@pytest.mark.parametrize(
    "changes",
    [
        {"action": pack([np.nan])}, {"action": pack([np.inf])}, {"action": pack([0.1, 0.2])}, {"action": b"xyz"},
        {"seq": 10**9}, {"mode": "running"}, {"kind": "welcome"}, {"v": 2}, {"novelty": float("nan")},
    ],
    ids=str,
)  # fmt: skip
def test_wrong_replies_count_as_silence(rigged: Rigged, pretender: Pretender, changes: dict[str, Any]) -> None:
    assert rigged.exchange().fresh
    rigged.link._wait_s = 0.05
    pretender.answer = lambda act: [pretender.action(act, **changes)]
    first, second, third = (rigged.exchange() for _ in range(3))
    assert not (first.fresh or second.fresh or third.fresh)
    assert third.mode == "latched" and third.reasons & Reason.LINK


def test_a_wrong_service_is_held_to_limits_slew_and_braking(rigged: Rigged, pretender: Pretender) -> None:
    pretender.answer = lambda act: [pretender.action(act, 100.0)]
    first = rigged.exchange()
    assert first.action == pytest.approx([0.2]) and first.reasons == Reason.CLIPPED | Reason.SLEWED
    for _ in range(6):
        last = rigged.exchange()
    assert last.action == pytest.approx([1.0]) and last.reasons == Reason.CLIPPED
    near = np.array([39.5, 1.0], dtype=np.float32)
    braked = [rigged.exchange(near) for _ in range(12)]
    assert all(drive.reasons & Reason.BRAKED for drive in braked)
    assert braked[-1].action == pytest.approx([-0.8])


def test_a_flood_of_garbage_does_not_hold_the_link(rigged: Rigged, pretender: Pretender) -> None:
    assert rigged.exchange().fresh
    pretender.answer = lambda act: [b"\xc1"] * 500
    begin_s = time.monotonic()
    for _ in range(6):
        drive = rigged.exchange()
    assert drive.mode == "latched"
    assert time.monotonic() - begin_s < PATIENCE_S / 2


def test_a_reply_buried_in_garbage_is_not_dug_for(rigged: Rigged, pretender: Pretender) -> None:
    assert rigged.exchange().fresh
    pretender.answer = lambda act: [b"\xc1"] * 200 + [pretender.action(act)]
    assert not rigged.exchange().fresh


def test_a_restarted_service_is_greeted_again(rigged: Rigged, pretender: Pretender) -> None:
    assert rigged.exchange().fresh

    def forgotten(act: Act) -> list[bytes]:
        return [encode(ErrorReply(code="unknown.session", message="say hello", seq=act.seq))]

    pretender.answer = forgotten
    assert not rigged.exchange().fresh
    pretender.answer = lambda act: [pretender.action(act, 0.0, mode="latched", reasons=512 | 1024)]
    again = rigged.exchange()
    assert again.fresh and again.reasons & Reason.RESTARTED and len(pretender.hellos) == 2


def test_a_replaced_session_gives_up_the_machine_for_good(rigged: Rigged, pretender: Pretender) -> None:
    assert rigged.exchange().fresh
    pretender.answer = lambda act: [encode(ErrorReply(code="conflict.session", message="replaced", seq=act.seq))]
    assert not rigged.exchange().fresh
    pretender.answer = lambda act: [pretender.action(act)]
    asked = len(pretender.acts)
    drives = [rigged.exchange() for _ in range(20)]
    assert not any(drive.fresh for drive in drives)
    assert len(pretender.acts) == asked and drives[-1].mode == "latched"


def test_the_links_own_fallback_brakes_by_what_the_rig_sees(rigged: Rigged, pretender: Pretender) -> None:
    assert rigged.exchange().fresh
    pretender.answer = silent
    rigged.link._wait_s = 0.001
    velocity = 1.0
    for _ in range(300):
        drive = rigged.exchange(np.array([0.0, velocity], dtype=np.float32))
        velocity += PERIOD_S * float(drive.action[0])
        assert abs(drive.action[0]) <= 1.0
    assert velocity == pytest.approx(0.0, abs=1e-3)


anything = st.one_of(
    st.lists(st.floats(width=32), max_size=4), st.none(), st.text(max_size=3), st.floats(), st.binary(max_size=3),
    st.lists(st.lists(st.floats(), max_size=2), max_size=3), st.just([1e300, -1e300]),
)  # fmt: skip


@settings(max_examples=80, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    plan=st.lists(
        st.tuples(
            anything, st.floats(-(2.0**90), 2.0**90, width=32), st.sampled_from(["armed", "latched", "empty", "silent"])
        ),
        max_size=8,
    )
)
def test_exchange_never_raises_and_never_leaves_limits_or_slew(
    rigged: Rigged, pretender: Pretender, plan: list[tuple[Any, float, str]]
) -> None:
    held = np.array(rigged.link._held)
    for observation, value, mode in plan:
        rigged.link._wait_s = 0.001 if mode == "silent" else 1.0

        def answer(act: Act, value: float = value, mode: str = mode) -> list[bytes]:
            return [] if mode == "silent" else [pretender.action(act, value, mode=mode)]

        pretender.answer = answer
        drive = rigged.exchange(observation)
        assert drive.action.shape == (1,) and np.isfinite(drive.action).all()
        assert abs(drive.action[0]) <= 1.0 and abs(drive.action[0] - held[0]) <= 0.2 + 2e-7
        held = drive.action


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
        """Send a control request and return its reply."""
        control = make_socket(self._context, zmq.DEALER, queue=BULK_QUEUE, role="connect")
        try:
            control.connect(self.settings.control)
            control.send(encode(message))
            assert control.poll(round(PATIENCE_S * 1e3))
            reply = decode(control.recv(), CONTROL_REPLIES)
        finally:
            control.close(linger=0)
        assert isinstance(reply, ControlReply), reply
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


@pytest.fixture
def server(context: Context, tmp_path: Path) -> Iterator[Server]:
    """A running action server process."""
    made = Server(context, tmp_path)
    yield made
    made.close()


class Pace:
    """Exchanges in real time, one per control period, as a rig's program would."""

    def __init__(self, link: RigLink) -> None:
        self.link = link
        self.drives: list[Drive] = []

    def until(self, wanted: Callable[[Drive], bool], observation: Float32 = STILL) -> Drive:
        """Exchange until a drive is as wanted; every action on the way is checked."""
        end_s = time.monotonic() + PATIENCE_S
        previous = self.drives[-1].action if self.drives else np.zeros(1, dtype=np.float32)
        while time.monotonic() < end_s:
            begin_s = time.monotonic()
            drive = self.link.exchange(observation)
            assert np.isfinite(drive.action).all() and abs(drive.action[0]) <= 1.0
            assert abs(drive.action[0] - previous[0]) <= 0.2 + 2e-7
            previous = drive.action
            self.drives.append(drive)
            if wanted(drive):
                return drive
            time.sleep(max(0.0, PERIOD_S - (time.monotonic() - begin_s)))
        raise AssertionError(f"not within {PATIENCE_S} s; last: {self.drives[-1]}")


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


def test_a_killed_server_is_outlived_and_comes_back_latched(server: Server, pace: Pace) -> None:
    server.kill()
    killed_s = time.monotonic()
    fallen = pace.until(lambda drive: drive.mode == "latched")
    # Lease, one period to notice, one of waiting; the rest is for a busy machine.
    assert time.monotonic() - killed_s < LEASE_S + 2 * PERIOD_S + 1.0
    assert fallen.reasons & Reason.LINK and not fallen.fresh
    pace.until(lambda drive: abs(float(drive.action[0])) < 1e-6)
    server.start()
    state = server.load(policy_bytes())
    assert state.mode == "latched" and state.reasons & Reason.RESTARTED
    back = pace.until(lambda drive: drive.fresh)
    assert back.mode == "latched" and back.reasons & Reason.RESTARTED
    latched = [pace.until(lambda drive: drive.fresh) for _ in range(10)]
    assert all(drive.mode == "latched" for drive in latched)
    server.arm()
    assert pace.until(lambda drive: drive.mode == "armed").version == 1


def test_a_stopped_server_finds_itself_latched_when_it_goes_on(server: Server, pace: Pace) -> None:
    server.signal(signal.SIGSTOP)
    try:
        pace.until(lambda drive: drive.mode == "latched")
        assert pace.drives[-1].reasons & Reason.LINK
    finally:
        server.signal(signal.SIGCONT)
    back = pace.until(lambda drive: drive.fresh)
    assert back.mode == "latched" and back.reasons & Reason.LATCHED
    server.arm()
    assert pace.until(lambda drive: drive.mode == "armed").fresh


def test_a_rig_that_pauses_finds_the_server_latched(server: Server, pace: Pace) -> None:
    time.sleep(3 * DEADLINE_S)
    back = pace.until(lambda drive: drive.fresh)
    assert back.mode == "latched" and back.reasons & Reason.GAP


def test_garbage_from_another_client_does_not_disturb_the_rig(server: Server, pace: Pace, context: Context) -> None:
    vandal = context.socket(zmq.DEALER)
    vandal.setsockopt(zmq.LINGER, 0)
    vandal.setsockopt(zmq.RCVHWM, 10)  # it does not read its replies
    vandal.connect(server.settings.action)
    generator = np.random.default_rng(2)
    fresh = 0
    for _ in range(40):
        for _ in range(25):
            with contextlib.suppress(zmq.Again):
                vandal.send(generator.bytes(int(generator.integers(0, 300))), flags=zmq.NOBLOCK)
        fresh += pace.until(lambda drive: True).fresh
    vandal.close(linger=0)
    assert fresh >= 20
    if pace.drives[-1].mode != "armed":
        server.arm()
    assert pace.until(lambda drive: drive.fresh).version == 1


def test_a_policy_that_overflows_trips_and_the_next_version_can_be_armed(server: Server, pace: Pace) -> None:
    server.load(policy_bytes(0.0, weight=3e37), version=2)
    tripped = pace.until(lambda drive: drive.mode == "latched", np.array([30.0, 0.0], dtype=np.float32))
    assert tripped.reasons & Reason.OUTPUT or tripped.reasons & (Reason.LINK | Reason.GAP)
    state = server.load(policy_bytes(-0.1), version=3)
    assert (state.mode, state.version) == ("latched", 3)
    server.arm()
    assert pace.until(lambda drive: drive.mode == "armed").version == 3


def test_strangeness_trips_at_the_rig_and_an_operator_rearms(server: Server, pace: Pace) -> None:
    server.load(policy_bytes(gate=True), version=2)
    strange = np.array([30.0, 0.0], dtype=np.float32)
    tripped = pace.until(lambda drive: drive.mode == "latched", strange)
    assert tripped.reasons & Reason.LATCHED
    pace.until(lambda drive: drive.fresh)
    for _ in range(5):
        assert pace.until(lambda drive: drive.fresh).mode == "latched"
    server.arm()
    assert pace.until(lambda drive: drive.mode == "armed").version == 2


def test_sigterm_ends_it_at_once_even_while_it_waits(server: Server) -> None:
    begin_s = time.monotonic()
    server.close()
    assert time.monotonic() - begin_s < PATIENCE_S / 4
