"""Faults, one by one, with what each end did about them."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
import zmq
from numpy.typing import NDArray

from nearhand.client.desk import Desk
from nearhand.client.tryout.asking import Asking
from nearhand.client.tryout.driving import Drive
from nearhand.client.tryout.judging import arm
from nearhand.client.tryout.narrator import Narrator
from nearhand.client.tryout.plan import WHO, Plan
from nearhand.client.tryout.service_process import ServiceProcess
from nearhand.client.tryout.swapping import demonstrated_observations
from nearhand.service.bus.action_messages import Action, Reason, reason_names
from nearhand.service.bus.arrays import unpack
from nearhand.service.bus.codec import decode, encode
from nearhand.service.bus.control_messages import CONTROL_REPLIES, Arm, ControlReply, Load
from nearhand.service.bus.desk_messages import EventsReply, GetHealth, HealthReply, ListEvents
from nearhand.service.bus.message import Message
from nearhand.service.bus.sockets import BULK_QUEUE, connect, make_socket
from nearhand.service.config import ServiceSettings
from nearhand.service.errors import LinkError
from nearhand.service.main import free_ports
from nearhand.service.policy.format import PolicyFile, sha256, write_policy
from nearhand.service.policy.network import Float32, Policy
from nearhand.service.rigs import Rig

ACTION_SERVER = "nearhand.service.action.process"
#: Observations beyond this many standard deviations overflow the deliberately damaged policy.
OVERFLOW_SD = 50.0
#: How long the rig is driven around the kill.
KILL_DRIVE_S = 4.0
#: Control periods that may pass armed after the kill: a lease, and the pace of the rig process' own telling.
MARGIN = 12


def inject_all(desk: Desk, narrator: Narrator, plan: Plan, service: ServiceProcess) -> None:
    """Inject every fault of the tryout, and re-arm after each."""
    observations = demonstrated_observations(desk, plan)
    silence(desk, narrator, plan, service.lanes["action"], observations)
    strangeness(desk, narrator, plan, service.lanes["action"], observations)
    overflow(narrator, plan.rig)
    killed_server(desk, narrator, plan, service)


def within_limits(rig: Rig, reply: Action | None) -> bool:
    """Tell whether an answer came and its action is finite and within the channels' limits."""
    if reply is None:
        return False
    action = unpack(reply.action, len(rig.actions), what="action")
    low = np.array([channel.low for channel in rig.actions], dtype=np.float32)
    high = np.array([channel.high for channel in rig.actions], dtype=np.float32)
    return bool(np.isfinite(action).all() and (action >= low).all() and (action <= high).all())


def ask_at_pace(asking: Asking, rig: Rig, observations: NDArray[np.float32], count: int) -> list[Action | None]:
    """Ask ``count`` times, one control period apart, and return the replies."""
    replies = []
    due_s = time.monotonic()
    for index in range(count):
        replies.append(asking.ask(observations[index % len(observations)]))
        due_s += rig.timing.period_s
        time.sleep(max(0.0, due_s - time.monotonic()))
    return replies


def await_mode(desk: Desk, rig: str, mode: str, *, timeout_s: float = 5.0) -> bool:
    """Wait until the service shows a rig in a mode."""
    end_s = time.monotonic() + timeout_s
    while time.monotonic() < end_s:
        state = desk.ask(GetHealth, HealthReply).rigs.get(rig, {})
        if state.get("mode") == mode:
            return True
        time.sleep(0.05)
    return False


def trips_of(desk: Desk, rig: str) -> list[dict[str, object]]:
    """Return the trips in the event record."""
    found: list[dict[str, object]] = []
    after = 0
    while events := desk.ask(ListEvents, EventsReply, rig=rig, after=after, limit=500).events:
        found.extend(event for event in events if event["what"] == "trip")
        after = int(events[-1]["event"])
    return found


