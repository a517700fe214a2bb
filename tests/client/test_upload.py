"""An upload against a service that loses, repeats, delays and forgets: every sample is stored once, bit for bit."""

from __future__ import annotations

import random
import zlib
from collections import deque
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from nearhand.client.spool import Ending, Rows, SpoolFile, row_type
from nearhand.client.upload import CHUNK_AGE_S, CHUNK_SAMPLES, PATIENCE_S, Upload
from nearhand.service.bus.codec import decode, encode
from nearhand.service.bus.intake_messages import (
    INTAKE_REQUESTS,
    Ack,
    Chunk,
    CloseEpisode,
    DiscardEpisode,
    OpenEpisode,
)
from nearhand.service.bus.message import ErrorReply, Message

TYPE = row_type(2, 1)
HEAD = OpenEpisode(episode="e", rig="cart", operator="ann", started_utc="then", observations=2, actions=1)


class Store:
    """What the wire page says of the service's intake, in memory: stores in order, acknowledges cumulatively."""

    def __init__(self, credit: int) -> None:
        self.credit = credit
        self.chunks: list[tuple[int, bytes]] = []
        self.state = ""
        self.close: CloseEpisode | None = None
        self.most_ahead = 0

    @property
    def samples(self) -> int:
        return sum(count for count, _ in self.chunks)

    def take(self, frame: bytes) -> Message:
        message = decode(frame, INTAKE_REQUESTS)
        if isinstance(message, OpenEpisode):
            self.state = self.state or "open"
        elif not self.state:
            return ErrorReply(code="unknown.episode", message="no such episode", episode="e")
        elif isinstance(message, Chunk):
            content = message.times + message.obs + message.act
            assert zlib.crc32(content) == message.crc
            self.most_ahead = max(self.most_ahead, message.chunk - len(self.chunks))
            if message.chunk < len(self.chunks):
                assert self.chunks[message.chunk] == (message.count, content), "a repeated chunk has other content"
            elif message.chunk == len(self.chunks) and self.state == "open":
                self.chunks.append((message.count, content))
        elif isinstance(message, CloseEpisode):
            if message.chunks == len(self.chunks):
                assert message.samples == self.samples
                assert self.close in (None, message)
                self.state, self.close = "closed", message
        elif isinstance(message, DiscardEpisode):
            self.state, self.chunks = "discarded", []
        return Ack(
            episode="e",
            durable=len(self.chunks),
            samples=self.samples,
            credit=self.credit,
            state=self.state,  # type: ignore[arg-type]
        )

    def rows(self) -> tuple[bytes, bytes, bytes]:
        """Return all times, observations and actions."""
        parts: tuple[list[bytes], list[bytes], list[bytes]] = ([], [], [])
        for count, content in self.chunks:
            ends = (0, 8 * count, 16 * count, 20 * count)
            for part, start, stop in zip(parts, ends, ends[1:], strict=False):
                part.append(content[start:stop])
        return b"".join(parts[0]), b"".join(parts[1]), b"".join(parts[2])


def some_rows(count: int) -> Rows:
    return np.frombuffer(np.random.default_rng(count).bytes(count * TYPE.itemsize), dtype=TYPE)


def column(rows: Rows, name: str) -> bytes:
    return np.ascontiguousarray(rows[name]).tobytes()


def exchange(upload: Upload, store: Store, now_s: float) -> float:
    """Let both talk, with nothing lost, until nothing more is said; return the time."""
    for _ in range(10_000):
        upload.cut_chunks(now_s)
        message = upload.next_message(now_s)
        if message is None:
            return now_s
        upload.sent(message, now_s)
        answer = store.take(encode(message))
        if isinstance(answer, Ack):
            upload.on_ack(answer, now_s)
        elif isinstance(answer, ErrorReply):
            upload.on_error(answer.code, answer.message, now_s)
    raise AssertionError("they never stop talking")


