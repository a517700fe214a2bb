"""The rig's end of the wire: its watchdog, its fallback, and how it and a real action server agree after trouble."""

from __future__ import annotations

import contextlib
import signal
import socket
import time
from typing import Any

import numpy as np
import pytest
import zmq
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from nearhand.service.bus.action_messages import Act, Reason
from nearhand.service.bus.arrays import pack
from nearhand.service.bus.codec import encode
from nearhand.service.bus.message import ErrorReply
from tests.client.pretenders import (
    DEADLINE_S,
    LEASE_S,
    PATIENCE_S,
    PERIOD_S,
    Context,
    Pace,
    Pretender,
    Rigged,
    Server,
    crane,
    policy_bytes,
    silent,
)


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
    # A silence of two deadlines and two periods lets the server latch too, whatever is still under way.
    pretender.answer = lambda act: [pretender.action(act, 0.0, mode="latched", reasons=512 | 4)]
    quiet = [rigged.exchange() for _ in range(round(2 * (DEADLINE_S + PERIOD_S) / PERIOD_S) - 1)]
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
