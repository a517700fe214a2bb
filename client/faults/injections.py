"""The kinds of fault: what each does to processes, wire, clock, sensors and disk, and how it is undone."""

from __future__ import annotations

import contextlib
import os
import random
import resource
import signal
from collections.abc import Callable, Iterator
from contextlib import AbstractContextManager, contextmanager
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from nearhand.client.faults.proxy import Mischief, Proxy, corrupt, drop, duplicate, pass_on, reorder, slow, stale
from nearhand.client.tryout.service_process import ServiceProcess
from nearhand.service.clock import MonotonicClock
from nearhand.service.errors import LinkError

ACTION_SERVER, KEEPER = "nearhand.service.action.process", "nearhand.service.keeper.process"
Sensors = Callable[[NDArray[np.float64]], NDArray[np.float64]]


class SteppedClock:
    """The rig's monotonic clock, which faults may step."""

    def __init__(self) -> None:
        self._clock = MonotonicClock()
        self._offset_ns = 10**15

    def now_ns(self) -> int:
        """Return the stepped time."""
        return self._clock.now_ns() + self._offset_ns

    def step_s(self, seconds: float) -> None:
        """Jump."""
        self._offset_ns += round(seconds * 1e9)


@dataclass
class Bench:
    """What faults may touch.

    Attributes:
        sensors: what the rig tells, made of what is true.
        pause_s: how long the rig's program stands still before its next period.
    """

    service: ServiceProcess
    proxy: Proxy
    clock: SteppedClock
    generator: random.Random
    sensors: Sensors = field(default=lambda row: row)
    pause_s: float = 0.0


@contextmanager
def _wire(bench: Bench, mischief: Mischief) -> Iterator[None]:
    bench.proxy.mischief = mischief
    try:
        yield
    finally:
        bench.proxy.mischief = pass_on


@contextmanager
def _sensors(bench: Bench, sensors: Sensors) -> Iterator[None]:
    before, bench.sensors = bench.sensors, sensors
    try:
        yield
    finally:
        bench.sensors = before


@contextmanager
def killed(bench: Bench, module: str) -> Iterator[None]:
    """Kill a process; the service's own supervisor starts it again."""
    with contextlib.suppress(LinkError):
        bench.service.kill(module)
    yield


@contextmanager
def stopped(bench: Bench, module: str) -> Iterator[None]:
    """Stop a process, and let it go on."""
    try:
        number = bench.service.process_number(module)
        os.kill(number, signal.SIGSTOP)
    except (LinkError, OSError):
        yield
        return
    try:
        yield
    finally:
        with contextlib.suppress(OSError):
            os.kill(number, signal.SIGCONT)


@contextmanager
def full_disk(bench: Bench) -> Iterator[None]:
    """Let the keeper's files grow no further: each write beyond a few bytes fails, as on a full disk."""
    try:
        number = bench.service.process_number(KEEPER)
        soft, hard = resource.prlimit(number, resource.RLIMIT_FSIZE)
        resource.prlimit(number, resource.RLIMIT_FSIZE, (1, hard))
    except (LinkError, OSError):
        yield
        return
    try:
        yield
    finally:
        with contextlib.suppress(OSError):
            resource.prlimit(number, resource.RLIMIT_FSIZE, (soft, hard))


@contextmanager
def paused(bench: Bench) -> Iterator[None]:
    """Let the rig's own program stand still for longer than the deadline."""
    bench.pause_s = bench.generator.uniform(0.11, 0.4)
    yield


@contextmanager
def clock_step(bench: Bench) -> Iterator[None]:
    """Step the rig's clock forwards or backwards."""
    bench.clock.step_s(bench.generator.choice([-1.0, 1.0]) * 10 ** bench.generator.uniform(-2, 3))
    yield


def nan_sensor(bench: Bench) -> AbstractContextManager[None]:
    """Let one channel read NaN or infinity."""
    channel, value = bench.generator.randrange(6), bench.generator.choice([np.nan, np.inf, -np.inf])

    def told(row: NDArray[np.float64]) -> NDArray[np.float64]:
        wrong = row.copy()
        wrong[channel] = value
        return wrong

    return _sensors(bench, told)


def stuck_sensor(bench: Bench) -> AbstractContextManager[None]:
    """Let one channel read what it read first, for as long as the fault lasts."""
    channel = bench.generator.randrange(6)
    first: list[float] = []

    def told(row: NDArray[np.float64]) -> NDArray[np.float64]:
        wrong = row.copy()
        first.append(float(row[channel]))
        wrong[channel] = first[0]
        return wrong

    return _sensors(bench, told)


def strange_sensor(bench: Bench) -> AbstractContextManager[None]:
    """Let one channel read far too much or too little."""
    channel, factor = bench.generator.randrange(6), bench.generator.choice([-5.0, 5.0, 30.0])

    def told(row: NDArray[np.float64]) -> NDArray[np.float64]:
        wrong = row.copy()
        wrong[channel] = factor * (abs(row[channel]) + 1.0)
        return wrong

    return _sensors(bench, told)


#: Kind → what injects it for as long as its context is open.
KINDS: dict[str, Callable[[Bench], AbstractContextManager[None]]] = {
    "kill": lambda bench: killed(bench, ACTION_SERVER),
    "kill keeper": lambda bench: killed(bench, KEEPER),
    "stop": lambda bench: stopped(bench, ACTION_SERVER),
    "slow": lambda bench: _wire(bench, slow(bench.generator, bench.generator.choice([0.015, 0.05, 0.15]))),
    "drop": lambda bench: _wire(bench, drop(bench.generator, bench.generator.choice([0.3, 0.7, 1.0]))),
    "duplicate": lambda bench: _wire(bench, duplicate(bench.generator)),
    "reorder": lambda bench: _wire(bench, reorder()),
    "corrupt": lambda bench: _wire(bench, corrupt(bench.generator)),
    "stale": lambda bench: _wire(bench, stale(bench.generator, bench.proxy.past)),
    "clock step": clock_step,
    "rig pauses": paused,
    "NaN sensor": nan_sensor,
    "stuck sensor": stuck_sensor,
    "strange sensor": strange_sensor,
    "full disk": full_disk,
}