@pytest.fixture
def spool(tmp_path: Path) -> SpoolFile:
    return SpoolFile.create(tmp_path, HEAD)


@settings(max_examples=300)
@given(data=st.data())
def test_every_sample_is_stored_once_whatever_happens(
    data: st.DataObject, tmp_path_factory: pytest.TempPathFactory
) -> None:
    """Both directions lose frames with a connection; either side dies; a dead writer's episode is taken up again."""
    chance = random.Random(data.draw(st.integers(0, 2**32)))
    loss = data.draw(st.sampled_from([0.0, 0.1, 0.5]))
    rows = some_rows(data.draw(st.integers(1, 2000)))
    store = Store(credit=8)
    spool = SpoolFile.create(tmp_path_factory.mktemp("spool"), HEAD)
    upload = Upload(spool)
    to_service: deque[bytes] = deque()
    to_client: deque[Message] = deque()
    now_s, added, wild = 0.0, 0, True
    final = b"final-ob"
    for turn in range(6000):
        wild = turn < 300
        now_s += chance.expovariate(1 / 0.05)
        if added < rows.size:
            step = min(chance.choice([1, 7, 300, 1500]), rows.size - added)
            spool.append_rows(rows[added : added + step])
            added += step
            if added == rows.size and chance.random() < 0.8:
                spool.end(Ending(samples=added, outcome="success", final_obs=final))
        upload.cut_chunks(now_s)
        for _ in range(4):
            message = upload.next_message(now_s)
            if message is not None:
                upload.sent(message, now_s)
                to_service.append(encode(message))
        for _ in range(chance.randrange(6)):
            if to_service:
                store.credit = chance.choice([0, 1, 3, 8])
                answer = store.take(to_service.popleft())
                to_client.append(answer)
            if to_client and chance.random() < 0.7:
                answer = to_client.popleft()
                if isinstance(answer, Ack):
                    upload.on_ack(answer, now_s)
                elif isinstance(answer, ErrorReply):
                    upload.on_error(answer.code, answer.message, now_s)
        if wild and chance.random() < loss:
            to_service.clear()
            to_client.clear()
        writer_gone = added == rows.size and spool.ending is None
        if (wild and chance.random() < loss / 10) or writer_gone:
            spool.close()
            taken = SpoolFile.take_up(spool.path)
            assert taken is not None
            spool = taken
            if spool.ending is None:
                spool.cut()
            added = rows.size
            upload = Upload(spool)
            to_service.clear()
            to_client.clear()
        if upload.is_over:
            break
    ending = spool.ending
    assert ending is not None
    if ending.discarded:
        assert upload.state == "discarded"
        assert store.state in ("", "discarded")
        return
    assert upload.state == "closed", upload.reason
    assert store.state == "closed"
    assert store.most_ahead <= 8
    kept = rows[: ending.samples]
    assert store.rows() == (column(kept, "time"), column(kept, "obs"), column(kept, "act"))
    assert upload.acknowledged == store.samples == ending.samples
    if ending.outcome == "cut":
        assert store.close is not None
        assert store.close.final_obs == column(rows[ending.samples : ending.samples + 1], "obs")


def test_the_newest_sample_waits_until_it_is_known_what_it_brought(spool: SpoolFile) -> None:
    upload, store = Upload(spool), Store(credit=4)
    spool.append_rows(some_rows(1))
    now_s = exchange(upload, store, 0.0)
    now_s = exchange(upload, store, now_s + 10 * CHUNK_AGE_S)
    assert store.samples == 0
    spool.append_rows(some_rows(1))
    now_s = exchange(upload, store, now_s)
    assert store.samples == 0
    exchange(upload, store, now_s + CHUNK_AGE_S)
    assert store.samples == 1
    spool.close()


