"""Sockets with every option set on purpose: the library's defaults do not suit a control loop.

A socket belongs to the thread that made it. One context per process.
"""

from __future__ import annotations

import ipaddress
from urllib.parse import urlsplit

import zmq

from nearhand.service.bus.codec import MAX_FRAME_BYTES
from nearhand.service.errors import ConfigError, LinkError

HEARTBEAT_MS = 2_000
ACTION_QUEUE = 8
BULK_QUEUE = 1_000


def make_socket(context: zmq.Context[zmq.Socket[bytes]], kind: int, *, queue: int, role: str) -> zmq.Socket[bytes]:
    """Return a socket with bounded queues, no lingering, a frame limit and heartbeats.

    Args:
        context: the process' context.
        kind: ``zmq.ROUTER``, ``zmq.DEALER``, ``zmq.PUB`` …
        queue: most messages held per peer and direction.
        role: ``bind`` or ``connect``; a router refuses to drop silently only when it binds for requests.
    """
    socket = context.socket(kind)
    socket.setsockopt(zmq.LINGER, 0)
    socket.setsockopt(zmq.SNDHWM, queue)
    socket.setsockopt(zmq.RCVHWM, queue)
    socket.setsockopt(zmq.MAXMSGSIZE, MAX_FRAME_BYTES)
    socket.setsockopt(zmq.HEARTBEAT_IVL, HEARTBEAT_MS)
    socket.setsockopt(zmq.HEARTBEAT_TIMEOUT, 3 * HEARTBEAT_MS)
    socket.setsockopt(zmq.HANDSHAKE_IVL, 5_000)
    socket.setsockopt(zmq.RECONNECT_IVL, 20)
    socket.setsockopt(zmq.RECONNECT_IVL_MAX, 500)
    if role == "bind" and kind == zmq.ROUTER:
        socket.setsockopt(zmq.ROUTER_HANDOVER, 1)
    return socket


def bind(socket: zmq.Socket[bytes], address: str) -> str:
    """Bind to a loopback or ipc address and return the address in force (a port of ``*`` becomes a number).

    Raises:
        ConfigError: the address is neither loopback nor ipc, or is taken.
    """
    check_address(address)
    try:
        socket.bind(address)
    except zmq.ZMQError as error:
        raise ConfigError(
            f"cannot listen on {address}: {error}; is another service running there? Choose another port.",
            code="config.address",
        ) from error
    return socket.getsockopt_string(zmq.LAST_ENDPOINT).rstrip("\x00")


def connect(socket: zmq.Socket[bytes], address: str) -> None:
    """Connect; the other end need not be there yet.

    Raises:
        LinkError: the address is malformed.
    """
    try:
        socket.connect(address)
    except zmq.ZMQError as error:
        raise LinkError(
            f"cannot connect to {address!r}: {error}; expected tcp://HOST:PORT", code="link.address"
        ) from error


def check_address(address: str) -> None:
    """Refuse to listen anywhere but on loopback or ipc.

    Raises:
        ConfigError: the reason and what to do.
    """
    if address.startswith(("ipc://", "inproc://")):
        return
    parts = urlsplit(address)
    host = parts.hostname or ""
    try:
        loopback = host == "localhost" or ipaddress.ip_address(host).is_loopback
    except ValueError:
        loopback = False
    if parts.scheme != "tcp" or not loopback:
        raise ConfigError(
            f"{address} is refused: without keys the service listens on loopback only (tcp://127.0.0.1:PORT or ipc://)",
            code="config.address",
        )
