"""Sockets with every option set on purpose: the library's defaults do not suit a control loop.

A socket belongs to the thread that made it. One context per process.
"""

from __future__ import annotations

import ipaddress
from urllib.parse import urlsplit

import zmq

from nearhand.service.bus.keys import ClientKey
from nearhand.service.bus.limits import MAX_FRAME_BYTES
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
    """Bind and return the address in force (a port of ``*`` becomes a number).

    Raises:
        ConfigError: the address is taken, or neither loopback nor ipc while the socket asks for no keys.
    """
    check_address(address, keyed=bool(socket.getsockopt(zmq.CURVE_SERVER)))
    try:
        socket.bind(address)
    except zmq.ZMQError as error:
        raise ConfigError(
            f"cannot listen on {address}: {error}; is another service running there? Choose another port.",
            code="config.address",
        ) from error
    return socket.getsockopt_string(zmq.LAST_ENDPOINT).rstrip("\x00")


def connect(socket: zmq.Socket[bytes], address: str, key: ClientKey | None = None) -> None:
    """Connect, with a key if the service asks for one; the other end need not be there yet.

    Raises:
        LinkError: the address is malformed.
    """
    if key is not None:
        socket.setsockopt(zmq.CURVE_SECRETKEY, key.secret.encode())
        socket.setsockopt(zmq.CURVE_PUBLICKEY, key.public.encode())
        socket.setsockopt(zmq.CURVE_SERVERKEY, key.service.encode())
    try:
        socket.connect(address)
    except zmq.ZMQError as error:
        raise LinkError(
            f"cannot connect to {address!r}: {error}; expected tcp://HOST:PORT", code="link.address"
        ) from error


def check_address(address: str, *, keyed: bool = False) -> None:
    """Refuse to listen anywhere but on loopback or ipc, unless keys are asked for.

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
    if parts.scheme == "tcp" and (loopback or (keyed and host)):
        return
    if keyed:
        raise ConfigError(f"{address} is refused; expected tcp://HOST:PORT or ipc://PATH", code="config.address")
    raise ConfigError(
        f"{address} is refused: without keys the service listens on loopback only (tcp://127.0.0.1:PORT or ipc://); "
        "make keys with `nearhand keys new NAME --roles …` and start it again",
        code="config.address",
    )
