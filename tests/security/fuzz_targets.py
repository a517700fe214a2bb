"""What fuzzing feeds: one function per door through which bytes from outside come in.

Each takes any bytes, raises only when a promise is broken, and is deterministic, so that an input found once can be
kept and replayed. Handlers are the real ones, in this process; what they would write is rolled back.
"""

from __future__ import annotations

import atexit
import contextlib
import functools
import io
import shutil
import tempfile
from collections.abc import Callable, Iterator, Mapping
from pathlib import Path
from typing import Any

import msgpack
import numpy as np
import zmq

from nearhand.configs import builtin_text
from nearhand.service.action.server import ActionServer
from nearhand.service.bus.action_messages import ACTION_REPLIES, ACTION_REQUESTS, Action, Hello
from nearhand.service.bus.arrays import unpack
from nearhand.service.bus.codec import decode, decode_map, encode
from nearhand.service.bus.control_messages import CONTROL_REPLIES, CONTROL_REQUESTS, Arm, Load
from nearhand.service.bus.desk_messages import DESK_REPLIES, DESK_REQUESTS, PutRig
from nearhand.service.bus.feed_messages import FEED_MESSAGES
from nearhand.service.bus.intake_messages import INTAKE_REPLIES, INTAKE_REQUESTS
from nearhand.service.bus.keys import read_client_key
from nearhand.service.bus.limits import read_limits
from nearhand.service.bus.message import Message
from nearhand.service.clock import MonotonicClock
from nearhand.service.config import ServiceSettings
from nearhand.service.episodes.tables import parse_csv
from nearhand.service.errors import ConfigError, NearhandError, PolicyFormatError, WireError
from nearhand.service.keeper import action_server
from nearhand.service.keeper.lane import Request
from nearhand.service.keeper.process import Keeper
from nearhand.service.policy.format import PolicyFile, read_policy, sha256, write_policy
from nearhand.service.policy.network import Policy
from nearhand.service.recipes import recipe_from_map
from nearhand.service.rigs import Rig, rig_from_toml

Feed = Callable[[bytes], None]
CRANE = builtin_text("rigs", "crane")
RIG = rig_from_toml(CRANE)
N, M = len(RIG.observations), len(RIG.actions)
HEADER = (
    ",".join(["episode", "operator", "outcome", "t_s", *(c.name for c in (*RIG.observations, *RIG.actions))]) + "\n"
)
LANES = ("action", "intake", "desk", "feed", "control", "progress")
#: Inputs after which what a handler has written is thrown away.
FORGET_AFTER = 500
#: Names that exist, so that requests get further than the first look-up.
NAMES = (
    "crane",
    "e1",
    "s1",
    "distil",
    "measure",
    "inspect",
    "success",
    "ann",
    "1",
    "../e1",
    "{{7*7}}",
    "'; DROP TABLE",
)


class Take:
    """Values taken from bytes, one after the other; zeros when they are used up."""

    def __init__(self, data: bytes) -> None:
        self._data = data
        self._at = 0

    def byte(self) -> int:
        """Return the next byte."""
        self._at += 1
        return self._data[self._at - 1] if self._at <= len(self._data) else 0

    def rest(self, most: int) -> bytes:
        """Return at most so many of the next bytes."""
        part = self._data[self._at : self._at + most]
        self._at += len(part)
        return part

    def value(self, depth: int = 0) -> Any:
        """Return any value that MessagePack can carry."""
        choice = self.byte() % (12 if depth < 4 else 10)
        if choice < 3:
            return (None, True, False)[choice]
        if choice == 3:
            return self.byte()
        if choice == 4:
            return int.from_bytes(self.rest(8), "little", signed=True)
        if choice == 5:
            return float(np.frombuffer(self.rest(8).ljust(8, b"\0"), dtype="<f8")[0])
        if choice == 6:
            return NAMES[self.byte() % len(NAMES)]
        if choice == 7:
            return self.rest(self.byte() % 40).decode("utf-8", "replace")
        if choice == 8:
            return self.rest(self.byte())
        if choice == 9:
            return bytes(4 * (self.byte() % 8))
        if choice == 10:
            return [self.value(depth + 1) for _ in range(self.byte() % 5)]
        return {NAMES[self.byte() % len(NAMES)]: self.value(depth + 1) for _ in range(self.byte() % 4)}


