"""The keeper killed at any moment while demonstrations stream in: nothing acknowledged is lost or doubled."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from nearhand.service.bus.codec import decode, encode
from nearhand.service.bus.desk_messages import EpisodeReply, GetEpisode, VerifyEvents, VerifyReply
from nearhand.service.bus.intake_messages import INTAKE_REPLIES, Ack

if TYPE_CHECKING:
    from tests.keeper.conftest import Client, KeeperProcess, Samples

CHUNKS = 240
KILLS = 8


def test_acknowledged_chunks_survive_every_kill_exactly_once(
    keeper: KeeperProcess, client: Client, samples: Samples, generator: np.random.Generator
) -> None:
    client.put_rig()
    acknowledged, sent, kills = 0, 0, 0
    # Kill after this many messages have been handed to the socket, whatever the keeper is doing with them.
    moments = sorted(int(moment) for moment in generator.choice(np.arange(5, CHUNKS), KILLS, replace=False))
    handed = 0
    client.ack(samples.open("e1"))
    while acknowledged < CHUNKS:
        socket = client.socket("intake")
        while sent < min(CHUNKS, acknowledged + 24):
            socket.send(encode(samples.chunk("e1", sent)))
            sent, handed = sent + 1, handed + 1
            if kills < KILLS and handed >= moments[kills]:
                kills += 1
                break
        else:
            assert socket.poll(20_000)
            reply = decode(socket.recv(), INTAKE_REPLIES)
            assert isinstance(reply, Ack), reply
            assert reply.durable <= sent
            acknowledged = max(acknowledged, reply.durable)
            continue
        keeper.kill()
        client.close()
        keeper.start()
        again = client.ack(samples.open("e1"))
        assert again.durable >= acknowledged, "an acknowledged chunk was lost"
        acknowledged = sent = again.durable
    assert kills == KILLS
    client.ack(samples.close("e1", CHUNKS))
    got = client.ask(GetEpisode, EpisodeReply, episode="e1")
    chunks = [samples.chunk("e1", number) for number in range(CHUNKS)]
    assert got.times == b"".join(chunk.times for chunk in chunks)
    assert got.obs[:-8] == b"".join(chunk.obs for chunk in chunks)
    assert got.act == b"".join(chunk.act for chunk in chunks)
    assert client.ask(VerifyEvents, VerifyReply).intact


def test_a_kill_right_after_an_acknowledged_closing_keeps_it(
    keeper: KeeperProcess, client: Client, samples: Samples
) -> None:
    client.put_rig()
    for index in range(4):
        client.record(f"e{index}")
        keeper.kill()
        client.close()
        keeper.start()
        assert client.ask(GetEpisode, EpisodeReply, episode=f"e{index}").samples == 10
        assert client.ack(samples.close(f"e{index}", 2)).state == "closed"
    verdict = client.ask(VerifyEvents, VerifyReply)
    assert (verdict.intact, verdict.events) == (True, 5)
