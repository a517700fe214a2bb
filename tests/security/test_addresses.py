"""Where a service listens: without keys on loopback or ipc only, whatever the address is called."""

from __future__ import annotations

from pathlib import Path

import pytest
import zmq

from nearhand.service.bus.admission import Admission
from nearhand.service.bus.keys import KeyFolder
from nearhand.service.bus.sockets import bind, check_address, make_socket
from nearhand.service.errors import ConfigError
from nearhand.service.main import make_settings

Context = zmq.Context[zmq.Socket[bytes]]
OUTSIDE = [
    "tcp://0.0.0.0:5000", "tcp://*:5000", "tcp://192.0.2.7:5000", "tcp://example.org:5000", "tcp://[::]:5000",
    "tcp://127.0.0.1.example.org:5000", "tcp://128.0.0.1:5000", "tcp://:5000", "udp://127.0.0.1:5000", "tcp://eth0:5000",
    "pgm://127.0.0.1:5000", "127.0.0.1:5000", "",
]  # fmt: skip
INSIDE = ["tcp://127.0.0.1:5000", "tcp://127.8.9.1:5000", "tcp://localhost:5000", "tcp://[::1]:5000", "ipc:///tmp/x"]


@pytest.mark.parametrize("address", OUTSIDE)
def test_an_address_outside_is_refused_with_the_reason_and_what_to_do(context: Context, address: str) -> None:
    with make_socket(context, zmq.ROUTER, queue=1, role="bind") as socket:
        with pytest.raises(ConfigError, match=r"without keys.*loopback.*nearhand keys new") as caught:
            bind(socket, address)
        socket.close(linger=0)
    assert caught.value.code == "config.address"


@pytest.mark.parametrize("address", INSIDE)
def test_loopback_and_ipc_are_permitted(address: str) -> None:
    check_address(address)


@pytest.mark.parametrize("address", ["tcp://0.0.0.0:5000", "tcp://*:5000", "tcp://192.0.2.7:5000"])
def test_with_keys_any_tcp_address_is_permitted(address: str) -> None:
    check_address(address, keyed=True)
    with pytest.raises(ConfigError):
        check_address("udp://192.0.2.7:5000", keyed=True)


def test_what_counts_is_that_the_socket_itself_asks_for_keys(
    context: Context, folder: KeyFolder, tmp_path: Path
) -> None:
    folder.new("ann", ["view"], tmp_path / "ann.key")
    admission = Admission(context, folder)
    plain, guarded = (make_socket(context, zmq.ROUTER, queue=1, role="bind") for _ in range(2))
    admission.guard(guarded, "desk")
    with pytest.raises(ConfigError):
        bind(plain, "tcp://0.0.0.0:*")
    assert bind(guarded, "tcp://0.0.0.0:*").startswith("tcp://0.0.0.0:")
    for socket in (plain, guarded):
        socket.close(linger=0)
    admission.close()


def test_settings_for_another_host_need_keys(folder: KeyFolder, tmp_path: Path) -> None:
    with pytest.raises(ConfigError, match="without keys"):
        make_settings(tmp_path / "data", host="0.0.0.0", pick_ports=True)
    folder.new("ann", ["view"], tmp_path / "ann.key")
    settings = make_settings(tmp_path / "data", host="0.0.0.0", pick_ports=True)
    assert settings.keys == folder.path
    folder.table_file.chmod(0o644)
    with pytest.raises(ConfigError, match="chmod 600"):
        make_settings(tmp_path / "data", pick_ports=True)