def frame_of(data: bytes, kinds: Mapping[str, type[Message]]) -> bytes:
    """Return a frame: the bytes as they are, or a map with the fields of a kind, some of them wrong or left out."""
    if not data or data[0] < 64:
        return data[1:]
    take = Take(data[1:])
    names = sorted(kinds)
    kind = names[take.byte() % len(names)]
    table: dict[str, Any] = {"v": 1, "kind": kind}
    for name, schema in _properties(kinds[kind]).items():
        if name in ("v", "kind"):
            continue
        how = take.byte()
        if how < 16:
            continue
        table[name] = take.value() if how < 80 else _fitting(schema, take)
    if take.byte() > 240:
        table[str(take.value())] = take.value()
    return bytes(msgpack.packb(table, use_bin_type=True))


@functools.cache
def _properties(model: type[Message]) -> dict[str, Any]:
    return dict(model.model_json_schema()["properties"])


def _fitting(schema: Mapping[str, Any], take: Take) -> Any:
    """Return a value of the type that a field wants."""
    if "anyOf" in schema:
        return _fitting(schema["anyOf"][take.byte() % len(schema["anyOf"])], take)
    if "enum" in schema:
        return schema["enum"][take.byte() % len(schema["enum"])]
    kind = schema.get("type")
    if kind == "integer":
        return take.byte()
    if kind == "number":
        return float(take.byte()) / 16
    if kind == "boolean":
        return take.byte() > 127
    if kind == "string" and schema.get("format") == "binary":
        return take.rest(take.byte()) if take.byte() > 127 else bytes(4 * (take.byte() % 16))
    if kind == "string":
        return NAMES[take.byte() % len(NAMES)]
    if kind == "array":
        return [_fitting(schema.get("items", {}), take) for _ in range(take.byte() % 5)]
    if kind == "object":
        return {NAMES[take.byte() % len(NAMES)]: take.value() for _ in range(take.byte() % 4)}
    return take.value()


def _folder() -> Path:
    folder = Path(tempfile.mkdtemp(prefix="nh-"))
    atexit.register(shutil.rmtree, folder, ignore_errors=True)
    return folder


def make_codec() -> Feed:
    """The codec, for every lane's messages."""
    groups = [ACTION_REQUESTS, ACTION_REPLIES, INTAKE_REQUESTS, INTAKE_REPLIES, DESK_REQUESTS, DESK_REPLIES]
    groups += [CONTROL_REQUESTS, CONTROL_REPLIES, FEED_MESSAGES]

    def feed(data: bytes) -> None:
        kinds = groups[data[0] % len(groups)] if data else groups[0]
        frame = frame_of(data[1:], kinds)
        try:
            message = decode(frame, kinds)
        except WireError as error:
            assert error.code.startswith("wire.") and error.message
        else:
            assert decode(encode(message), kinds) == message or "nan" in repr(message)

    return feed


def bench_policy(seed: int = 0) -> bytes:
    """Return a small policy file for the crane."""
    generator = np.random.default_rng(seed)
    policy = Policy(
        weights=(generator.standard_normal((N, 4)).astype(np.float32), np.ones((4, M), dtype=np.float32)),
        biases=(np.zeros(4, dtype=np.float32), np.zeros(M, dtype=np.float32)),
        observation_mean=np.zeros(N, dtype=np.float32),
        observation_scale=np.ones(N, dtype=np.float32),
        action_middle=np.zeros(M, dtype=np.float32),
        action_half=np.ones(M, dtype=np.float32),
        log_sd=np.zeros(M, dtype=np.float32),
    )
    channels = tuple(c.name for c in RIG.observations), tuple(c.name for c in RIG.actions)
    return write_policy(PolicyFile(policy, "crane", *channels, "clone", {}, {"seed": seed}))


