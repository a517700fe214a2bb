"""The action server as a process: ``python -m nearhand.service.action.process``; never loads torch or a database."""

from __future__ import annotations

import argparse
import contextlib
import gc
import os
import secrets
import sys
from pathlib import Path

import zmq

from nearhand.service.action.server import ActionServer
from nearhand.service.bus.admission import Admission
from nearhand.service.bus.keys import KeyFolder
from nearhand.service.clock import MonotonicClock, utc_now
from nearhand.service.config import read_settings
from nearhand.service.errors import NearhandError
from nearhand.service.process import StopSignal, announce_ready, die_with_parent

#: Ahead of the trainer and the keeper, where the system allows it.
NICENESS = -5


def main() -> int:
    """Serve until SIGTERM."""
    parser = argparse.ArgumentParser(prog="nearhand-action-server", description=__doc__)
    parser.add_argument("--settings", type=Path, required=True)
    parser.add_argument("--ready-fd", type=int, default=-1)
    parser.add_argument("--parent", type=int, required=True)
    options = parser.parse_args()
    die_with_parent(options.parent)
    stop = StopSignal()
    with contextlib.suppress(OSError):
        os.setpriority(os.PRIO_PROCESS, 0, NICENESS)
    context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
    try:
        settings = read_settings(options.settings)
        door = None if settings.keys is None else Admission(context, KeyFolder(settings.keys))
        server = ActionServer(
            context, settings.action, settings.control, MonotonicClock(), secrets.token_hex(8), door, settings.limits
        )
    except NearhandError as error:
        print(f"{utc_now()} failed process=action-server code={error.code} message={error.message!r}", file=sys.stderr)
        context.destroy(linger=0)
        return 1
    # What is loaded by now stays: a full collection in the middle of a query would be felt.
    gc.collect()
    gc.freeze()
    gc.disable()
    try:
        announce_ready(options.ready_fd)
        server.run(stop)
    finally:
        server.close()
        if door is not None:
            door.close()
        context.term()
    return 0


if __name__ == "__main__":
    raise SystemExit(main())
