"""The desk and the feed against sockets that answer well, badly, late, or not at all."""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterator
from typing import Any

import pytest
import zmq

from nearhand.client.desk import Desk, Feed
from nearhand.service.bus.codec import decode, encode
from nearhand.service.bus.desk_messages import (
    DESK_REQUESTS,
    GetJob,
    JobReply,
    ListRigs,
    PutRig,
    RigReply,
    RigsReply,
    StartJob,
    Where,
    WhereReply,
)
from nearhand.service.bus.desk_request import DeskRequest
from nearhand.service.bus.feed_messages import Event, Progress, RigHealth
from nearhand.service.bus.message import ErrorReply, Message
from nearhand.service.errors import ConfigError, ConflictError, LinkError, RefusedError

Context = zmq.Context[zmq.Socket[bytes]]
Answer = Callable[[DeskRequest], list[bytes | Message]]


class Counter:
    """A desk of one thread: answers each request as told, on a port that survives ``stop`` and ``start``."""

    def __init__(self, context: Context, answer: Answer) -> None:
        self._context = context
        self._answer = answer
        self.address = "tcp://127.0.0.1:*"
        self.seen: list[DeskRequest] = []
        self.got_one = threading.Event()
        self.start()

    def start(self) -> None:
        """Listen and answer."""
        self._socket = self._context.socket(zmq.ROUTER)
        self._socket.bind(self.address)
        self.address = self._socket.getsockopt_string(zmq.LAST_ENDPOINT).rstrip("\x00")
        self._stop = self._context.socket(zmq.PAIR)
        end = f"inproc://stop-{id(self._stop)}"
        self._stop.bind(end)
        self._thread = threading.Thread(target=self._run, args=(end,))
        self._thread.start()

    def _run(self, end: str) -> None:
        stop = self._context.socket(zmq.PAIR)
        stop.connect(end)
        poller = zmq.Poller()
        poller.register(stop, zmq.POLLIN)
        poller.register(self._socket, zmq.POLLIN)
        while stop not in dict(poller.poll()):
            who, frame = self._socket.recv_multipart()
            request = decode(frame, DESK_REQUESTS)
            assert isinstance(request, DeskRequest)
            self.seen.append(request)
            self.got_one.set()
            for answer in self._answer(request):
                self._socket.send_multipart([who, answer if isinstance(answer, bytes) else encode(answer)])
        stop.close()
        self._socket.unbind(self.address)
        self._socket.close(linger=0)

    def stop(self) -> None:
        """Stop listening; the port is free afterwards."""
        self._stop.send(b"")
        self._thread.join()
        self._stop.close()


@pytest.fixture
def counter(context: Context) -> Iterator[Callable[[Answer], Counter]]:
    made: list[Counter] = []

    def make(answer: Answer) -> Counter:
        made.append(Counter(context, answer))
        return made[-1]

    yield make
    for one in made:
        if one._thread.is_alive():
            one.stop()


Make = Callable[[Answer], Counter]


def rigs(request: DeskRequest, *names: str) -> RigsReply:
    return RigsReply(request=request.request, rigs=tuple({"rig": name} for name in names))


def test_an_answer_comes_back_as_its_own_class(counter: Make) -> None:
    desk_side = counter(lambda request: [rigs(request, "crane")])
    with Desk(desk_side.address) as desk:
        reply = desk.ask(ListRigs, RigsReply)
        assert reply.rigs == ({"rig": "crane"},)
        desk.ask(ListRigs, RigsReply)
    identifiers = [request.request for request in desk_side.seen]
    assert len(set(identifiers)) == 2


@pytest.mark.parametrize(
    ("code", "expected"), [("refused.gate", RefusedError), ("conflict.release", ConflictError), ("new.kind", LinkError)]
)
def test_an_error_reply_is_raised_as_its_own_error(counter: Make, code: str, expected: type[Exception]) -> None:
    desk_side = counter(lambda request: [ErrorReply(code=code, message="because", request=request.request)])
    with Desk(desk_side.address) as desk, pytest.raises(expected, match="because") as caught:
        desk.ask(ListRigs, RigsReply)
    assert caught.value.code == code  # type: ignore[attr-defined]


def test_answers_to_other_questions_are_passed_over(counter: Make) -> None:
    def answer(request: DeskRequest) -> list[bytes | Message]:
        stale = RigsReply(request="somebody-else", rigs=({"rig": "stale"},))
        stale_error = ErrorReply(code="refused.gate", message="stale", request="somebody-else")
        return [stale, stale_error, rigs(request, "fresh"), rigs(request, "twice")]

    with Desk(counter(answer).address) as desk:
        for _ in range(3):
            assert desk.ask(ListRigs, RigsReply).rigs == ({"rig": "fresh"},)


def test_silence_says_what_to_look_at_and_the_next_question_gets_its_own_answer(counter: Make) -> None:
    turns = iter([[], ["late"]])
    desk_side = counter(lambda request: [rigs(request, name) for name in next(turns)])
    with Desk(desk_side.address, timeout_s=0.15) as desk:
        with pytest.raises(LinkError, match="is `nearhand serve` running") as caught:
            desk.ask(ListRigs, RigsReply)
        assert caught.value.code == "link.silent"
        assert desk.ask(ListRigs, RigsReply).rigs == ({"rig": "late"},)


