"""A service with keys, and clients with different roles."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from nearhand.client.tryout.service_process import ServiceProcess
from nearhand.service.bus.keys import KEY_VARIABLE, ClientKey, KeyFolder


@pytest.fixture(autouse=True)
def no_key_from_outside(monkeypatch: pytest.MonkeyPatch) -> None:
    """Nothing that the tester has set may open a door here."""
    monkeypatch.delenv(KEY_VARIABLE, raising=False)


@pytest.fixture
def folder(tmp_path: Path) -> KeyFolder:
    """The keys of the service in ``tmp_path / "data"``, none yet."""
    return KeyFolder(tmp_path / "data" / "keys")


@pytest.fixture
def give(folder: KeyFolder, tmp_path: Path) -> Callable[..., ClientKey]:
    """A function that gives out a key: name, roles."""

    def new(name: str, *roles: str) -> ClientKey:
        return folder.new(name, roles, tmp_path / f"{name}.key")

    return new


@pytest.fixture
def chief(give: Callable[..., ClientKey]) -> ClientKey:
    """A key that may do everything."""
    return give("chief", "view", "drive", "teach", "release")


@pytest.fixture
def service(tmp_path: Path, chief: ClientKey) -> Iterator[ServiceProcess]:
    """A running service that asks for keys."""
    with ServiceProcess(tmp_path / "data") as running:
        yield running
