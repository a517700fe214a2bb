"""Anything at all may arrive on a lane: there is always one reply, and the keeper goes on."""

from __future__ import annotations

import json
import shutil
import tempfile
from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any

import msgpack
import pytest
import zmq
from hypothesis import given
from hypothesis import strategies as st

from nearhand.service.bus.codec import decode
from nearhand.service.bus.desk_messages import DESK_REPLIES, DESK_REQUESTS
from nearhand.service.bus.intake_messages import INTAKE_REPLIES, INTAKE_REQUESTS
from nearhand.service.bus.message import ErrorReply
from nearhand.service.config import ServiceSettings

if TYPE_CHECKING:
    from tests.keeper.conftest import Client, KeeperProcess

REQUESTS = {"desk": DESK_REQUESTS, "intake": INTAKE_REQUESTS}
REPLIES = {"desk": DESK_REPLIES, "intake": INTAKE_REPLIES}
LANES = st.sampled_from(["desk", "intake"])

scalars = (
    st.none() | st.booleans() | st.integers(-(2**63), 2**64 - 1) | st.floats() | st.binary(max_size=32)
    | st.text(st.characters(codec="utf-8"), max_size=16) | st.sampled_from(["yard-crane", "e1", "distil", "measure"])
)  # fmt: skip
values = st.recursive(
    scalars,
    lambda inner: (
        st.lists(inner, max_size=3) | st.dictionaries(st.text(st.characters(codec="utf-8")), inner, max_size=3)
    ),
    max_leaves=6,
)


@pytest.fixture(scope="module")
def lasting(make_keeper: Any) -> Iterator[tuple[KeeperProcess, Client]]:
    """One keeper for all of this file, and a client of it."""
    folder = Path(tempfile.mkdtemp(prefix="nh-"))
    lanes = ("action", "intake", "desk", "feed", "control", "progress")
    settings = ServiceSettings(data=folder / "data", **{lane: f"ipc://{folder / lane}" for lane in lanes})
    (folder / "settings.json").write_text(json.dumps(settings.model_dump(mode="json")))
    context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
    keeper, client = make_keeper(settings, folder / "settings.json", context)
    keeper.start()
    client.put_rig()
    yield keeper, client
    client.close()
    context.destroy(linger=0)
    assert keeper.stop() == 0
    assert "defect" not in keeper.log(), keeper.log()
    shutil.rmtree(folder)


@given(lane=LANES, frame=st.binary(max_size=300))
def test_any_bytes_get_an_error_reply(lasting: tuple[KeeperProcess, Client], lane: str, frame: bytes) -> None:
    reply = decode(lasting[1].raw(lane, frame)[-1], REPLIES[lane])
    assert isinstance(reply, ErrorReply)
    assert reply.code.startswith("wire.")


@given(lane=LANES, value=values)
def test_any_message_pack_value_gets_an_error_reply(
    lasting: tuple[KeeperProcess, Client], lane: str, value: object
) -> None:
    frame = msgpack.packb(value, use_bin_type=True)
    assert isinstance(decode(lasting[1].raw(lane, frame)[-1], REPLIES[lane]), ErrorReply)


@given(data=st.data(), lane=LANES)
def test_any_fields_of_a_known_kind_get_a_reply_with_their_echo(
    lasting: tuple[KeeperProcess, Client], data: st.DataObject, lane: str
) -> None:
    kind = data.draw(st.sampled_from(sorted(REQUESTS[lane])))
    fields = [name for name in REQUESTS[lane][kind].model_fields if name not in ("v", "kind")]
    table = data.draw(st.fixed_dictionaries({}, optional=dict.fromkeys(fields, values)))
    table |= {"v": 1, "kind": kind}
    if data.draw(st.booleans()):
        table |= {name: "x1" for name in ("request", "episode") if name in fields}
    reply = decode(lasting[1].raw(lane, msgpack.packb(table, use_bin_type=True))[-1], REPLIES[lane])
    if table.get("request") == "x1":
        assert getattr(reply, "request", None) == "x1"
    if isinstance(reply, ErrorReply):
        assert reply.message
        assert not reply.code.startswith("error")


@given(lane=LANES, frames=st.lists(st.binary(max_size=16), min_size=1, max_size=5))
def test_any_number_of_frames_gets_a_reply(
    lasting: tuple[KeeperProcess, Client], lane: str, frames: list[bytes]
) -> None:
    assert isinstance(decode(lasting[1].raw(lane, *frames)[-1], REPLIES[lane]), ErrorReply)