def test_a_question_given_up_before_the_service_came_is_never_delivered(counter: Make) -> None:
    desk_side = counter(lambda request: [rigs(request, "here")])
    desk_side.stop()
    with Desk(desk_side.address, timeout_s=0.15) as desk:
        with pytest.raises(LinkError):
            desk.ask(PutRig, RigReply, toml="", who="test")
        desk_side.start()
        desk.timeout_s = 10.0
        desk.ask(ListRigs, RigsReply)
    assert [request.kind for request in desk_side.seen] == ["list-rigs"]


def test_a_service_that_restarts_is_asked_again(counter: Make) -> None:
    silent = counter(lambda request: [])
    with Desk(silent.address) as desk:
        answers: list[Any] = []
        asking = threading.Thread(target=lambda: answers.append(desk.ask(ListRigs, RigsReply)))
        asking.start()
        assert silent.got_one.wait(5)
        silent.stop()
        silent._answer = lambda request: [rigs(request, "back")]
        silent.start()
        asking.join(10)
        assert [answer.rigs for answer in answers] == [({"rig": "back"},)]
    assert len({request.request for request in silent.seen}) == 1


def test_a_deed_is_not_repeated_when_the_connection_breaks(counter: Make) -> None:
    silent = counter(lambda request: [])
    with Desk(silent.address) as desk:
        caught: list[LinkError] = []

        def ask() -> None:
            try:
                desk.ask(PutRig, RigReply, toml="", who="test")
            except LinkError as error:
                caught.append(error)

        asking = threading.Thread(target=ask)
        asking.start()
        assert silent.got_one.wait(5)
        silent.stop()
        silent.start()
        asking.join(10)
        assert [error.code for error in caught] == ["link.broken"]
        assert "may or may not have been done" in str(caught[0])
    assert len(silent.seen) == 1


def test_a_wrong_field_is_refused_before_it_is_sent(counter: Make) -> None:
    desk_side = counter(lambda request: [])
    with Desk(desk_side.address) as desk:
        with pytest.raises(ConfigError, match="job"):
            desk.ask(GetJob, JobReply, job="seven")
        with pytest.raises(ConfigError, match="surplus"):
            desk.ask(ListRigs, RigsReply, surplus=1)
        with pytest.raises(ConfigError, match="cannot be sent"):
            desk.ask(
                StartJob,
                JobReply, who="test", job_kind="distil", rig="crane", options={"what": object()},
            )  # fmt: skip
    assert desk_side.seen == []


@pytest.mark.parametrize("answer", [b"\xc1", b"", encode(Where(request="x"))])
def test_an_answer_that_cannot_be_read_is_a_link_error(counter: Make, answer: bytes) -> None:
    desk_side = counter(lambda request: [answer])
    with Desk(desk_side.address) as desk, pytest.raises(LinkError) as caught:
        desk.ask(ListRigs, RigsReply)
    assert caught.value.code == "link.reply"


def test_an_answer_of_another_kind_is_a_link_error(counter: Make) -> None:
    desk_side = counter(lambda request: [rigs(request)])
    with Desk(desk_side.address) as desk, pytest.raises(LinkError, match="same release"):
        desk.ask(Where, WhereReply)


def test_a_malformed_address_is_named() -> None:
    with pytest.raises(LinkError, match="tcp://HOST:PORT"):
        Desk("nowhere")
    with pytest.raises(LinkError, match="tcp://HOST:PORT"):
        Feed("nowhere")


@pytest.fixture
def publisher(context: Context) -> Iterator[zmq.Socket[bytes]]:
    with context.socket(zmq.XPUB) as socket:
        socket.bind("tcp://127.0.0.1:*")
        yield socket


def test_the_feed_yields_what_it_can_read_and_ends_with_silence(publisher: zmq.Socket[bytes]) -> None:
    address = publisher.getsockopt_string(zmq.LAST_ENDPOINT).rstrip("\x00")
    sent: list[Message] = [
        Progress(job=1, stage="clone", fraction=0.5, figures={"loss": 1.5}),
        Event(event=3, utc="now", rig="crane", what="trip", who="", why="", detail={"x": 1}),
        RigHealth(rig="crane", state={"mode": "armed"}),
    ]
    with Feed(address, timeout_s=0.2) as feed:
        assert publisher.poll(5_000)
        assert publisher.recv() == b"\x01"
        for message in sent:
            publisher.send_multipart([b"junk", b"\xc1"])
            publisher.send_multipart([message.kind.encode(), encode(message)])
        assert list(feed) == sent
        assert feed.unreadable == 3
        assert feed.receive(0.0) is None


def test_the_feed_can_be_narrowed_to_topics(publisher: zmq.Socket[bytes]) -> None:
    with Feed(publisher.getsockopt_string(zmq.LAST_ENDPOINT).rstrip("\x00"), topics=("progress",)) as feed:
        assert publisher.poll(5_000)
        assert publisher.recv() == b"\x01progress"
        for message in (RigHealth(rig="crane", state={}), Progress(job=2, stage="x", fraction=0.1)):
            publisher.send_multipart([message.kind.encode(), encode(message)])
        received = feed.receive(5.0)
    assert isinstance(received, Progress)