def test_no_more_is_under_way_than_credit_allows(spool: SpoolFile) -> None:
    upload, store = Upload(spool), Store(credit=2)
    spool.append_rows(some_rows(CHUNK_SAMPLES * 5 + 1)[: CHUNK_SAMPLES + 1])
    for _ in range(4):
        upload.cut_chunks(0.0)
        spool.append_rows(some_rows(CHUNK_SAMPLES))
    upload.cut_chunks(0.0)
    opening = upload.next_message(0.0)
    assert opening == HEAD
    upload.sent(HEAD, 0.0)
    answer = store.take(encode(HEAD))
    assert isinstance(answer, Ack)
    upload.on_ack(answer, 0.0)
    sent = 0
    while (message := upload.next_message(0.0)) is not None:
        upload.sent(message, 0.0)
        sent += 1
    assert sent == 2
    spool.close()


def test_silence_is_met_with_patience_that_doubles_and_one_question_at_a_time(spool: SpoolFile) -> None:
    upload = Upload(spool)
    asked = []
    for tick in range(400):
        now_s = 0.1 * tick
        message = upload.next_message(now_s)
        if message is not None:
            upload.sent(message, now_s)
            asked.append(now_s)
    gaps = np.diff(asked)
    assert gaps[0] == pytest.approx(PATIENCE_S, abs=0.11)
    assert gaps[-1] == pytest.approx(5.0, abs=0.11)
    assert len(asked) < 15
    spool.close()


@pytest.mark.parametrize("code", ["store.full", "wire.crc", "error.internal", "unknown.episode"])
def test_a_passing_error_is_tried_again(spool: SpoolFile, code: str) -> None:
    upload, store = Upload(spool), Store(credit=4)
    spool.append_rows(some_rows(3))
    spool.end(Ending(samples=3, outcome="success", final_obs=b"12345678"))
    upload.cut_chunks(0.0)
    upload.sent(HEAD, 0.0)
    upload.on_error(code, "not now", 0.0)
    assert (upload.state, upload.reason) == ("waiting", "not now")
    exchange(upload, store, 100.0)
    assert (upload.state, upload.reason, store.samples) == ("closed", "", 3)
    spool.close()


@pytest.mark.parametrize("code", ["unknown.rig", "conflict.episode", "conflict.chunk", "wire.fields", "refused.role"])
def test_a_lasting_error_rejects_the_episode(spool: SpoolFile, code: str) -> None:
    upload = Upload(spool)
    upload.on_error(code, "never", 0.0)
    assert upload.state == "rejected"
    assert upload.reason == f"{code}: never"
    assert upload.next_message(0.0) is None
    spool.close()


def test_a_service_that_lost_its_data_gets_everything_again(spool: SpoolFile) -> None:
    upload, store = Upload(spool), Store(credit=4)
    rows = some_rows(CHUNK_SAMPLES + 1)
    spool.append_rows(rows)
    now_s = exchange(upload, store, 0.0)
    assert store.samples == CHUNK_SAMPLES
    empty = Store(credit=4)
    spool.end(Ending(samples=rows.size, outcome="success", final_obs=b"12345678"))
    exchange(upload, empty, now_s)
    exchange(upload, empty, now_s + 10)
    assert upload.state == "closed"
    assert empty.rows()[1] == column(rows, "obs")
    spool.close()


@pytest.mark.parametrize(
    "ack",
    [
        Ack(episode="e", durable=9, samples=900, credit=1, state="open"),
        Ack(episode="e", durable=1, samples=9, credit=1, state="closed"),
        Ack(episode="e", durable=0, samples=0, credit=1, state="discarded"),
    ],
)
def test_a_service_that_holds_something_else_is_not_believed(spool: SpoolFile, ack: Ack) -> None:
    upload = Upload(spool)
    spool.append_rows(some_rows(3))
    spool.end(Ending(samples=3, outcome="success", final_obs=b"12345678"))
    upload.cut_chunks(0.0)
    upload.on_ack(ack, 0.0)
    assert upload.state == "rejected"
    spool.close()
