"""Key files: what is written, who may read it, and what is refused."""

from __future__ import annotations

import os
import stat
from collections.abc import Callable
from pathlib import Path

import pytest
import zmq
from pydantic import ValidationError
from zmq.utils import z85

from nearhand.service.bus.keys import PUBLISHED, ClientKey, KeyFolder, KeyPair, read_client_key
from nearhand.service.errors import ConfigError, ConflictError, UnknownNameError

Give = Callable[..., ClientKey]


def test_all_files_are_readable_by_their_owner_only(folder: KeyFolder, give: Give, tmp_path: Path) -> None:
    give("ann", "view")
    for path in (folder.service_file, folder.table_file, tmp_path / "ann.key"):
        assert stat.S_IMODE(path.stat().st_mode) == 0o600
    assert stat.S_IMODE(folder.path.stat().st_mode) == 0o700
    assert not [path for path in folder.path.iterdir() if path.name.startswith(".")]


def test_a_key_is_what_curve_says_it_is(give: Give, folder: KeyFolder) -> None:
    """CURVE keys: 32 bytes, 40 characters of Z85 (ZeroMQ RFC 32), public derived from secret (libzmq)."""
    key = give("ann", "view")
    assert len(z85.decode(key.public)) == len(z85.decode(key.secret)) == 32
    assert zmq.curve_public(key.secret.encode()).decode() == key.public
    assert key.service == folder.service_key().public
    assert key.secret not in repr(key)
    assert key.secret not in folder.table_file.read_text()


def test_a_key_file_reads_back(give: Give, tmp_path: Path) -> None:
    key = give("bob", "drive")
    assert read_client_key(tmp_path / "bob.key") == key


@pytest.mark.parametrize("mode", [0o644, 0o640, 0o604, 0o660])
def test_a_file_that_others_can_read_is_not_used(give: Give, tmp_path: Path, mode: int) -> None:
    give("ann", "view")
    (tmp_path / "ann.key").chmod(mode)
    with pytest.raises(ConfigError, match="chmod 600") as caught:
        read_client_key(tmp_path / "ann.key")
    assert caught.value.code == "config.key_mode"


@pytest.mark.parametrize(
    "text",
    [
        "",
        "name = ",
        'name = "ann"',
        'name = "../ann"\npublic = "{p}"\nsecret = "{s}"\nservice = "{p}"',
        'name = "ann"\npublic = "{p}"\nsecret = "{p}"\nservice = "{p}"',
        'name = "ann"\npublic = "short"\nsecret = "{s}"\nservice = "{p}"',
        'name = "ann"\npublic = "{p}"\nsecret = "{s}"\nservice = "{p}"\nextra = 1',
        "[[[[",
        "a = " + "[" * 2000,
    ],
)
def test_a_damaged_key_file_is_refused_with_its_name(tmp_path: Path, text: str) -> None:
    public, secret = (part.decode() for part in zmq.curve_keypair())
    path = tmp_path / "bad.key"
    path.write_text(text.replace("{p}", public).replace("{s}", secret))
    path.chmod(0o600)
    with pytest.raises(ConfigError, match=r"bad\.key"):
        read_client_key(path)


def test_a_secret_that_everybody_has_is_refused() -> None:
    """The pairs of the zmq_curve manual page; public keys from libzmq 4.3.5's curve_public."""
    publics = {"Yne@$w-vo<fVvi]a<NY6T1ed:M$fCG*[IaLV{hID", "rq:rM>}U?@Lns47E1%kR.o@n%FcmmsL/@{H8]yf7"}
    for secret in PUBLISHED:
        public = zmq.curve_public(secret.encode()).decode()
        publics.remove(public)
        with pytest.raises(ValidationError, match="published"):
            KeyPair(public=public, secret=secret)
    assert not publics


@pytest.mark.parametrize("roles", [(), ("everything",), ("view", "root")])
def test_only_the_four_roles_exist(give: Give, roles: tuple[str, ...]) -> None:
    with pytest.raises(ConfigError, match="view, drive, teach, release"):
        give("ann", *roles)


@pytest.mark.parametrize("name", ["", "../x", "a/b", 'x"y', "a\nb", "-x", "x" * 65])
def test_names_are_identifiers(give: Give, folder: KeyFolder, name: str, tmp_path: Path) -> None:
    with pytest.raises(ConfigError):
        folder.new(name, ["view"], tmp_path / "k.key")
    assert not (tmp_path / "k.key").exists()


def test_a_name_is_in_force_once_and_can_be_given_again_when_revoked(folder: KeyFolder, tmp_path: Path) -> None:
    first = folder.new("ann", ["view"], tmp_path / "1.key")
    with pytest.raises(ConflictError):
        folder.new("ann", ["view"], tmp_path / "2.key")
    assert folder.revoke("ann").revoked_utc
    with pytest.raises(UnknownNameError):
        folder.revoke("ann")
    second = folder.new("ann", ["view"], tmp_path / "2.key")
    assert first.public != second.public
    assert [entry.revoked_utc is None for entry in folder.table().key] == [False, True]


def test_no_file_is_overwritten_and_then_nothing_changes(folder: KeyFolder, tmp_path: Path) -> None:
    (tmp_path / "ann.key").write_text("precious")
    with pytest.raises(ConfigError, match=r"ann\.key"):
        folder.new("ann", ["view"], tmp_path / "ann.key")
    assert (tmp_path / "ann.key").read_text() == "precious"
    assert not folder.is_there


def test_a_link_planted_in_the_way_is_not_followed(folder: KeyFolder, tmp_path: Path) -> None:
    victim = tmp_path / "victim"
    victim.write_text("precious")
    (tmp_path / f".ann.key.{os.getpid()}").symlink_to(victim)
    with pytest.raises(ConfigError):
        folder.new("ann", ["view"], tmp_path / "ann.key")
    assert victim.read_text() == "precious"
