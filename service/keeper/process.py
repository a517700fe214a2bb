"""The keeper's process: one thread that waits for its lanes, the action server, its job and the stop signal."""

from __future__ import annotations

import argparse
import contextlib
import os
import time
from collections.abc import Sequence
from pathlib import Path

import zmq

from nearhand.service.bus.admission import Admission
from nearhand.service.bus.keys import KeyFolder
from nearhand.service.clock import MonotonicClock
from nearhand.service.config import ServiceSettings, read_settings
from nearhand.service.errors import NearhandError, StoreError
from nearhand.service.keeper.access import Access
from nearhand.service.keeper.action_server import ActionServer
from nearhand.service.keeper.desk import Desk
from nearhand.service.keeper.health import HealthWatch
from nearhand.service.keeper.intake import Intake
from nearhand.service.keeper.job_queue import JobQueue
from nearhand.service.keeper.lane import Lane
from nearhand.service.keeper.ledger import Feed, Ledger, log_line
from nearhand.service.keeper.office import Office
from nearhand.service.process import StopSignal, announce_ready, die_with_parent
from nearhand.service.store.store import Store

#: Requests held per client: a chunk can be several megabytes, a desk request hardly ever.
INTAKE_QUEUE = 64
DESK_QUEUE = 100
#: Longest time that the end spends on what has arrived already.
LEAVE_S = 1.0
#: Replies held per client of the desk: some are megabytes.
DESK_REPLIES_HELD = 16


class Keeper:
    """Everything the process holds; ``close`` gives it all back.

    Attributes:
        store: the records.
        ledger: the records with all that must happen around a change.

    Raises:
        StoreError: the database cannot be used.
        ConfigError: an address is taken.
    """

    def __init__(self, settings: ServiceSettings) -> None:
        self._context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
        self._poller = zmq.Poller()
        self.store = Store(settings.database)
        door = self._door = None if settings.keys is None else Admission(self._context, KeyFolder(settings.keys))
        feed = self._feed = Feed(self._context, settings.feed, door)
        ledger = self.ledger = Ledger(self.store, feed)
        self._access = Access(door, ledger)
        self._intake_lane = Lane(
            self._context, settings.intake, queue=INTAKE_QUEUE, admission=door, name="intake", limits=settings.limits
        )
        self._desk_lane = Lane(
            self._context,
            settings.desk,
            queue=DESK_QUEUE,
            admission=door,
            name="desk",
            limits=settings.limits,
            replies=DESK_REPLIES_HELD,
        )
        self._server = ActionServer(ledger, self._context, settings.control)
        self._queue = JobQueue(ledger, settings, self._context, self._poller)
        lanes = {"intake": self._intake_lane.address, "desk": self._desk_lane.address, "feed": feed.address}
        in_force = settings.model_copy(update=lanes)
        office = Office(ledger, self._server, self._queue, in_force, time.monotonic(), self._access)
        self._intake = Intake(ledger, self._intake_lane, MonotonicClock(), self._access)
        self._desk = Desk(office, self._desk_lane)
        self._health = HealthWatch(office)
        for socket in (self._intake_lane.socket, self._desk_lane.socket, self._server.socket, self._queue.socket):
            self._poller.register(socket, zmq.POLLIN)

    def run(self, stop: StopSignal) -> None:
        """Serve until the stop signal; then take in, and acknowledge, what has arrived already."""
        self._poller.register(stop.fileno(), zmq.POLLIN)
        busy = False
        while not stop.stopped:
            pause_s = 0.0 if busy else min(self._server.pause_s(), self._queue.pause_s())
            self._poller.poll(round(1000 * pause_s + 0.5))
            busy = self.turn()
        end_s = time.monotonic() + LEAVE_S
        with contextlib.suppress(StoreError):
            while self._desk.serve() + self._intake.serve() and time.monotonic() < end_s:
                pass

    def turn(self) -> bool:
        """Do what is due; return whether more may be waiting."""
        try:
            served = self._desk.serve() + self._intake.serve()
            self._access.end()
            self._server.turn()
            self._health.turn()
            self._queue.turn()
            self._feed.turn()
            self._access.turn()
            refused = self._desk_lane.meter.refused + self._intake_lane.meter.refused
            self.ledger.counters["refusals.rate"] = refused
        except StoreError as error:
            log_line(f"keeper-failed code={error.code} message={error.message!r}")
            time.sleep(0.1)
            return False
        return served > 0

    def close(self) -> None:
        """End the running job's process and close the store and all sockets."""
        self._queue.stop()
        self.store.close()
        if self._door is not None:
            self._door.close()
        self._context.destroy(linger=100)


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the keeper; exit status 0 after a stop signal, 1 if it could not start."""
    parser = argparse.ArgumentParser(prog="nearhand-keeper")
    parser.add_argument("--settings", type=Path, required=True)
    parser.add_argument("--ready-fd", type=int, default=-1)
    parser.add_argument("--parent", type=int, default=os.getppid())
    options = parser.parse_args(arguments)
    die_with_parent(options.parent)
    stop = StopSignal()
    try:
        keeper = Keeper(read_settings(options.settings))
    except NearhandError as error:
        log_line(f"keeper-not-started code={error.code} message={error.message!r}")
        return 1
    try:
        announce_ready(options.ready_fd)
        keeper.run(stop)
    finally:
        keeper.close()
    log_line("keeper-stopped")
    return 0


if __name__ == "__main__":
    raise SystemExit(main())
