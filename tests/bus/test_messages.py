"""Every message of every lane: decode(encode(m)) = m; any bytes give a message or a wire error."""

from __future__ import annotations

import math
from typing import Any

import msgpack
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from pydantic import ValidationError
from pydantic.fields import FieldInfo

from nearhand.service.bus.action_messages import ACTION_REPLIES, ACTION_REQUESTS, Act, Action, Reason, reason_names
from nearhand.service.bus.arrays import pack, unpack, unpack_rows
from nearhand.service.bus.codec import decode, decode_map, encode, from_map
from nearhand.service.bus.control_messages import CONTROL_REPLIES, CONTROL_REQUESTS
from nearhand.service.bus.desk_messages import DESK_REPLIES, DESK_REQUESTS
from nearhand.service.bus.feed_messages import FEED_MESSAGES
from nearhand.service.bus.intake_messages import INTAKE_REPLIES, INTAKE_REQUESTS, Chunk
from nearhand.service.bus.message import Message
from nearhand.service.bus.schema import PUBLIC_LANES, schemas
from nearhand.service.errors import WireError, error_from_code

GROUPS = {
    "action requests": ACTION_REQUESTS,
    "action replies": ACTION_REPLIES,
    "intake requests": INTAKE_REQUESTS,
    "intake replies": INTAKE_REPLIES,
    "desk requests": DESK_REQUESTS,
    "desk replies": DESK_REPLIES,
    "feed": FEED_MESSAGES,
    "control requests": CONTROL_REQUESTS,
    "control replies": CONTROL_REPLIES,
}
MODELS = [(group, kind) for group, kinds in GROUPS.items() for kind in kinds]

plain = st.recursive(
    st.none() | st.booleans() | st.integers(-(2**63), 2**63 - 1) | st.floats(allow_nan=False) | st.text(max_size=8)
    | st.binary(max_size=8),
    lambda inner: st.lists(inner, max_size=3).map(tuple) | st.dictionaries(st.text(max_size=5), inner, max_size=3),
    max_leaves=6,
)  # fmt: skip
table = st.dictionaries(st.text(max_size=6), plain, max_size=4)
identifier = st.from_regex(r"[A-Za-z0-9][A-Za-z0-9._-]{0,63}", fullmatch=True)
count = st.integers(0, 2**63 - 1)


def strategy(schema: dict[str, Any], annotation: str) -> st.SearchStrategy[Any]:
    """Return values of a field from its JSON Schema, which is what a client in another language reads."""
    if "anyOf" in schema:
        return st.one_of([strategy(one, annotation) for one in schema["anyOf"]])
    if "const" in schema:
        return st.just(schema["const"])
    if "enum" in schema:
        return st.sampled_from(schema["enum"])
    kind = schema.get("type")
    if kind == "null":
        return st.none()
    if kind == "boolean":
        return st.booleans()
    if kind == "integer":
        return st.integers(schema.get("minimum", -(2**63)), schema.get("maximum", 2**63 - 1))
    if kind == "number":
        least, most = (schema.get(name, schema.get(f"exclusive{name.capitalize()}")) for name in ("minimum", "maximum"))
        return st.floats(
            least, most,
            exclude_min="exclusiveMinimum" in schema, exclude_max="exclusiveMaximum" in schema, allow_nan=False,
            allow_infinity=False,
        )  # fmt: skip
    if kind == "string" and schema.get("format") == "binary":
        return st.binary(max_size=40)
    if kind == "string" and "pattern" in schema:
        return identifier
    if kind == "string":
        most = min(30, schema.get("maxLength", 30))
        return st.text(min_size=schema.get("minLength", 0), max_size=most)
    if kind == "array":
        items = strategy(schema["items"], annotation)
        return st.lists(items, min_size=schema.get("minItems", 0), max_size=4).map(tuple)
    if kind == "object" and isinstance(schema.get("additionalProperties"), dict):
        return st.dictionaries(st.text(max_size=6), strategy(schema["additionalProperties"], annotation), max_size=3)
    if kind == "object":
        return table
    raise AssertionError(f"{annotation}: no values known for {schema}")


