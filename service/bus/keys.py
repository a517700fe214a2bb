"""Keys on disk: the service's own pair, the table of who may do what, and the file that a client holds.

All are TOML, readable by their owner only. Keys are CURVE keys in Z85 (ZeroMQ RFC 26 and 32).
"""

from __future__ import annotations

import contextlib
import fcntl
import os
import stat
import tomllib
from collections.abc import Collection, Iterator
from pathlib import Path
from typing import Annotated, Any, Literal, TypeVar, get_args

import zmq
from pydantic import Field, StringConstraints, ValidationError, model_validator

from nearhand.service.bus.message import Identifier
from nearhand.service.clock import utc_now
from nearhand.service.errors import ConfigError, ConflictError, UnknownNameError
from nearhand.service.rigs import Frozen, sentence

Role = Literal["view", "drive", "teach", "release"]
ROLES: tuple[Role, ...] = get_args(Role)
#: What a client's program looks for when it is given no key.
KEY_VARIABLE = "NEARHAND_KEY"
MAX_FILE_BYTES = 1024 * 1024
#: The secrets that stand as examples in the zmq_curve manual page (from memory): everybody has them.
PUBLISHED = frozenset({"D:)Q[IlAW!ahhC2ac:9*A}h:p?([4%wOTJ%JR%cs", "JTKVSB%%)wK0E.X)V>+}o?pNmC{O&4W4b!Ni{Lh6"})

Z85 = Annotated[str, StringConstraints(pattern=r"^[0-9a-zA-Z.\-:+=^!/*?&<>()\[\]{}@%$#]{40}$")]
Checked = TypeVar("Checked", bound=Frozen)


class KeyPair(Frozen):
    """A public key and its secret; the secret is not shown when the pair is printed."""

    public: Z85
    secret: Z85 = Field(repr=False)

    @model_validator(mode="after")
    def _belong_together(self) -> KeyPair:
        try:
            derived = zmq.curve_public(self.secret.encode()).decode()
        except (zmq.ZMQError, ValueError) as error:
            raise ValueError(f"the secret is no CURVE key: {error}") from error
        if derived != self.public:
            raise ValueError("the public key does not belong to the secret")
        if self.secret in PUBLISHED:
            raise ValueError("this secret is a published example; make a fresh one with `nearhand keys new`")
        return self


class ClientKey(KeyPair):
    """What a client holds: its name, its pair, and the public key by which it knows the service."""

    name: Identifier
    service: Z85


class Entry(Frozen):
    """One line of the table of keys; ``revoked_utc`` is set once the key is out."""

    name: Identifier
    public: Z85
    roles: tuple[Role, ...] = Field(min_length=1)
    created_utc: str
    revoked_utc: str | None = None


class Table(Frozen):
    """All keys that were ever given out."""

    key: tuple[Entry, ...] = ()

    @model_validator(mode="after")
    def _once_each(self) -> Table:
        publics = [entry.public for entry in self.key]
        names = [entry.name for entry in self.key if entry.revoked_utc is None]
        if len(set(publics)) < len(publics) or len(set(names)) < len(names):
            raise ValueError("a key, or the name of one in force, stands there twice")
        return self


