"""The intake lane: what is acknowledged is stored, once and bit by bit; what is wrong is answered and harms nothing."""

from __future__ import annotations

import zlib
from typing import TYPE_CHECKING, Any

import numpy as np
import pytest

from nearhand.service.bus.codec import decode, encode
from nearhand.service.bus.desk_messages import (
    EpisodeReply,
    EpisodesReply,
    GetEpisode,
    GetHealth,
    HealthReply,
    ListEpisodes,
)
from nearhand.service.bus.intake_messages import INTAKE_REPLIES, Ack, DiscardEpisode
from nearhand.service.bus.message import ErrorReply, Message
from nearhand.service.episodes.episode import split_of

if TYPE_CHECKING:
    from tests.keeper.conftest import Client, Samples


@pytest.fixture
def crane(keeper_thread: None, client: Client) -> Client:
    """A client of a keeper that knows the crane."""
    client.put_rig()
    return client


def code(reply: Message) -> str:
    assert isinstance(reply, ErrorReply), reply
    return reply.code


def test_an_episode_comes_out_bit_by_bit_as_it_was_sent(crane: Client, samples: Samples) -> None:
    crane.ack(samples.open("e1"))
    chunks = [samples.chunk("e1", number, count=number + 1) for number in range(5)]
    final = np.array([1.5, np.pi], dtype="<f4").tobytes()
    for number, chunk in enumerate(chunks):
        ack = crane.ack(chunk)
        assert (ack.durable, ack.samples, ack.state) == (number + 1, (number + 1) * (number + 2) // 2, "open")
        assert ack.credit >= 1
    closing = samples.close("e1", 5, samples=15, outcome="cut", terminated=True, final_obs=final)
    assert crane.ack(closing).state == "closed"
    got = crane.ask(GetEpisode, EpisodeReply, episode="e1")
    assert got.times == b"".join(chunk.times for chunk in chunks)
    assert got.obs == b"".join(chunk.obs for chunk in chunks) + final
    assert got.act == b"".join(chunk.act for chunk in chunks)
    assert (got.samples, got.outcome, got.terminated, got.operator) == (15, "cut", True, "ann")


def test_repeating_anything_does_no_harm(crane: Client, samples: Samples) -> None:
    messages = [samples.open("e1"), samples.chunk("e1", 0), samples.chunk("e1", 1), samples.close("e1", 2)]
    for message in messages:
        first = crane.ack(message)
        assert crane.ack(message) == first
    for message in messages:
        assert crane.ack(message) == first
    assert crane.ask(GetEpisode, EpisodeReply, episode="e1").samples == 10


def test_a_gap_is_answered_with_what_is_durable(crane: Client, samples: Samples) -> None:
    crane.ack(samples.open("e1"))
    crane.ack(samples.chunk("e1", 0))
    for number in (2, 9, 2**62):
        assert crane.ack(samples.chunk("e1", number)).durable == 1
    early = crane.ack(samples.close("e1", 3))
    assert (early.durable, early.state) == (1, "open")
    assert crane.ack(samples.chunk("e1", 1)).durable == 2


def test_other_content_under_the_same_number_is_refused(crane: Client, samples: Samples) -> None:
    crane.ack(samples.open("e1"))
    crane.ack(samples.chunk("e1", 0, seed=1))
    assert code(crane.intake(samples.chunk("e1", 0, seed=2))) == "conflict.chunk"
    crane.ack(samples.close("e1", 1))
    assert code(crane.intake(samples.chunk("e1", 0, seed=2))) == "conflict.chunk"
    assert crane.ask(GetEpisode, EpisodeReply, episode="e1").act == samples.chunk("e1", 0, seed=1).act


@pytest.mark.parametrize(
    ("changes", "expected"),
    [
        ({"crc": 1}, "wire.crc"),
        ({"times": b"\0" * 39}, "wire.vector_size"),
        ({"obs": b"\0" * 44}, "wire.vector_size"),
        ({"act": b""}, "wire.vector_size"),
        ({"times": np.array([0, 1, 2, np.nan, 4]).tobytes()}, "wire.times"),
        ({"times": np.array([0, 1, 2, 3, np.inf]).tobytes()}, "wire.times"),
    ],
)
def test_a_wrong_chunk_is_refused_and_counted(
    crane: Client, samples: Samples, changes: dict[str, Any], expected: str
) -> None:
    crane.ack(samples.open("e1"))
    assert code(crane.intake(samples.chunk("e1", 0, **changes))) == expected
    assert crane.ack(samples.chunk("e1", 0)).durable == 1
    counters = crane.ask(GetHealth, HealthReply).counters
    assert counters[f"errors.{expected}"] == counters["intake.errors"] == 1


def test_what_does_not_fit_the_rig_or_the_state_is_refused(crane: Client, samples: Samples) -> None:
    assert code(crane.intake(samples.open("e1", rig="nobody"))) == "unknown.rig"
    assert code(crane.intake(samples.open("e1", observations=3))) == "conflict.channels"
    assert code(crane.intake(samples.chunk("e1", 0))) == "unknown.episode"
    assert code(crane.intake(DiscardEpisode(episode="e1"))) == "unknown.episode"
    crane.ack(samples.open("e1"))
    assert code(crane.intake(samples.open("e1", "somebody else"))) == "conflict.episode"
    assert code(crane.intake(samples.close("e1", 0))) == "conflict.empty"
    crane.ack(samples.chunk("e1", 0))
    crane.ack(samples.chunk("e1", 1))
    assert code(crane.intake(samples.close("e1", 1))) == "conflict.counts"
    assert code(crane.intake(samples.close("e1", 2, samples=9))) == "conflict.counts"
    assert code(crane.intake(samples.close("e1", 2, final_obs=b"\0" * 12))) == "wire.vector_size"
    crane.ack(samples.close("e1", 2))
    assert code(crane.intake(samples.close("e1", 2, outcome="failure"))) == "conflict.closed"
    assert code(crane.intake(samples.chunk("e1", 2))) == "conflict.closed"
    assert code(crane.intake(DiscardEpisode(episode="e1"))) == "conflict.closed"


def test_a_discarded_episode_takes_nothing_more(crane: Client, samples: Samples) -> None:
    crane.ack(samples.open("e1"))
    crane.ack(samples.chunk("e1", 0))
    assert crane.ack(DiscardEpisode(episode="e1")).state == "discarded"
    assert crane.ack(DiscardEpisode(episode="e1")).state == "discarded"
    assert code(crane.intake(samples.chunk("e1", 1))) == "conflict.discarded"
    assert code(crane.intake(samples.close("e1", 1))) == "conflict.discarded"
    assert crane.desk(GetEpisode, episode="e1").kind == "error"


def test_splits_follow_the_order_of_closing(crane: Client) -> None:
    for index in range(7):
        crane.record(f"a{index}", operator="ann")
        crane.record(f"b{index}", operator="ben")
    rows = crane.ask(ListEpisodes, EpisodesReply, rig="yard-crane").episodes
    for operator in ("ann", "ben"):
        assert [row["split"] for row in rows if row["operator"] == operator] == [split_of(index) for index in range(7)]


def test_values_that_are_not_finite_are_kept_and_marked(crane: Client, samples: Samples) -> None:
    odd = np.full((5, 2), np.nan, dtype="<f4").tobytes()
    crane.ack(samples.open("e1"))
    crane.ack(samples.chunk("e1", 0, obs=odd))
    crane.ack(samples.close("e1", 1))
    crane.ack(samples.open("e2"))
    crane.ack(samples.chunk("e2", 0))
    crane.ack(samples.close("e2", 1, final_obs=np.array([np.inf, 0], dtype="<f4").tobytes()))
    crane.record("e3")
    assert crane.ask(GetEpisode, EpisodeReply, episode="e1").obs[:40] == odd
    rows = crane.ask(ListEpisodes, EpisodesReply, rig="yard-crane").episodes
    assert [row["finite"] for row in rows] == [False, False, True]


def test_a_flood_is_stored_in_few_transactions_and_acknowledged_in_order(crane: Client, samples: Samples) -> None:
    crane.ack(samples.open("e1"))
    socket = crane.socket("intake")
    for number in range(200):
        socket.send(encode(samples.chunk("e1", number)))
    acks = []
    for _ in range(200):
        assert socket.poll(20_000)
        acks.append(decode(socket.recv(), INTAKE_REPLIES))
    assert all(isinstance(ack, Ack) for ack in acks)
    assert [ack.durable for ack in acks if isinstance(ack, Ack)] == list(range(1, 201))
    assert crane.ask(GetHealth, HealthReply).counters["intake.transactions"] < 200


def test_both_kinds_of_client_socket_get_their_envelope_back(crane: Client, samples: Samples) -> None:
    frame = encode(samples.open("e1"))
    assert len(crane.raw("intake", frame)) == 1
    with_delimiter = crane.raw("intake", b"", frame)
    assert with_delimiter[0] == b""
    assert len(with_delimiter) == 2
    assert code(decode(crane.raw("intake", frame, frame, frame)[-1], INTAKE_REPLIES)) == "wire.frames"
    assert code(decode(crane.raw("intake", b"")[-1], INTAKE_REPLIES)) == "wire.malformed"


def test_the_checksum_covers_all_three_columns(crane: Client, samples: Samples) -> None:
    crane.ack(samples.open("e1"))
    good = samples.chunk("e1", 0)
    for column in ("times", "obs", "act"):
        damaged = bytearray(getattr(good, column))
        damaged[3] ^= 1
        assert code(crane.intake(good.model_copy(update={column: bytes(damaged)}))) == "wire.crc"
    assert good.crc == zlib.crc32(good.times + good.obs + good.act)
    assert crane.ack(good).durable == 1


def test_an_episode_too_large_for_one_frame_is_stored_and_says_so(crane: Client, samples: Samples) -> None:
    # 110 chunks of 4,096 samples at 20 bytes each are 9 MB; a frame holds 8 MiB.
    crane.ack(samples.open("e1"))
    for number in range(110):
        assert crane.ack(samples.chunk("e1", number, count=4096)).durable == number + 1
    assert crane.ack(samples.close("e1", 110, count=4096)).samples == 110 * 4096
    assert crane.refused(GetEpisode, episode="e1") == "wire.oversized"
    crane.put_rig()