def _server() -> ActionServer:
    context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
    server = ActionServer(context, "inproc://action", "inproc://control", MonotonicClock(), "fuzz")
    policy = bench_policy()
    description = RIG.model_dump(mode="json")
    load = Load(request="1", rig="crane", description=description, version=1, sha256=sha256(policy), policy=policy)
    for request in (load, Arm(request="2", rig="crane", who="fuzz", why="fuzz")):
        assert decode(server._carry_out(encode(request)), CONTROL_REPLIES).kind == "control-reply"
    hello = Hello(
        rig="crane", session="s1", observations=tuple(c.name for c in RIG.observations),
        actions=tuple(c.name for c in RIG.actions), period_s=RIG.timing.period_s,
    )  # fmt: skip
    assert decode(server._answer(encode(hello)), ACTION_REPLIES).kind == "welcome"
    return server


def make_action() -> Feed:
    """The action lane's handler: one reply that can be read, every action finite and within range."""
    server = _server()
    low = np.array([c.low for c in RIG.actions], dtype=np.float32)
    high = np.array([c.high for c in RIG.actions], dtype=np.float32)

    def feed(data: bytes) -> None:
        with np.errstate(over="ignore", invalid="ignore"):
            reply = decode(server._answer(frame_of(data, ACTION_REQUESTS)), ACTION_REPLIES)
        assert server.counters["action_defects"] == 0
        if isinstance(reply, Action):
            action = unpack(reply.action, M, what="action")
            assert np.isfinite(action).all()
            assert (action >= low - 1e-6).all() and (action <= high + 1e-6).all()

    return feed


def make_control() -> Feed:
    """The control socket's handler."""
    server = _server()

    def feed(data: bytes) -> None:
        decode(server._carry_out(frame_of(data, CONTROL_REQUESTS)), CONTROL_REPLIES)
        assert server.counters["control_defects"] == 0

    return feed


class KeeperHere:
    """A keeper in this process whose writing is thrown away from time to time."""

    def __init__(self) -> None:
        self.folder = _folder()
        settings = ServiceSettings(data=self.folder / "data", **{lane: f"ipc://{self.folder / lane}" for lane in LANES})
        self.keeper = Keeper(settings)
        self._fed = 0
        self._undo: contextlib.AbstractContextManager[None] | None = None
        self.desk_answer(encode(PutRig(request="r", toml=CRANE, who="fuzz")))
        atexit.register(self._forget)

    def desk_answer(self, frame: bytes) -> Message:
        """Return the desk's reply to a frame."""
        return self.keeper._desk._answer(Request((b"c",), (frame,)))

    def intake_answer(self, frame: bytes) -> Message:
        """Return the intake's reply to a frame."""
        return self.keeper._intake._answer(Request((b"c",), (frame,)))

    def within(self, answer: Callable[[bytes], Message], frame: bytes) -> Message:
        """Answer within a transaction that is rolled back every now and then."""
        if self._undo is None:
            self._undo = self.keeper.store.database.atomic()
            self._undo.__enter__()
        log = io.StringIO()
        patience_s, action_server.ANSWER_TIMEOUT_S = action_server.ANSWER_TIMEOUT_S, 0.0  # nobody is there to answer
        try:
            with contextlib.redirect_stderr(log):
                reply = answer(frame)
        finally:
            action_server.ANSWER_TIMEOUT_S = patience_s
        assert "defect" not in log.getvalue(), log.getvalue()
        self._fed += 1
        if self._fed % FORGET_AFTER == 0:
            self._forget()
        return reply

    def _forget(self) -> None:
        undo, self._undo = self._undo, None
        if undo is not None:
            with contextlib.suppress(RuntimeError):
                undo.__exit__(RuntimeError, RuntimeError("forget"), None)


def make_desk() -> Feed:
    """The desk lane's handler, with the real rooms and store behind it."""
    here = KeeperHere()

    def feed(data: bytes) -> None:
        reply = here.within(here.desk_answer, frame_of(data, DESK_REQUESTS))
        assert decode(encode(reply), DESK_REPLIES).kind == reply.kind
        assert {path.name for path in here.folder.iterdir()} <= {"data", *LANES}, "a name has become a path"

    return feed


