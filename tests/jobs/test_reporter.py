"""Progress: lossy, sparing, finite, and never in the way of the work."""

from __future__ import annotations

import math
import time
from collections.abc import Iterator

import pytest
import zmq

from nearhand.service.bus.codec import decode
from nearhand.service.bus.feed_messages import FEED_MESSAGES, Progress
from nearhand.service.jobs.reporter import Reporter

Context = zmq.Context[zmq.Socket[bytes]]


@pytest.fixture
def socket(context: Context) -> Iterator[zmq.Socket[bytes]]:
    """The keeper's end."""
    made = context.socket(zmq.PULL)
    made.bind("tcp://127.0.0.1:*")
    yield made
    made.close(linger=0)


def address(socket: zmq.Socket[bytes]) -> str:
    return socket.getsockopt_string(zmq.LAST_ENDPOINT)


def received(socket: zmq.Socket[bytes], count: int) -> list[Progress]:
    messages = []
    for _ in range(count):
        assert socket.poll(5_000)
        message = decode(socket.recv(), FEED_MESSAGES)
        assert isinstance(message, Progress)
        messages.append(message)
    return messages


def test_the_first_word_of_a_stage_and_its_end_always_arrive(socket: zmq.Socket[bytes]) -> None:
    with Reporter(7, address(socket)) as reporter:
        for stage in ("clone", "online"):
            for step in range(1, 2001):
                reporter.report(stage, step / 2000, {"loss": 1.0 / step, "broken": math.nan})
        messages = received(socket, 4)
        while socket.poll(50):
            messages += received(socket, 1)
    for stage in ("clone", "online"):
        fractions = [message.fraction for message in messages if message.stage == stage]
        assert fractions[-1] == 1.0
        assert fractions == sorted(fractions)
        # Four thousand words took well under a second: at most ten a second are sent.
        assert len(fractions) < 100
    assert {message.job for message in messages} == {7}
    assert all(set(message.figures) == {"loss"} for message in messages)


def test_nobody_listening_costs_nothing() -> None:
    with Reporter(7, "ipc:///tmp/nearhand-nobody-listens-here") as reporter:
        begin_s = time.monotonic()
        for step in range(5000):
            reporter.report("clone", step / 5000, message="word")
        assert time.monotonic() - begin_s < 10
    with Reporter(7, "") as reporter:
        reporter.report("clone", 0.5)


def test_fractions_outside_their_range_are_limited(socket: zmq.Socket[bytes]) -> None:
    with Reporter(7, address(socket)) as reporter:
        reporter.report("a", -1.0)
        reporter.report("b", 2.0)
        assert [message.fraction for message in received(socket, 2)] == [0.0, 1.0]