def silence(desk: Desk, narrator: Narrator, plan: Plan, address: str, observations: NDArray[np.float32]) -> None:
    """The rig stops asking: the server's watchdog latches it."""
    with Asking(plan.rig, address, "fault-silence") as asking:
        asking.hello()
        arm(desk, plan, why="tryout: before the silence")
        before = len(trips_of(desk, plan.rig.name))
        armed = [reply for reply in ask_at_pace(asking, plan.rig, observations, 25) if reply and reply.mode == "armed"]
        latched = await_mode(desk, plan.rig.name, "latched")
        narrator.check(len(armed) == 25 and latched, "the rig stops asking: the watchdog latches it")
        reply = asking.ask(observations[25])
        flags = reply.reasons if reply else 0
        held = bool(flags & Reason.GAP) and bool(reply and reply.mode == "latched")
        narrator.check(held, f"asking again does not start it: {', '.join(reason_names(flags))}")
        narrator.check(await_more_trips(desk, plan.rig.name, before), "the trip stands in the event record")


def await_more_trips(desk: Desk, rig: str, before: int, *, timeout_s: float = 5.0) -> bool:
    """Wait until the event record holds more trips than before."""
    end_s = time.monotonic() + timeout_s
    while time.monotonic() < end_s:
        if len(trips_of(desk, rig)) > before:
            return True
        time.sleep(0.05)
    return False


def strangeness(desk: Desk, narrator: Narrator, plan: Plan, address: str, observations: NDArray[np.float32]) -> None:
    """An observation far from the demonstrations: the confidence gate latches; an operator re-arms."""
    low = observations.min(axis=0)
    high = observations.max(axis=0)
    far = (high + 20 * (high - low) + 1.0).astype(np.float32)
    with Asking(plan.rig, address, "fault-strange") as asking:
        asking.hello()
        arm(desk, plan, why="tryout: before the strange observation")
        ask_at_pace(asking, plan.rig, observations, 25)
        strange = ask_at_pace(asking, plan.rig, np.tile(far, (plan.rig.novelty.window_n, 1)), plan.rig.novelty.window_n)
        last = strange[-1]
        tripped = bool(last and last.reasons & Reason.NOVEL and last.mode == "latched")
        lowest = min((reply.novelty for reply in strange if reply), default=1.0)
        narrator.check(tripped, f"observations far from the demonstrations trip the confidence gate (p = {lowest:.3g})")
        after = ask_at_pace(asking, plan.rig, observations, 5)
        narrator.check(
            all(reply and reply.mode == "latched" for reply in after), "it stays latched on good observations"
        )
        narrator.check(
            all(within_limits(plan.rig, reply) for reply in (*strange, *after)), "every answer was finite and in limits"
        )
        state = arm(desk, plan, why="tryout: the observation is explained")
        ask_at_pace(asking, plan.rig, observations, 3)
        narrator.check(state.mode == "armed", "an operator re-arms it")


def damaged_policy(rig: Rig) -> bytes:
    """Return a policy file that passes every check and overflows to infinity on a strange first observation.

    Two hidden units of opposite sign cancel until the first channel exceeds OVERFLOW_SD standard deviations.
    """
    n, m = len(rig.observations), len(rig.actions)
    first = np.zeros((n, 2), dtype=np.float32)
    first[0, 0] = 10.0
    policy = Policy(
        weights=(first, np.full((2, m), 3e38, dtype=np.float32)),
        biases=(np.array([-10.0 * OVERFLOW_SD, 20.0], dtype=np.float32), np.zeros(m, dtype=np.float32)),
        observation_mean=np.zeros(n, dtype=np.float32),
        observation_scale=np.ones(n, dtype=np.float32),
        action_middle=np.zeros(m, dtype=np.float32),
        action_half=np.ones(m, dtype=np.float32),
        log_sd=np.zeros(m, dtype=np.float32),
    )
    novelty: dict[str, Float32] = {}
    names = tuple(channel.name for channel in rig.observations), tuple(channel.name for channel in rig.actions)
    return write_policy(PolicyFile(policy, rig.name, *names, method="clone", novelty=novelty, extra={}))


