"""The loop: one reply for every request, control without harm, occurrences that arrive."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import msgpack
import numpy as np
import pytest
import zmq
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from nearhand.service.action.governor import Governor
from nearhand.service.bus.action_messages import Action, Reason, Welcome
from nearhand.service.bus.arrays import pack, unpack
from nearhand.service.bus.codec import encode
from nearhand.service.bus.control_messages import Arm, ControlReply, Drain, DrainReply, Latch, Load
from nearhand.service.bus.message import ErrorReply, Message
from nearhand.service.policy.format import PolicyFile, write_policy
from nearhand.service.rigs import Rig

if TYPE_CHECKING:
    from tests.action.conftest import Lane, Served

RigWith = Callable[..., Rig]
FileWith = Callable[..., PolicyFile]


def code(reply: Message) -> str:
    """Return the code of an error reply."""
    assert isinstance(reply, ErrorReply), reply
    return reply.code


def drain(served: Served, after: int = 0) -> DrainReply:
    """Return the drained occurrences and states."""
    reply = served.do(Drain, after=after)
    assert isinstance(reply, DrainReply)
    return reply


@pytest.fixture
def rig(rig_with: RigWith) -> Rig:
    """The small rig."""
    return rig_with()


@pytest.fixture
def lane(served: Served, rig: Rig, file_with: FileWith) -> Lane:
    """A session on a rig that is armed with version 1."""
    served.load(rig, 1, file_with((0.1, 0.25)))
    served.arm(rig)
    opened = served.lane(rig)
    assert isinstance(opened.hello(), Welcome)
    return opened


@pytest.mark.parametrize("kind", [zmq.DEALER, zmq.REQ], ids=["dealer", "req"])
def test_a_loaded_rig_is_latched_until_armed_then_acts(
    served: Served, rig: Rig, file_with: FileWith, kind: int
) -> None:
    state = served.load(rig, 3, file_with((0.1, 0.25)))
    assert isinstance(state, ControlReply)
    assert (state.mode, state.version) == ("latched", 3) and state.reasons & Reason.RESTARTED
    lane = served.lane(rig, kind=kind)
    welcome = lane.hello()
    assert isinstance(welcome, Welcome)
    assert (welcome.mode, welcome.version, welcome.deadline_s, welcome.lease_s) == ("latched", 3, 0.1, 0.06)
    assert lane.action().mode == "latched"
    armed = served.arm(rig)
    assert isinstance(armed, ControlReply) and armed.mode == "armed"
    reply = lane.action(sent_ns=77)
    assert (reply.mode, reply.version, reply.seq, reply.sent_ns, reply.lease_s) == ("armed", 3, 2, 77, 0.06)
    assert unpack(reply.action, 2, what="action") == pytest.approx([0.1, 0.25])


def test_each_kind_of_wrong_query_has_its_code_and_its_number(served: Served, rig: Rig, lane: Lane) -> None:
    wrong: list[tuple[str, dict[str, Any]]] = [
        ("unknown.rig", {"rig": "nobody"}),
        ("conflict.session", {"session": "other"}),
        ("wire.vector_size", {"applied": pack([0.0])}),
        ("wire.vector_size", {"obs": b"\0" * 7}),
        ("wire.vector_size", {"obs": (0.0,)}),
    ]
    for expected, changes in wrong:
        reply = lane.act(**changes)
        assert code(reply) == expected
        assert isinstance(reply, ErrorReply) and reply.seq == lane.seq
    assert drain(served).counters["action_errors"] == len(wrong)
    assert code(served.lane(rig).act(rig="nobody")) == "unknown.rig"
    # An observation of the wrong size is a malformed one: it also trips.
    assert lane.action().reasons & Reason.FORM


def test_a_hello_must_fit_the_rig(served: Served, rig: Rig, file_with: FileWith) -> None:
    served.load(rig, 1, file_with())
    lane = served.lane(rig)
    assert code(lane.act()) == "unknown.session"
    assert code(lane.hello(rig="nobody")) == "unknown.rig"
    assert code(lane.hello(observations=("o1", "o0", "o2"))) == "conflict.channels"
    assert code(lane.hello(actions=("u",))) == "conflict.channels"
    assert code(lane.hello(period_s=0.01)) == "conflict.period"
    assert isinstance(lane.hello(), Welcome)


def test_a_newer_session_replaces_the_older_one(served: Served, rig: Rig, lane: Lane) -> None:
    newer = served.lane(rig, "s2")
    assert isinstance(newer.hello(), Welcome)
    assert code(lane.act()) == "conflict.session"
    assert newer.action().mode == "armed"


def test_lists_of_numbers_are_taken_as_well_as_bytes(lane: Lane) -> None:
    reply = lane.action(obs=(0.0, 1.0, 2.0), applied=(0.1, 0.25))
    assert reply.mode == "armed"
    assert lane.action(obs=(0.0, float("nan"), 2.0)).reasons & Reason.FORM


@settings(max_examples=150, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(frame=st.binary(max_size=200))
def test_any_bytes_get_exactly_one_reply(lane: Lane, frame: bytes) -> None:
    lane.send(frame)
    assert isinstance(lane.receive(), ErrorReply)
    assert lane.action().mode == "armed"
    assert not lane.socket.poll(0)


json_like = st.recursive(
    st.none() | st.booleans() | st.integers(-(2**63), 2**64 - 1) | st.floats() | st.text(max_size=8)
    | st.binary(max_size=16),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=4), inner, max_size=3),
    max_leaves=6,
)  # fmt: skip


@settings(max_examples=200, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    kind=st.sampled_from(["act", "hello", "action", "", "error"]),
    changes=st.dictionaries(
        st.sampled_from(["v", "rig", "session", "seq", "sent_ns", "obs", "applied", "observations", "period_s", "x"]),
        json_like, max_size=3,
    ),
    dropped=st.sets(st.sampled_from(["v", "rig", "session", "seq", "sent_ns", "obs"]), max_size=1),
)  # fmt: skip
def test_any_map_gets_exactly_one_reply_and_every_action_is_in_limits(
    lane: Lane, kind: str, changes: dict[str, Any], dropped: set[str]
) -> None:
    lane.seq += 1
    table: dict[str, Any] = {
        "v": 1, "kind": kind, "rig": "rig", "session": "s1", "seq": lane.seq, "sent_ns": 0, "obs": pack([0, 0, 0]),
    }  # fmt: skip
    table.update(changes)
    for name in dropped:
        table.pop(name, None)
    lane.send(msgpack.packb(table))
    reply = lane.receive()
    assert isinstance(reply, Action | ErrorReply | Welcome)
    if isinstance(reply, Action):
        action = unpack(reply.action, 2, what="action")
        assert np.isfinite(action).all() and (np.abs(action) <= 2.0).all() and abs(action[0]) <= 1.0
        lane.seq = max(lane.seq, reply.seq) if reply.seq < 2**40 else lane.seq
    assert not lane.socket.poll(0)


def test_extra_frames_and_an_empty_message_are_answered_once(lane: Lane) -> None:
    for parts in ([b"a", b"b"], [b"", b"", b"x"], [b""]):
        lane.socket.send_multipart(parts)
        assert lane.socket.poll(5_000)
        reply = lane.socket.recv_multipart()
        assert msgpack.unpackb(reply[-1])["code"] == "wire.malformed"
    assert lane.action().mode == "armed"


def test_hundreds_of_queries_at_once_are_all_answered(lane: Lane) -> None:
    frames = []
    for _ in range(400):
        lane.seq += 1
        frames.append(
            msgpack.packb(
                {
                    "v": 1, "kind": "act", "rig": "rig", "session": "s1", "seq": lane.seq, "sent_ns": 0,
                    "obs": pack([0, 0, 0]),
                }
            )
        )  # fmt: skip
    for frame in frames:
        lane.send(frame)
    assert [getattr(lane.receive(), "seq", None) for _ in frames] == list(range(1, 401))


def test_silence_latches_and_is_told_with_its_time(served: Served, rig: Rig, lane: Lane) -> None:
    lane.action()
    served.clock.advance_s(0.2)
    reply = lane.action(sent_ns=200_000_000)
    assert reply.mode == "latched" and reply.reasons & Reason.GAP
    occurrences = drain(served).occurrences
    assert [item["what"] for item in occurrences] == ["loaded", "armed", "session", "trip"]
    assert [item["number"] for item in occurrences] == [1, 2, 3, 4]
    assert occurrences[-1]["detail"] == {"reason": "gap", "version": 1}
    assert occurrences[1]["detail"] == {"who": "ann", "why": "clear"}
    assert drain(served, after=3).occurrences == occurrences[3:]
    assert drain(served, after=4).occurrences == ()


def test_an_operator_latches_and_the_state_is_told(served: Served, rig: Rig, lane: Lane) -> None:
    lane.action((1.0, 2.0, 3.0))
    latched = served.do(Latch, rig="rig", who="ben", why="somebody in the bay")
    assert isinstance(latched, ControlReply) and latched.mode == "latched"
    assert lane.action((1.0, 2.0, 3.0)).reasons & Reason.OPERATOR
    reply = drain(served)
    state = reply.rigs["rig"]
    assert (state["mode"], state["version"], state["queries"], state["trips"]) == ("latched", 1, 2, 1)
    assert state["observation"] == (1.0, 2.0, 3.0) and reply.instance == "life-1"


def test_a_bad_load_changes_nothing(served: Served, rig: Rig, lane: Lane, file_with: FileWith) -> None:
    data = write_policy(file_with((-0.1, 0.25)))
    description = rig.model_dump(mode="json")
    damaged = bytearray(data)
    damaged[-1] ^= 1
    attempts: list[tuple[str, dict[str, Any]]] = [
        ("policy.format", {"policy": bytes(damaged), "sha256": "0" * 64}),
        ("policy.format", {"policy": b"", "sha256": "0" * 64}),
        ("policy.rig", {"policy": write_policy(file_with(rig="other")), "sha256": None}),
        ("config.rig", {"description": {**description, "timing": {}}}),
    ]
    for expected, changes in attempts:
        fields = {"rig": "rig", "description": description, "version": 9, "policy": data, "sha256": None, **changes}
        if fields["sha256"] is None:
            from nearhand.service.policy.format import sha256

            fields["sha256"] = sha256(fields["policy"])
        assert code(served.do(Load, **fields)) == expected
        assert (lane.action().version, lane.action().mode) == (1, "armed")


def test_control_answers_whatever_comes(served: Served, rig: Rig, lane: Lane) -> None:
    assert code(served.do(Arm, rig="nobody", who="", why="")) == "unknown.rig"
    assert code(served.control(b"\xc1")) == "wire.malformed"
    assert code(served.control(msgpack.packb({"v": 1, "kind": "arm", "request": "x" * 500}))) == "wire.fields"
    assert code(served.control(msgpack.packb({"v": 1, "kind": "load", "request": 7}))) == "wire.fields"
    served.load(rig, 0, None)
    assert code(served.arm(rig)) == "conflict.empty"
    assert lane.action().mode == "empty"


def test_another_description_of_the_rig_latches_and_ends_the_session(
    served: Served, rig_with: RigWith, lane: Lane, file_with: FileWith
) -> None:
    state = served.load(rig_with(title="moved"), 1, file_with())
    assert isinstance(state, ControlReply) and state.mode == "latched"
    assert code(lane.act()) == "unknown.session"


def test_versions_swap_under_load_without_a_query_unanswered_or_mixed(
    served: Served, rig: Rig, lane: Lane, file_with: FileWith
) -> None:
    files = {
        1: file_with((0.1, 0.25)),
        2: file_with((-0.3, 0.4), gain=0.3, past=(2, 2)),
        3: file_with((0.3, 0.1), gain=-0.3),
    }
    generator = np.random.default_rng(5)
    rows = generator.standard_normal((600, 3)).astype(np.float32)
    replies = []
    for index, row in enumerate(rows):
        if index % 50 == 25:
            version = 1 + (index // 50) % 3
            state = served.load(rig, version, files[version])
            assert isinstance(state, ControlReply) and state.mode == "armed"
            assert lane.seq == index
        reply = lane.action(tuple(row))
        if index % 50 == 25:
            assert reply.version == version  # in the very next query
        replies.append(reply)
    mirror = Governor(rig)
    mirror.load(1, files[1])
    mirror.arm()
    mirror.begin_session("s", 0)
    for index, (row, reply) in enumerate(zip(rows, replies, strict=True)):
        if reply.version != mirror.version:
            mirror.load(reply.version, files[reply.version])
        expected = mirror.act(row, index + 1, 0, 0)
        assert np.array_equal(unpack(reply.action, 2, what="action"), expected.action)
        assert (reply.mode, reply.reasons) == (expected.mode, expected.reasons)


def test_encoded_replies_are_what_the_message_model_reads(lane: Lane) -> None:
    lane.seq += 1
    frame = msgpack.packb(
        {"v": 1, "kind": "act", "rig": "rig", "session": "s1", "seq": lane.seq, "sent_ns": 5, "obs": [0, 0, 0]}
    )
    lane.send(frame)
    raw = lane.socket.recv()
    table = msgpack.unpackb(raw)
    assert list(table)[:2] == ["v", "kind"]
    assert encode(Action(**table)) == raw
