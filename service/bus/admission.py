"""Who is let in, and what for: CURVE at the door of each lane, the table of roles at each request.

The door is the library's authentication protocol (ZAP, ZeroMQ RFC 27), answered by one thread per process; the same
thread reads the table of roles again whenever its file changes. Asking for a role is a look into a dictionary.
"""

from __future__ import annotations

import contextlib
import threading
from collections import Counter
from collections.abc import Mapping

import zmq
from zmq.utils import z85

from nearhand.service.bus.keys import KeyFolder
from nearhand.service.errors import ConfigError, RefusedError

ZAP_ADDRESS = "inproc://zeromq.zap.01"
LOOK_AGAIN_MS = 200
#: Where nobody can be told that a role is missing, the role is asked for at the door.
ROLE_AT_THE_DOOR = {"feed": "view"}

Socket = zmq.Socket[bytes]
Granted = Mapping[str, tuple[str, frozenset[str]]]


class Admission:
    """The door of one process; close it after the sockets that it guards.

    A table that cannot be read for the moment leaves the last one in force; a table that is damaged, missing or
    readable by others lets in nobody until it is put right.

    Args:
        context: the process' context; it has no other authentication.
        folder: the service's keys.

    Attributes:
        granted: by public key in Z85, its name and its roles, as the file says now.
        counters: what the door has seen.
        trouble: why nobody is let in, or empty.

    Raises:
        ConfigError: the service's keys cannot be used.
    """

    def __init__(self, context: zmq.Context[Socket], folder: KeyFolder) -> None:
        self._folder = folder
        self._pair = folder.service_key()
        self._stamp: tuple[int, ...] = ()
        self.granted: Granted = {}
        self.counters: Counter[str] = Counter()
        self.trouble = ""
        self._stamp = self._stamp_now()
        self._take(strict=True)
        self._zap = context.socket(zmq.REP)
        self._zap.setsockopt(zmq.LINGER, 0)
        self._zap.bind(ZAP_ADDRESS)
        self._ended = context.socket(zmq.PAIR)
        address = f"inproc://admission-{id(self)}"
        self._ended.bind(address)
        self._end = context.socket(zmq.PAIR)
        self._end.connect(address)
        self._thread = threading.Thread(target=self._keep_door, name="admission", daemon=True)
        self._thread.start()

    def close(self) -> None:
        """End the thread."""
        if self._thread.is_alive():
            self._end.send(b"")
            self._thread.join()
        self._end.close(linger=0)

    def guard(self, socket: Socket, lane: str) -> None:
        """Have a socket, before it binds, let in only clients that hold a key."""
        socket.setsockopt(zmq.CURVE_SERVER, 1)
        socket.setsockopt(zmq.CURVE_SECRETKEY, self._pair.secret.encode())
        socket.setsockopt(zmq.CURVE_PUBLICKEY, self._pair.public.encode())
        socket.setsockopt_string(zmq.ZAP_DOMAIN, lane)

    def holder(self, public: str) -> tuple[str, frozenset[str]]:
        """Return the name and the roles of a key.

        Raises:
            RefusedError: it is not, or no longer, in force.
        """
        found = self.granted.get(public)
        if found is None:
            self.counters["refused_keys"] += 1
            raise RefusedError("this key is not, or no longer, in force; ask for another one", code="refused.key")
        return found

    def permit(self, public: str, role: str, what: str) -> str:
        """Return the name of a key that has a role; an empty role means that any key will do.

        Raises:
            RefusedError: the key is not in force, or lacks the role.
        """
        name, roles = self.holder(public)
        if role and role not in roles:
            self.counters["refused_roles"] += 1
            raise RefusedError(
                f"{what} needs the role {role!r}; the key {name!r} has: {', '.join(sorted(roles))}",
                code="refused.role",
            )
        return name

    # What follows runs in the door's own thread.

    def _keep_door(self) -> None:
        poller = zmq.Poller()
        poller.register(self._zap, zmq.POLLIN)
        poller.register(self._ended, zmq.POLLIN)
        try:
            while True:
                ready = dict(poller.poll(LOOK_AGAIN_MS))
                if (stamp := self._stamp_now()) != self._stamp:
                    self._stamp = stamp
                    self._take(strict=False)
                if self._ended in ready:
                    return
                if self._zap in ready:
                    self._answer(self._zap.recv_multipart())
        except zmq.ContextTerminated:
            pass
        finally:
            self._zap.close(linger=0)
            self._ended.close(linger=0)

    def _stamp_now(self) -> tuple[int, ...]:
        try:
            state = self._folder.table_file.stat()
        except OSError as error:
            return (error.errno or -1,)
        return state.st_mtime_ns, state.st_ino, state.st_size, state.st_mode

    def _take(self, *, strict: bool) -> None:
        try:
            table = self._folder.table()
        except ConfigError as error:
            if strict:
                raise
            self.counters["table_troubles"] += 1
            self.trouble = error.message
            if error.code != "config.key_unreadable" or not self._folder.table_file.exists():
                self.granted = {}
            return
        self.trouble = ""
        self.granted = {
            entry.public: (entry.name, frozenset(entry.roles)) for entry in table.key if entry.revoked_utc is None
        }

    def _answer(self, parts: list[bytes]) -> None:
        """Answer one request of the protocol: version, number, domain, address, identity, mechanism, key."""
        number = parts[1] if len(parts) > 1 else b""
        public = ""
        if len(parts) == 7 and parts[0] == b"1.0" and parts[5] == b"CURVE" and len(parts[6]) == 32:
            public = z85.encode(parts[6]).decode()
        name, roles = self.granted.get(public, ("", frozenset()))
        wanted = ROLE_AT_THE_DOOR.get(parts[2].decode(errors="replace") if len(parts) > 2 else "", "")
        welcome = bool(name) and (not wanted or wanted in roles)
        if not welcome:
            self.counters["turned_away"] += 1
        # 300 means that trying again may help; a client that is told 400 stays away.
        away = b"300" if self.trouble else b"400"
        status = (b"200", b"OK", public.encode()) if welcome else (away, b"not in force here", b"")
        with contextlib.suppress(zmq.ZMQError):
            self._zap.send_multipart([b"1.0", number, *status, b""])


def bearer(frame: zmq.Frame) -> str:
    """Return the public key, in Z85, of whoever sent a frame; empty where no key was asked for."""
    try:
        return str(frame.get("User-Id"))
    except zmq.ZMQError:
        return ""
