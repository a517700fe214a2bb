"""The quick ways must say what the plain ones say: hand-checked queries, the policy in memory taken once."""

from __future__ import annotations

from itertools import pairwise
from typing import Any

import msgpack
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from nearhand.service.action.serving import DEPTH, ROOM, History, Serving
from nearhand.service.bus import queries
from nearhand.service.bus.action_messages import ACTION_REQUESTS, Act
from nearhand.service.bus.codec import decode, decode_map, encode, from_map
from nearhand.service.errors import WireError
from nearhand.service.policy.network import Policy

values: st.SearchStrategy[Any] = st.one_of(
    st.none(), st.booleans(), st.integers(-2, 2), st.sampled_from([2**63 - 1, 2**63, 2**64 - 1, 1.0, "act", "rig"]),
    st.binary(max_size=9), st.lists(st.floats(), max_size=3).map(tuple), st.text(max_size=4),
)  # fmt: skip


@settings(max_examples=400)
@given(
    changes=st.dictionaries(
        st.sampled_from(["v", "kind", "rig", "session", "seq", "sent_ns", "obs", "applied", "by_operator", "x"]),
        values,
        max_size=3,
    ),
    dropped=st.sets(st.sampled_from(["v", "kind", "rig", "session", "seq", "sent_ns", "obs"]), max_size=1),
)
def test_a_hand_checked_query_is_what_the_model_reads(changes: dict[str, Any], dropped: set[str]) -> None:
    table: dict[str, Any] = {
        "v": 1, "kind": "act", "rig": "rig", "session": "s", "seq": 1, "sent_ns": 2, "obs": b"\0" * 12,
    }  # fmt: skip
    table.update(changes)
    for name in dropped:
        table.pop(name, None)
    try:
        frame = msgpack.packb(table)
    except (OverflowError, ValueError):  # a number that no frame can hold
        return
    quick = queries.usual(frame)
    if quick is None:
        return
    # Only the form of names is left to the look-up of rig and session, which know no name of another form.
    proper = {**table, "rig": "rig", "session": "s"}
    message = from_map(proper, ACTION_REQUESTS)
    assert isinstance(message, Act)
    assert quick._replace(rig="rig", session="s") == queries.of(message)


@pytest.mark.parametrize("applied", [None, b"\0" * 8])
@pytest.mark.parametrize("by_operator", [False, True])
def test_the_usual_query_takes_the_quick_way(applied: bytes | None, by_operator: bool) -> None:
    message = Act(rig="rig", session="s", seq=5, sent_ns=9, obs=b"\0" * 12, applied=applied, by_operator=by_operator)
    assert queries.usual(encode(message)) == queries.of(message)
    if applied is not None:
        packed = queries.pack_query("rig", "s", 5, 9, b"\0" * 12, applied, by_operator=by_operator)
        assert decode(packed, ACTION_REQUESTS) == message


def test_a_key_that_appears_twice_does_not_take_the_quick_way() -> None:
    frame = encode(Act(rig="rig", session="s", seq=5, sent_ns=9, obs=b"\0" * 12, applied=None))
    assert queries.usual(frame) is not None
    twice = bytes([frame[0] + 1]) + frame[1:] + msgpack.packb("seq") + msgpack.packb(6)
    assert queries.usual(twice) is None
    with pytest.raises(WireError, match="twice"):
        decode_map(twice)


@pytest.mark.parametrize("past", [(0, 0), (2, 1), (16, 16)])
@pytest.mark.parametrize("hidden", [(), (16,), (128, 128)])
def test_serving_gives_the_policys_action(
    generator: np.random.Generator, past: tuple[int, int], hidden: tuple[int, ...]
) -> None:
    n, m = 4, 2

    def draw(*shape: int) -> Any:
        return (generator.standard_normal(shape) / np.sqrt(shape[0])).astype(np.float32)

    sizes = [n * (1 + past[0]) + m * past[1], *hidden, m]
    policy = Policy(
        weights=tuple(draw(a, b) for a, b in pairwise(sizes)),
        biases=tuple(draw(b) for b in sizes[1:]),
        observation_mean=draw(n), observation_scale=np.abs(draw(n)) + np.float32(0.5), action_middle=draw(m),
        action_half=np.abs(draw(m)) + np.float32(0.5), log_sd=draw(m), past_observations=past[0], past_actions=past[1],
    )  # fmt: skip
    serving, observed, acted = Serving(policy), History(n), History(m)
    observed.fill(draw(n))
    acted.fill(draw(m))
    for _ in range(5):
        observed.push(draw(n))
        acted.push(draw(m))
        serving.look(observed, acted)
        action = serving.propose()
        assert action is not None
        # Float32 sums in another order.
        assert action == pytest.approx(policy.action(serving.window), rel=1e-4, abs=1e-5)


def test_a_history_is_newest_first_over_any_length() -> None:
    history = History(1)
    history.fill(np.array([-1.0], dtype=np.float32))
    assert list(history.newest(DEPTH)[:, 0]) == [-1.0] * DEPTH
    for step in range(3 * ROOM):
        history.push(np.array([step], dtype=np.float32))
        count = min(step + 1, DEPTH)
        assert list(history.newest(count)[:, 0]) == [float(step - k) for k in range(count)]