def make_intake() -> Feed:
    """The intake lane's handler, with the real store behind it."""
    here = KeeperHere()

    def feed(data: bytes) -> None:
        reply = here.within(here.intake_answer, frame_of(data, INTAKE_REQUESTS))
        assert decode(encode(reply), INTAKE_REPLIES).kind == reply.kind
        assert here.keeper.ledger.counters["errors.internal"] == 0

    return feed


def make_toml() -> Feed:
    """The readers of rigs and recipes."""

    def feed(data: bytes) -> None:
        text = data.decode("utf-8", "replace")
        with contextlib.suppress(ConfigError):
            rig = rig_from_toml(text)
            assert Rig.model_validate(rig.model_dump(mode="json")).digest() == rig.digest()
        with contextlib.suppress(WireError, ConfigError):
            recipe_from_map(decode_map(data))

    return feed


def make_csv() -> Feed:
    """The reader of episode tables; the first byte says whether a good header goes before the bytes."""

    def feed(data: bytes) -> None:
        good = HEADER if data[:1] >= b"\x80" else ""
        lines = io.StringIO(good + data[1:].decode("utf-8", "replace"))
        try:
            episodes = parse_csv(lines, RIG)
        except NearhandError as error:
            assert error.message
            return
        for episode in episodes:
            assert len(episode.observations) == len(episode.actions) + 1 == len(episode.times_s) + 1

    return feed


def make_policy() -> Feed:
    """The loader of policy files; the first byte says whether the hash is that of the bytes."""

    def feed(data: bytes) -> None:
        content = data[1:]
        told = sha256(content) if data[:1] > b"\x10" else None
        try:
            file = read_policy(content, expected_sha256=told)
        except PolicyFormatError as error:
            assert error.message
            return
        with np.errstate(over="ignore", invalid="ignore"):
            action = file.policy.action(np.zeros((1, file.policy.input_size), dtype=np.float32))
        assert action.shape == (1, file.policy.action_size)

    return feed


def make_files() -> Feed:
    """The readers of key files and of limits."""
    path = _folder() / "file.toml"

    def feed(data: bytes) -> None:
        path.write_bytes(data)
        path.chmod(0o600)
        for read in (read_client_key, read_limits):
            with contextlib.suppress(ConfigError):
                read(path)

    return feed


TARGETS: dict[str, Callable[[], Feed]] = {
    "codec": make_codec,
    "action": make_action,
    "control": make_control,
    "intake": make_intake,
    "desk": make_desk,
    "toml": make_toml,
    "csv": make_csv,
    "policy": make_policy,
    "files": make_files,
}


def seeds(target: str) -> Iterator[bytes]:
    """Yield a few good inputs of a target, to begin from."""
    kinds: dict[str, Mapping[str, type[Message]]] = {
        "action": ACTION_REQUESTS, "control": CONTROL_REQUESTS, "intake": INTAKE_REQUESTS, "desk": DESK_REQUESTS,
    }  # fmt: skip
    if target in kinds:
        for k in range(len(kinds[target])):
            yield bytes([200, k]) + bytes([255, 3]) * 40
    elif target == "codec":
        for k in range(9):
            yield bytes([k, 200, k]) + bytes([255, 3]) * 40
    elif target == "toml":
        yield CRANE.encode()
        yield builtin_text("rigs", "pendulum").encode()
    elif target == "csv":
        rows = [["e1", "ann", "success", f"{0.05 * k:g}", *["0.1"] * (N + M)] for k in range(4)]
        rows[-1][-M:] = [""] * M
        body = "\n".join(map(",".join, rows))
        yield b"\xff" + body.encode()
        yield b"\x00" + (HEADER + body).encode()
    elif target == "policy":
        yield b"\xff" + bench_policy()
        yield b"\x00" + bench_policy(1)
    elif target == "files":
        yield b'name = "ann"\npublic = "Yne@$w-vo<fVvi]a<NY6T1ed:M$fCG*[IaLV{hID"\nsecret = "x"\nservice = "x"\n'
        yield b"depth = 5\nrequests_per_s = 50\n"
