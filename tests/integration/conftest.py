"""A real service: its own processes, its own data folder, ports picked at run time."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import pytest

from nearhand.client.desk import Desk
from nearhand.client.tryout.service_process import ServiceProcess


@pytest.fixture
def service(tmp_path: Path) -> Iterator[ServiceProcess]:
    """A running service."""
    with ServiceProcess(tmp_path / "data") as running:
        yield running


@pytest.fixture
def desk(service: ServiceProcess) -> Iterator[Desk]:
    """Its desk."""
    with Desk(service.lanes["desk"]) as opened:
        yield opened
