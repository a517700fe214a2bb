"""Versions swap while eight rigs ask a real action server process a thousand times a second between them."""

from __future__ import annotations

import itertools
import threading
import time

import numpy as np
import zmq

from nearhand.service.bus.action_messages import ACTION_REPLIES, Action, Hello, Welcome
from nearhand.service.bus.arrays import pack, unpack
from nearhand.service.bus.codec import decode, encode
from nearhand.service.bus.control_messages import Arm, Load
from nearhand.service.bus.queries import pack_query
from nearhand.service.policy.format import sha256
from nearhand.service.rigs import Rig
from tests.client.pretenders import PATIENCE_S, PERIOD_S, Context, Server, crane, policy_bytes

RIGS, RATE_HZ, SECONDS = 8, 1000.0, 4.0
#: What each version's policy always answers; the slew limit lets it be reached within one period.
ANSWERS = {1: 0.5, 2: -0.25, 3: 0.1}


def rig_called(name: str) -> Rig:
    """Return the small crane under another name, free to jump, with a deadline that a busy machine keeps."""
    table = crane().model_dump()
    table["actions"][0]["slew_per_s"] = 1000.0
    timing = {"period_s": PERIOD_S, "deadline_s": 5.0, "lease_s": 0.06}
    return Rig.model_validate({**table, "name": name, "timing": timing, "braking": []})


class Asking:
    """Asks for all rigs in turn at a rate, in a thread, and keeps every reply with the time it took."""

    def __init__(self, context: Context, address: str, rigs: list[Rig]) -> None:
        self.replies: list[tuple[float, float, Action]] = []
        self.unanswered = 0
        self._sockets = {}
        for rig in rigs:
            socket = context.socket(zmq.DEALER)
            socket.setsockopt(zmq.LINGER, 0)
            socket.connect(address)
            names = tuple(c.name for c in rig.observations), tuple(c.name for c in rig.actions)
            socket.send(
                encode(Hello(rig=rig.name, session="s", observations=names[0], actions=names[1], period_s=PERIOD_S))
            )
            assert socket.poll(round(PATIENCE_S * 1e3))
            assert isinstance(decode(socket.recv(), ACTION_REPLIES), Welcome)
            self._sockets[rig.name] = socket
        self.thread = threading.Thread(target=self._run)

    def _run(self) -> None:
        due_s = time.monotonic()
        end_s = due_s + SECONDS
        for count in itertools.count():
            if time.monotonic() >= end_s:
                return
            name = list(self._sockets)[count % RIGS]
            socket = self._sockets[name]
            due_s += 1 / RATE_HZ
            time.sleep(max(0.0, due_s - time.monotonic()))
            begin_s = time.monotonic()
            socket.send(pack_query(name, "s", count + 1, time.monotonic_ns(), pack([0.0, 0.0]), pack([0.0])))
            if not socket.poll(round(PATIENCE_S * 1e3)):
                self.unanswered += 1
                continue
            reply = decode(socket.recv(), ACTION_REPLIES)
            assert isinstance(reply, Action)
            self.replies.append((begin_s, time.monotonic() - begin_s, reply))

    def close(self) -> None:
        """Close the sockets."""
        for socket in self._sockets.values():
            socket.close(linger=0)


def test_no_query_is_unanswered_or_mixed_and_a_swap_delays_none_by_more_than_a_period(
    server: Server, context: Context
) -> None:
    rigs = [rig_called(f"rig-{index}") for index in range(RIGS)]
    files = {version: policy_bytes(answer) for version, answer in ANSWERS.items()}

    def load(rig: Rig, version: int) -> None:
        data = named(files[version], rig.name)
        server.do(
            Load(
                request="1", rig=rig.name, description=rig.model_dump(mode="json"), version=version,
                sha256=sha256(data), policy=data,
            )
        )  # fmt: skip

    for rig in rigs:
        load(rig, 1)
        server.do(Arm(request="2", rig=rig.name, who="ann", why="clear"))
    asking = Asking(context, server.settings.action, rigs)
    swaps: list[tuple[float, float]] = []
    asking.thread.start()
    generator = np.random.default_rng(0)
    while asking.thread.is_alive():
        begin_s = time.monotonic()
        load(rigs[int(generator.integers(RIGS))], int(generator.integers(1, 4)))
        swaps.append((begin_s, time.monotonic()))
        time.sleep(0.02)
    asking.thread.join()
    asking.close()
    assert asking.unanswered == 0 and len(asking.replies) > 0.5 * RATE_HZ * SECONDS and len(swaps) > 50
    for _, _, reply in asking.replies:
        assert reply.mode == "armed" and reply.reasons == 0
        assert unpack(reply.action, 1, what="action")[0] == np.float32(ANSWERS[reply.version])
    assert {reply.version for _, _, reply in asking.replies} == set(ANSWERS)
    during = [taken_s for begin_s, taken_s, _ in asking.replies if any(a - taken_s <= begin_s <= b for a, b in swaps)]
    apart = [
        taken_s for begin_s, taken_s, _ in asking.replies if all(not a - taken_s <= begin_s <= b for a, b in swaps)
    ]
    # What the machine itself holds up shows in the replies apart from swaps.
    assert len(during) > 50 and max(during) <= max(apart) + PERIOD_S


def named(data: bytes, rig: str) -> bytes:
    """Return a policy file for another rig."""
    from nearhand.service.policy.format import PolicyFile, read_policy, write_policy

    file = read_policy(data)
    return write_policy(
        PolicyFile(file.policy, rig, file.observations, file.actions, file.method, file.novelty, file.extra)
    )