def messages(model: type[Message]) -> st.SearchStrategy[Message]:
    """Return any messages of a kind."""
    properties = model.model_json_schema()["properties"]
    fields: dict[str, FieldInfo] = {**model.model_fields}
    drawn = {
        name: strategy(properties[name], f"{model.__name__}.{name}") for name in fields if name not in ("v", "kind")
    }
    optional = {name: drawn.pop(name) for name in list(drawn) if not fields[name].is_required()}
    return st.fixed_dictionaries(drawn, optional=optional).map(lambda values: model(**values))


@pytest.mark.parametrize(("group", "kind"), MODELS)
@given(data=st.data())
def test_what_is_encoded_decodes_to_the_same(group: str, kind: str, data: st.DataObject) -> None:
    message = data.draw(messages(GROUPS[group][kind]))
    decoded = decode(encode(message), GROUPS[group])
    assert decoded == message
    assert type(decoded) is type(message)


@given(frame=st.binary(max_size=200))
def test_any_bytes_give_a_message_or_a_wire_error(frame: bytes) -> None:
    for kinds in GROUPS.values():
        try:
            assert isinstance(decode(frame, kinds), Message)
        except WireError as error:
            assert error.code.startswith("wire.")
            assert str(error)


@pytest.mark.parametrize("group", GROUPS)
@given(data=st.data())
def test_a_damaged_message_gives_a_message_or_a_wire_error(group: str, data: st.DataObject) -> None:
    kinds = GROUPS[group]
    frame = bytearray(encode(data.draw(messages(kinds[data.draw(st.sampled_from(sorted(kinds)))]))))
    for _ in range(data.draw(st.integers(1, 4))):
        frame[data.draw(st.integers(0, len(frame) - 1))] = data.draw(st.integers(0, 255))
    del frame[data.draw(st.integers(1, len(frame))) :]
    try:
        assert isinstance(decode(bytes(frame), kinds), Message)
    except WireError as error:
        assert error.code.startswith("wire.")


@pytest.mark.parametrize(("group", "kind"), MODELS)
@given(data=st.data())
def test_any_map_gives_a_message_or_a_wire_error(group: str, kind: str, data: st.DataObject) -> None:
    names = list(GROUPS[group][kind].model_fields)
    fields = data.draw(st.dictionaries(st.sampled_from(names) | st.text(max_size=6), plain, max_size=8))
    try:
        assert isinstance(from_map({**fields, "v": 1, "kind": kind}, GROUPS[group]), Message)
    except WireError as error:
        assert error.code == "wire.fields"
        assert kind in str(error)


ACT = {"v": 1, "kind": "act", "rig": "crane", "session": "s", "seq": 1, "sent_ns": 1, "obs": b"1234"}


@pytest.mark.parametrize(
    ("change", "code"),
    [
        ({"v": 2}, "wire.version"),
        ({"v": True}, "wire.version"),
        ({"v": "1"}, "wire.version"),
        ({"v": None}, "wire.version"),
        ({"kind": "action"}, "wire.kind"),
        ({"kind": None}, "wire.kind"),
        ({"kind": b"act"}, "wire.kind"),
        ({"seq": -1}, "wire.fields"),
        ({"seq": 1.0}, "wire.fields"),
        ({"seq": True}, "wire.fields"),
        ({"seq": 2**63}, "wire.fields"),
        ({"rig": "../etc"}, "wire.fields"),
        ({"rig": ""}, "wire.fields"),
        ({"rig": "crane\n"}, "wire.fields"),
        ({"obs": "1234"}, "wire.fields"),
        ({"obs": [1, True]}, "wire.fields"),
        ({"surplus": 1}, "wire.fields"),
    ],
)
def test_strictness(change: dict[str, Any], code: str) -> None:
    with pytest.raises(WireError) as caught:
        decode(msgpack.packb({**ACT, **change}), ACTION_REQUESTS)
    assert caught.value.code == code


