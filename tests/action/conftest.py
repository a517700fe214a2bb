"""A small rig, policies whose output is known, and an action server of its own."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import zmq

from nearhand.service.bus.action_messages import ACTION_REPLIES, Act, Action, Hello
from nearhand.service.bus.arrays import pack
from nearhand.service.bus.codec import decode, encode
from nearhand.service.bus.message import Message
from nearhand.service.envelope.novelty import calibrate
from nearhand.service.policy.format import PolicyFile
from nearhand.service.policy.network import Float32, Policy
from nearhand.service.rigs import Rig

N, M = 3, 2


def make_rig(**changes: Any) -> Rig:
    """Return a rig with three observation and two action channels; tables are merged."""
    table: dict[str, Any] = {
        "name": "rig",
        "title": "rig",
        "observations": [{"name": f"o{k}", "unit": "m", "low": -5.0, "high": 5.0} for k in range(N)],
        "actions": [
            {"name": "u", "unit": "", "low": -1.0, "high": 1.0, "slew_per_s": 10.0},
            {"name": "v", "unit": "", "low": -0.5, "high": 2.0, "rest": 0.25, "slew_per_s": 10.0},
        ],
        "timing": {"period_s": 0.02, "deadline_s": 0.1, "lease_s": 0.06},
        "novelty": {"epsilon": 0.1, "trip_m": 2, "window_n": 3},
    }
    for key, value in changes.items():
        table[key] = {**table.get(key, {}), **value} if isinstance(value, dict) else value
    return Rig.model_validate(table)


def make_file(
    bias: tuple[float, ...] = (0.5, 0.5), *, gain: float = 0.0, past: tuple[int, int] = (0, 0), gate: bool = False,
    poison: bool = False, rig: str = "rig",
) -> PolicyFile:  # fmt: skip
    """Return a linear policy: ``bias`` plus ``gain`` times the first observation on the first action.

    ``gate``: with a confidence gate calibrated on standard normal observations. ``poison``: infinite weights, as only a
    file that was never checked could have.
    """
    width = N * (1 + past[0]) + M * past[1]
    weight = np.zeros((width, M), dtype=np.float32)
    weight[0, 0] = gain
    if poison:
        weight[:] = np.inf
    generator = np.random.default_rng(3)
    novelty: dict[str, Float32] = {}
    if gate:
        episodes = [generator.standard_normal((10, width)).astype(np.float32) for _ in range(19)]
        novelty = calibrate(generator.standard_normal((500, width)).astype(np.float32), episodes)
    policy = Policy(
        weights=(weight,),
        biases=(np.array(bias, dtype=np.float32),),
        observation_mean=np.zeros(N, dtype=np.float32),
        observation_scale=np.ones(N, dtype=np.float32),
        action_middle=np.zeros(M, dtype=np.float32),
        action_half=np.ones(M, dtype=np.float32),
        log_sd=np.zeros(M, dtype=np.float32),
        past_observations=past[0],
        past_actions=past[1],
    )
    return PolicyFile(policy, rig, ("o0", "o1", "o2"), ("u", "v"), "clone", novelty, {})


@pytest.fixture(scope="session")
def rig_with() -> Callable[..., Rig]:
    """A function that returns a small rig with changes."""
    return make_rig


@pytest.fixture(scope="session")
def file_with() -> Callable[..., PolicyFile]:
    """A function that returns a small policy file."""
    return make_file


@dataclass
class Lane:
    """A client of the action lane that sees every reply."""

    socket: zmq.Socket[bytes]
    rig: Rig
    session: str = "s1"
    seq: int = 0
    errors: list[Message] = field(default_factory=list)

    def send(self, frame: bytes) -> None:
        """Send one frame."""
        self.socket.send(frame)

    def receive(self, timeout_ms: int = 5_000) -> Message:
        """Return the next reply."""
        assert self.socket.poll(timeout_ms), "no reply"
        return decode(self.socket.recv(), ACTION_REPLIES)

    def ask(self, message: Message) -> Message:
        """Send a message and return its reply."""
        self.send(encode(message))
        return self.receive()

    def hello(self, **changes: Any) -> Message:
        """Open the session."""
        fields: dict[str, Any] = {
            "rig": self.rig.name,
            "session": self.session,
            "observations": tuple(c.name for c in self.rig.observations),
            "actions": tuple(c.name for c in self.rig.actions),
            "period_s": self.rig.timing.period_s,
        }
        return self.ask(Hello(**{**fields, **changes}))

    def act(self, observation: tuple[float, ...] = (0.0, 0.0, 0.0), *, sent_ns: int = 0, **changes: Any) -> Message:
        """Send one observation with the next number."""
        self.seq += 1
        fields: dict[str, Any] = {
            "rig": self.rig.name,
            "session": self.session,
            "seq": self.seq,
            "sent_ns": sent_ns,
            "obs": pack(np.array(observation, dtype=np.float32)),
        }
        return self.ask(Act(**{**fields, **changes}))

    def action(self, *args: Any, **changes: Any) -> Action:
        """Send one observation and return its action."""
        reply = self.act(*args, **changes)
        assert isinstance(reply, Action), reply
        return reply


@pytest.fixture
def ipc(tmp_path: Path) -> Iterator[str]:
    """An ipc address; short, as the kernel wants it."""
    yield f"ipc://{tmp_path / 'c'}"