def overflow(narrator: Narrator, rig: Rig) -> None:
    """A policy whose output is not finite, in an action server of its own: the machine never sees it."""
    with tempfile.TemporaryDirectory(prefix="nearhand-") as folder:
        settings = _settings(Path(folder))
        path = Path(folder) / "settings.json"
        path.write_text(settings.model_dump_json(), encoding="utf-8")
        ready_read, ready_write = os.pipe()
        process = subprocess.Popen(
            [
                sys.executable, "-m", ACTION_SERVER, "--settings", str(path), "--ready-fd", str(ready_write),
                "--parent", str(os.getpid()),
            ],
            pass_fds=[ready_write],
        )  # fmt: skip
        os.close(ready_write)
        try:
            ready = os.read(ready_read, 16)
            narrator.check(bool(ready), "an action server of its own is started")
            _load_and_arm(settings.control, rig)
            with Asking(rig, settings.action, "fault-overflow") as asking:
                asking.hello()
                usual = asking.ask(np.zeros(len(rig.observations), dtype=np.float32))
                strange = np.zeros(len(rig.observations), dtype=np.float32)
                strange[0] = 10 * OVERFLOW_SD
                reply = asking.ask(strange)
            tripped = bool(reply and reply.reasons & Reason.OUTPUT and reply.mode == "latched")
            narrator.check(
                bool(usual and usual.mode == "armed") and tripped, "a policy output that is not finite latches"
            )
            narrator.check(within_limits(rig, reply), "the action in its place is finite and in limits")
        finally:
            os.close(ready_read)
            process.send_signal(signal.SIGTERM)
            process.wait(10.0)


def _settings(folder: Path) -> ServiceSettings:
    (port,) = free_ports("127.0.0.1", 1)
    unused = f"ipc://{folder / 'unused.ipc'}"
    return ServiceSettings(
        data=folder,
        action=f"tcp://127.0.0.1:{port}",
        intake=unused,
        desk=unused,
        feed=unused,
        control=f"ipc://{folder / 'control.ipc'}",
        progress=unused,
    )


def _load_and_arm(control: str, rig: Rig) -> None:
    policy = damaged_policy(rig)
    context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
    socket = make_socket(context, zmq.DEALER, queue=BULK_QUEUE, role="connect")
    try:
        connect(socket, control)
        description = rig.model_dump(mode="json")
        requests: tuple[Message, ...] = (
            Load(request="1", rig=rig.name, description=description, version=1, sha256=sha256(policy), policy=policy),
            Arm(request="2", rig=rig.name, who=WHO, why="tryout: output fault"),
        )
        for request in requests:
            socket.send(encode(request))
            reply = decode(socket.recv(), CONTROL_REPLIES) if socket.poll(5_000) else None
            if not isinstance(reply, ControlReply):
                raise LinkError(f"the action server did not accept {request.kind}: {reply!r}")
    finally:
        socket.close(linger=0)
        context.term()


def killed_server(desk: Desk, narrator: Narrator, plan: Plan, service: ServiceProcess) -> None:
    """The action server is killed while a rig is driven: the link holds the machine; the server comes back latched."""
    arm(desk, plan, why="tryout: before the kill")
    periods = round(KILL_DRIVE_S / plan.rig.timing.period_s)
    with Drive(plan, service.lanes["action"], episodes=1, paced=True, seed=plan.drive_seed, steps=periods) as drive:
        drive.await_steps(25)
        killed = service.kill(ACTION_SERVER)
        before = drive.steps
        killed_at_s = time.monotonic()
        service.await_restart(ACTION_SERVER, killed)
        narrator.say(f"the action server was killed and restarted within {time.monotonic() - killed_at_s:.2f} s")
        total = drive.finish(10 * KILL_DRIVE_S)
    armed, fallback = int(total["modes"].get("armed", 0)), int(total["fallback_steps"])
    narrator.check(fallback > 0, f"the rig-side link held the machine with its own fallback for {fallback} periods")
    narrator.check(armed <= before + MARGIN, f"armed for {armed} periods, until just after the kill, and not again")
    narrator.check(await_mode(desk, plan.rig.name, "latched"), "the service came back latched")
    state = arm(desk, plan, why="tryout: after the restart")
    narrator.check(state.mode == "armed" and state.version > 0, f"re-armed with version {state.version}")
