"""Every door is fed with bytes that mean it ill: those that fuzzing has kept, and fresh ones each time the same.

``tests/security/fuzz.py`` finds inputs by coverage; what it kept lies in ``corpus``. ``CAMPAIGN.md`` tells how many
were tried, and how.
"""

from __future__ import annotations

import base64
import functools
import random
import sqlite3
from collections.abc import Callable
from pathlib import Path
from typing import Any

import msgpack
import pytest
import zmq
from hypothesis import given
from hypothesis import strategies as st

from nearhand.client.desk import Desk
from nearhand.client.tryout.service_process import ServiceProcess
from nearhand.configs import builtin_text
from nearhand.service.bus import desk_messages as messages
from nearhand.service.bus.codec import encode
from nearhand.service.bus.intake_messages import OpenEpisode
from nearhand.service.errors import NearhandError
from nearhand.service.policy.network import Policy
from nearhand.service.rigs import rig_from_toml
from tests.security import fuzz_targets
from tests.security.fuzz_targets import TARGETS, seeds

CORPUS = Path(__file__).parent / "corpus"
CRANE = builtin_text("rigs", "crane")
Context = zmq.Context[zmq.Socket[bytes]]


@functools.cache
def target(name: str) -> Callable[[bytes], None]:
    """Return a target, made once."""
    return TARGETS[name]()


@pytest.mark.parametrize("name", TARGETS)
def test_what_fuzzing_has_kept_is_taken_well(name: str) -> None:
    lines = (CORPUS / f"{name}.txt").read_text(encoding="ascii").splitlines()
    assert lines
    for line in lines:
        target(name)(base64.b64decode(line))


@pytest.mark.parametrize("name", TARGETS)
def test_good_inputs_and_their_near_neighbours_are_taken_well(name: str) -> None:
    generator = random.Random(4)
    for seed in seeds(name):
        target(name)(seed)
        for _ in range(20):
            changed = bytearray(seed)
            for _ in range(generator.randrange(1, 6)):
                changed[generator.randrange(len(changed))] = generator.randrange(256)
            target(name)(bytes(changed[: generator.randrange(1, len(changed) + 1)]))


@pytest.mark.parametrize("name", TARGETS)
@given(data=st.binary(max_size=300))
def test_any_bytes_are_taken_well(name: str, data: bytes) -> None:
    target(name)(data)


def test_a_broken_promise_is_noticed(monkeypatch: pytest.MonkeyPatch) -> None:
    """A reader that lets another error out, and a policy that acts with the wrong size: both targets must say so."""

    def let_out(*arguments: object) -> None:
        raise KeyError("let out")

    monkeypatch.setattr(fuzz_targets, "parse_csv", let_out)
    with pytest.raises(KeyError):
        TARGETS["csv"]()(next(iter(seeds("csv"))))
    monkeypatch.setattr(Policy, "action", lambda policy, window: window)
    with pytest.raises(AssertionError):
        TARGETS["policy"]()(next(iter(seeds("policy"))))


NASTY = [
    "../../../etc/passwd", "/etc/passwd", "..", ".", "a/b", "a\\b", "x\0y", "'; DROP TABLE episodes; --", '" OR 1=1',
    "{{ 7*7 }}", "{% include '/etc/passwd' %}", "<script>alert(1)</script>", "${HOME}", "$(touch /tmp/owned)", "%s%n",
    "\u202egnp.exe", "\ud83d\ude00".encode("utf-16", "surrogatepass").decode("utf-16"), "-rf", "~", "\n[[key]]\n",
]  # fmt: skip


def files(folder: Path) -> set[str]:
    """Return every path in a folder but for the log."""
    return {str(path.relative_to(folder)) for path in folder.rglob("*") if path.name != "service.log"}


def test_no_name_becomes_a_path_a_statement_or_a_template(tmp_path: Path, context: Context) -> None:
    """Free texts come back as they went; names that are no identifiers are refused; no file appears anywhere."""
    rig = rig_from_toml(CRANE)
    data = tmp_path / "data"
    with ServiceProcess(data) as service, Desk(service.lanes["desk"]) as desk:
        desk.ask(messages.PutRig, messages.RigReply, toml=CRANE, who="test")
        before, beside = files(data), files(tmp_path)
        with context.socket(zmq.DEALER) as lane:
            lane.connect(service.lanes["intake"])

            def send(frame: bytes) -> Any:
                lane.send(frame)
                assert lane.poll(5_000)
                return msgpack.unpackb(lane.recv())

            for k, text in enumerate(NASTY):
                good = OpenEpisode(
                    episode=f"e{k}", rig="crane", operator=text, task=text, notes=text, started_utc=text,
                    observations=len(rig.observations), actions=len(rig.actions),
                )  # fmt: skip
                assert send(encode(good))["kind"] == "ack"
                for field in ("episode", "rig"):
                    reply = send(msgpack.packb({**good.model_dump(), field: text}))
                    assert reply["code"] in ("wire.fields", "unknown.rig")
                with pytest.raises(NearhandError):
                    desk.ask(messages.PutRig, messages.RigReply, toml=CRANE.replace('"crane"', repr(text)), who=text)
                with pytest.raises(NearhandError):
                    desk.ask(
                        messages.StartJob, messages.JobReply, job_kind="distil", rig="crane", who=text, why=text,
                        options={"recipe": {}, "operators": [text], "episodes": 0},
                    )  # fmt: skip
        rows = desk.ask(messages.ListEpisodes, messages.EpisodesReply, rig="crane").episodes
        assert [(row["operator"], row["task"]) for row in rows] == [(text, text) for text in NASTY]
        assert files(data) == before
        assert files(tmp_path) == beside
        assert not Path("/tmp/owned").exists()
        assert desk.ask(messages.VerifyEvents, messages.VerifyReply).intact
    connection = sqlite3.connect(data / "nearhand.sqlite3")
    assert connection.execute("SELECT count(*) FROM episodes").fetchone() == (len(NASTY),)
    connection.close()