@pytest.mark.parametrize("name", ["rig", "session", "seq", "sent_ns", "obs"])
def test_a_missing_field_is_named(name: str) -> None:
    frame = msgpack.packb({key: value for key, value in ACT.items() if key != name})
    with pytest.raises(WireError, match=name):
        decode(frame, ACTION_REQUESTS)


def test_a_vector_may_be_bytes_or_a_list_and_carry_what_the_envelope_must_judge() -> None:
    for obs in (b"\x00\x00\xc0\x7f", [math.nan], [math.inf]):
        message = decode(msgpack.packb({**ACT, "obs": obs}), ACTION_REQUESTS)
        assert isinstance(message, Act)
        assert not np.isfinite(unpack(message.obs, 1, what="obs")).all()
    with pytest.raises(ValidationError):
        Action(
            seq=1, sent_ns=1, action=(math.nan,), mode="armed", version=1, lease_s=1.0, reasons=0, novelty=1.0,
        )  # fmt: skip


@given(values=st.lists(st.floats(width=32), max_size=20))
def test_vectors_travel_bit_for_bit(values: list[float]) -> None:
    data = pack(values)
    assert data == np.array(values, dtype="<f4").tobytes()
    np.testing.assert_array_equal(unpack(data, len(values), what="x"), np.array(values, dtype=np.float32))
    np.testing.assert_array_equal(unpack(values, len(values), what="x"), np.array(values, dtype=np.float32))


def test_a_vector_is_little_endian_single_precision() -> None:
    """IEEE 754: 1.0 is 3f800000, -2.0 is c0000000."""
    assert pack([1.0, -2.0]).hex() == "0000803f000000c0"
    rows = unpack_rows(pack([1, 2, 3, 4, 5, 6]), 2, 3, what="x")
    np.testing.assert_array_equal(rows, [[1, 2, 3], [4, 5, 6]])


@pytest.mark.parametrize("data", [b"123", b"12345678", (1.0, 2.0), ()])
def test_a_vector_of_the_wrong_size_is_named(data: bytes | tuple[float, ...]) -> None:
    with pytest.raises(WireError, match="obs has") as caught:
        unpack(data, 1, what="obs")
    assert caught.value.code == "wire.vector_size"
    with pytest.raises(WireError, match="2 × 3"):
        unpack_rows(bytes(20), 2, 3, what="x")


def test_reasons_have_the_bits_of_the_wire_page() -> None:
    names = [
        "form", "old", "gap", "late", "novel", "output", "clipped", "slewed", "braked", "latched", "restarted",
        "operator", "empty", "link", "taken", "zoned",
    ]  # fmt: skip
    assert {name: 1 << bit for bit, name in enumerate(names)} == {
        str(reason.name).lower(): int(reason) for reason in Reason if reason
    }
    assert reason_names(Reason.NOVEL | Reason.LATCHED) == ["novel", "latched"]
    assert reason_names(0) == []


def test_every_message_has_its_own_kind_its_lane_and_a_schema() -> None:
    listed = schemas()
    for lane, groups in PUBLIC_LANES.items():
        for kinds in groups:
            for kind, model in kinds.items():
                assert kind == model.model_fields["kind"].default
                assert model.lane in (lane, "")
                assert set(listed["lanes"][lane][kind]["properties"]) == set(model.model_fields)
                assert listed["lanes"][lane][kind]["additionalProperties"] is False


def test_an_error_code_brings_back_its_class_and_code() -> None:
    for code in ("wire.fields", "config.rig", "unknown.rig", "conflict.x", "refused.gate", "policy.y", "store.z"):
        error = error_from_code(code, "why")
        assert (error.code, str(error), error.default_code.split(".")[0]) == (code, "why", code.split(".")[0])
    assert error_from_code("brand.new", "why").code == "brand.new"


def test_a_chunk_of_the_most_samples_fits_a_frame() -> None:
    rows = 1024
    chunk = Chunk(
        episode="e", chunk=0, count=rows, times=bytes(8 * rows), obs=bytes(4 * 256 * rows), act=bytes(4 * 256 * rows),
        crc=0,
    )  # fmt: skip
    assert decode_map(encode(chunk))["count"] == rows
