"""The service as a whole: one data folder, one lock, four lanes, one supervisor."""

from __future__ import annotations

import contextlib
import fcntl
import json
import os
import socket
import sys
import tempfile
import time
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import IO

from nearhand.service.bus.keys import KeyFolder
from nearhand.service.bus.limits import USUAL, read_limits
from nearhand.service.bus.sockets import check_address
from nearhand.service.clock import utc_now
from nearhand.service.config import DEFAULT_HOST, DEFAULT_PORTS, ServiceSettings
from nearhand.service.errors import ConfigError, StoreError
from nearhand.service.process import StopSignal
from nearhand.service.supervisor import Supervisor

#: The kernel's limit for the path of a local socket is 107 bytes; the longest name below it takes 14.
MAX_SOCKET_FOLDER = 90
#: How long a service that starts waits for one that is just ending in the same data folder.
LOCK_PATIENCE_S = 3.0
LOCK_RETRY_S = 0.05


def log_line(text: str) -> None:
    """Write one log line to standard error; a log on a full disk must stop nobody."""
    with contextlib.suppress(OSError):
        print(f"{utc_now()} {text}", file=sys.stderr, flush=True)


def free_ports(host: str, count: int) -> list[int]:
    """Return ``count`` different TCP ports that nobody listens on at this moment."""
    listeners = []
    try:
        for _ in range(count):
            listener = socket.socket()
            listeners.append(listener)
            listener.bind((host, 0))
        return [listener.getsockname()[1] for listener in listeners]
    finally:
        for listener in listeners:
            listener.close()


def make_settings(
    data: Path,
    *,
    host: str = DEFAULT_HOST,
    ports: Mapping[str, int] | None = None,
    pick_ports: bool = False,
    limits: Path | None = None,
) -> ServiceSettings:
    """Settle where the service keeps its data and listens.

    Args:
        data: the data folder; made if it does not exist.
        host: where to listen; a loopback host unless the data folder holds keys.
        ports: port by lane; the defaults where a lane is left out.
        pick_ports: take any free ports instead.
        limits: file of limits; by default ``limits.toml`` in the data folder, if there is one.

    Raises:
        ConfigError: the host is not loopback and there are no keys, or the folder or its keys cannot be used.
    """
    wanted = {**DEFAULT_PORTS, **(ports or {})}
    data = data.resolve()
    keys = KeyFolder(data / "keys")
    check_address(f"tcp://{host}:1", keyed=keys.is_there)
    if keys.is_there:
        keys.service_key(), keys.table()
    if pick_ports:
        wanted = dict(zip(DEFAULT_PORTS, free_ports(host, len(DEFAULT_PORTS)), strict=True))
    if limits is None and (data / "limits.toml").exists():
        limits = data / "limits.toml"
    run = data / "run"
    try:
        run.mkdir(parents=True, exist_ok=True)
        run.chmod(0o700)
    except OSError as error:
        raise ConfigError(f"cannot make the data folder {data}: {error}; give another one with --data") from error
    sockets = run
    if len(os.fsencode(run)) > MAX_SOCKET_FOLDER:
        sockets = Path(tempfile.mkdtemp(prefix="nearhand-"))
    return ServiceSettings(
        data=data,
        control=f"ipc://{sockets / 'control.ipc'}",
        progress=f"ipc://{sockets / 'progress.ipc'}",
        keys=keys.path if keys.is_there else None,
        limits=USUAL if limits is None else read_limits(limits),
        **{lane: f"tcp://{host}:{port}" for lane, port in wanted.items()},
    )


def take_lock(data: Path, *, patience_s: float = LOCK_PATIENCE_S) -> IO[str]:
    """Lock a data folder; the lock goes with the process and its children, however they end.

    A file that a dead service has left holds nobody up: what counts is the kernel's lock on it, not its content.

    Args:
        data: the data folder; its ``run`` folder exists.
        patience_s: how long to wait for the processes of a service that is just ending.

    Raises:
        StoreError: another service holds it.
    """
    stream = (data / "run" / "lock").open("a+", encoding="utf-8")
    end_s = time.monotonic() + patience_s
    while True:
        try:
            fcntl.flock(stream, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError as error:
            if time.monotonic() < end_s:
                time.sleep(LOCK_RETRY_S)
                continue
            stream.seek(0)
            holder = stream.read(20).strip() or "unknown"
            stream.close()
            raise StoreError(
                f"the data folder {data} is in use by another service (process {holder}); stop that one or give "
                "another --data",
                code="store.in_use",
            ) from error
        stream.truncate(0)
        stream.write(f"{os.getpid()}\n")
        stream.flush()
        return stream


def run_service(settings: ServiceSettings, *, on_ready: Callable[[ServiceSettings], None]) -> None:
    """Run the service until SIGTERM or SIGINT.

    Args:
        settings: from :func:`make_settings`.
        on_ready: called once all lanes are bound.

    Raises:
        StoreError: the folder is in use, or a process could not start.
    """
    with take_lock(settings.data) as lock:
        settings_file = settings.run / "settings.json"
        settings_file.write_text(json.dumps(settings.model_dump(mode="json"), indent=1), encoding="utf-8")
        stop = StopSignal()
        supervisor = Supervisor(settings_file, log=log_line, inherited=[lock.fileno()])
        supervisor.start()
        on_ready(settings)
        supervisor.run(stop)
        log_line("stopped")