class KeyFolder:
    """The keys of one service, in its data folder.

    Args:
        path: the folder; made with the first key.
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        self.service_file = path / "service.toml"
        self.table_file = path / "roles.toml"

    @property
    def is_there(self) -> bool:
        """Whether the service has keys, so that it lets in nobody without one."""
        return self.service_file.exists() or self.table_file.exists()

    def service_key(self) -> KeyPair:
        """Return the service's own pair.

        Raises:
            ConfigError: the file is missing, damaged or readable by others.
        """
        return _read(self.service_file, KeyPair)

    def table(self) -> Table:
        """Return who may do what.

        Raises:
            ConfigError: the file is missing, damaged or readable by others.
        """
        return _read(self.table_file, Table)

    def new(self, name: str, roles: Collection[str], file: Path) -> ClientKey:
        """Make a key for a client, write its file and let it in.

        Raises:
            ConfigError: a name or role that cannot be, or a file that cannot be written or exists.
            ConflictError: a key of that name is in force.
        """
        chosen = tuple(role for role in ROLES if role in roles)
        if not chosen or set(roles) - set(ROLES):
            raise ConfigError(
                f"roles {', '.join(sorted(roles)) or '(none)'}; expected some of: {', '.join(ROLES)}",
                code="config.roles",
            )
        if os.path.lexists(file):
            raise ConfigError(f"{file} exists; name another file, nothing was changed", code="config.key_file")
        with self._locked():
            if not self.is_there:
                pair = _fresh_pair()
                _write(self.service_file, f'public = "{pair.public}"\nsecret = "{pair.secret}"\n')
                _write(self.table_file, "")
            table, service = self.table(), self.service_key()
            if any(entry.name == name and entry.revoked_utc is None for entry in table.key):
                raise ConflictError(
                    f"a key called {name!r} is in force; revoke it first, or choose another name", code="conflict.key"
                )
            pair = _fresh_pair()
            entry = _checked(
                Entry, {"name": name, "public": pair.public, "roles": chosen, "created_utc": utc_now()}, "the new key"
            )
            key = ClientKey(name=name, public=pair.public, secret=pair.secret, service=service.public)
            text = "".join(f'{field} = "{getattr(key, field)}"\n' for field in ("name", "public", "secret", "service"))
            _write(file, f"# Whoever can read this file may: {', '.join(chosen)}\n{text}", fresh=True)
            self._put(Table(key=(*table.key, entry)))
        return key

    def revoke(self, name: str) -> Entry:
        """Put a key out of force; running services notice within a second.

        Raises:
            UnknownNameError: no key of that name is in force.
        """
        with self._locked():
            table = self.table()
            found = next((entry for entry in table.key if entry.name == name and entry.revoked_utc is None), None)
            if found is None:
                raise UnknownNameError(f"no key called {name!r} is in force; `nearhand keys list` shows them")
            out = found.model_copy(update={"revoked_utc": utc_now()})
            self._put(Table(key=tuple(out if entry is found else entry for entry in table.key)))
        return out

    def _put(self, table: Table) -> None:
        lines = ["# Written by `nearhand keys`; a running service follows changes within a second."]
        for entry in table.key:
            roles = ", ".join(f'"{role}"' for role in entry.roles)
            lines += ["", "[[key]]", f'name = "{entry.name}"', f'public = "{entry.public}"', f"roles = [{roles}]"]
            lines.append(f'created_utc = "{entry.created_utc}"')
            if entry.revoked_utc is not None:
                lines.append(f'revoked_utc = "{entry.revoked_utc}"')
        _write(self.table_file, "\n".join(lines) + "\n")

    @contextlib.contextmanager
    def _locked(self) -> Iterator[None]:
        """Keep two `nearhand keys` from overwriting each other."""
        try:
            self.path.mkdir(mode=0o700, parents=True, exist_ok=True)
            with (self.path / "lock").open("a") as stream:
                fcntl.flock(stream, fcntl.LOCK_EX)
                yield
        except OSError as error:
            raise ConfigError(f"cannot use the folder of keys {self.path}: {error}", code="config.key_file") from error


def read_client_key(path: Path) -> ClientKey:
    """Read a client's key.

    Raises:
        ConfigError: the file is missing, damaged or readable by others.
    """
    return _read(path, ClientKey)


def key_from_environment() -> ClientKey | None:
    """Return the key in the file that ``NEARHAND_KEY`` names, or None if it names none.

    Raises:
        ConfigError: as :func:`read_client_key`.
    """
    named = os.environ.get(KEY_VARIABLE, "")
    return read_client_key(Path(named)) if named else None


def _fresh_pair() -> KeyPair:
    public, secret = zmq.curve_keypair()
    return KeyPair(public=public.decode(), secret=secret.decode())


def _read(path: Path, model: type[Checked]) -> Checked:
    try:
        with path.open("rb") as stream:
            mode = stat.S_IMODE(os.fstat(stream.fileno()).st_mode)
            if mode & 0o077:
                raise ConfigError(
                    f"the key file {path} can be read by others (mode {mode:03o}); run: chmod 600 {path}",
                    code="config.key_mode",
                )
            data = stream.read(MAX_FILE_BYTES + 1)
    except OSError as error:
        raise ConfigError(f"cannot read the key file {path}: {error}", code="config.key_unreadable") from error
    if len(data) > MAX_FILE_BYTES:
        raise ConfigError(f"{path} is over {MAX_FILE_BYTES} bytes: no key file", code="config.key_file")
    try:
        table = tomllib.loads(data.decode())
    except (ValueError, RecursionError) as error:
        raise ConfigError(f"{path} is no key file: {error}", code="config.key_file") from error
    return _checked(model, table, str(path))


def _checked(model: type[Checked], table: dict[str, Any], what: str) -> Checked:
    try:
        return model.model_validate(table)
    except ValidationError as error:
        raise ConfigError(f"{what}: {sentence(error)}", code="config.key_file") from error


def _write(path: Path, text: str, *, fresh: bool = False) -> None:
    """Write a file that only its owner can read, whole or not at all; with ``fresh`` never over another."""
    beside = path.with_name(f".{path.name}.{os.getpid()}")
    try:
        descriptor = os.open(beside, os.O_WRONLY | os.O_CREAT | os.O_TRUNC | os.O_NOFOLLOW, 0o600)
        try:
            with os.fdopen(descriptor, "w", encoding="utf-8") as stream:
                os.fchmod(stream.fileno(), 0o600)
                stream.write(text)
                stream.flush()
                os.fsync(stream.fileno())
            if fresh:
                os.link(beside, path)
            else:
                beside.replace(path)
        finally:
            beside.unlink(missing_ok=True)
    except OSError as error:
        raise ConfigError(f"cannot write {path}: {error}", code="config.key_file") from error
