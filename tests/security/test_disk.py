"""Disks that fail under a running service: acting goes on, intake refuses and resumes, nothing acknowledged is lost."""

from __future__ import annotations

import resource
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from nearhand.client.demos import Delivery, DemonstrationStream
from nearhand.client.desk import Desk
from nearhand.client.link import RigLink
from nearhand.client.tryout.service_process import ServiceProcess
from nearhand.configs import builtin_text
from nearhand.service.bus import desk_messages as messages
from nearhand.service.errors import StoreError
from nearhand.service.rigs import rig_from_toml
from nearhand.service.upkeep import check

KEEPER = "nearhand.service.keeper.process"
CRANE = builtin_text("rigs", "crane")
RIG = rig_from_toml(CRANE)
SAMPLES = 700


@pytest.fixture
def service(tmp_path: Path) -> Iterator[ServiceProcess]:
    """A running service without keys, which knows the crane."""
    with ServiceProcess(tmp_path / "data") as running:
        with Desk(running.lanes["desk"]) as desk:
            desk.ask(messages.PutRig, messages.RigReply, toml=CRANE, who="test")
        yield running


def wait_for(happened: Callable[[], Any], what: str, timeout_s: float = 15.0) -> Any:
    """Return the first true value of a look that is repeated."""
    end_s = time.monotonic() + timeout_s
    while time.monotonic() < end_s:
        if value := happened():
            return value
        time.sleep(0.02)
    raise AssertionError(f"{what}: not within {timeout_s} s")


def record(stream: DemonstrationStream, seed: int) -> str:
    """Record an episode and return its name."""
    generator = np.random.default_rng(seed)
    recording = stream.open("ann")
    for row in range(SAMPLES):
        observation = generator.uniform(0, 1, len(RIG.observations)).astype(np.float32)
        recording.add(0.05 * row, observation, np.zeros(len(RIG.actions), dtype=np.float32))
    recording.close("success", observation)
    return recording.episode


def stored(desk: Desk) -> dict[str, int]:
    """Return the samples of each closed episode in the store."""
    rows = desk.ask(messages.ListEpisodes, messages.EpisodesReply, rig="crane").episodes
    return {str(row["episode"]): int(row["samples"]) for row in rows if row["state"] == "closed"}


def test_a_disk_that_takes_no_more_stops_intake_clearly_and_acting_not_at_all(
    service: ServiceProcess, tmp_path: Path
) -> None:
    """No file of the keeper may grow (setrlimit(2), RLIMIT_FSIZE): each write beyond fails as on a failing disk."""
    observation = np.zeros(len(RIG.observations), dtype=np.float32)
    with (
        Desk(service.lanes["desk"]) as desk,
        RigLink(RIG, service.lanes["action"], wait_s=2.0) as link,
        DemonstrationStream(RIG, service.lanes["intake"], tmp_path / "spool") as stream,
    ):
        first = record(stream, 1)
        wait_for(lambda: stream.deliveries()[first].state == "closed", "the first episode")
        keeper = service.process_number(KEEPER)
        sizes = [path.stat().st_size for path in (tmp_path / "data").glob("nearhand.sqlite3*")]
        resource.prlimit(keeper, resource.RLIMIT_FSIZE, (max(sizes), resource.RLIM_INFINITY))
        second = record(stream, 2)

        def refused() -> Delivery | None:
            delivery = stream.deliveries()[second]
            return delivery if delivery.reason else None

        delivery = wait_for(refused, "the refusal")
        assert "disk" in delivery.reason
        assert delivery.state == "waiting"
        acknowledged = delivery.acknowledged
        with pytest.raises(StoreError, match="disk"):
            desk.ask(messages.PutRig, messages.RigReply, toml=CRANE.replace('"crane"', '"other"', 1), who="test")
        assert all(link.exchange(observation).fresh for _ in range(20)), "acting needs no disk"
        assert set(stored(desk)) == {first}, "reading needs no room"
        assert service.process_number(KEEPER) == keeper, "the keeper lives through it"
        resource.prlimit(keeper, resource.RLIMIT_FSIZE, (resource.RLIM_INFINITY, resource.RLIM_INFINITY))
        wait_for(lambda: stream.deliveries()[second].state == "closed", "the second episode, after all")
        assert stream.deliveries()[second].acknowledged == SAMPLES >= acknowledged
        assert stored(desk) == {first: SAMPLES, second: SAMPLES}
        assert desk.ask(messages.VerifyEvents, messages.VerifyReply).intact
    service.stop()
    assert [found for found in check(tmp_path / "data") if found.fault and found.part != "disk"] == []


def test_a_log_that_cannot_be_written_stops_nobody(service: ServiceProcess) -> None:
    """Not even the log file may grow: the keeper and the action server go on without a word."""
    numbers = [service.process_number(name) for name in (KEEPER, "nearhand.service.action.process")]
    for number in numbers:
        resource.prlimit(number, resource.RLIMIT_FSIZE, (0, resource.RLIM_INFINITY))
    with Desk(service.lanes["desk"]) as desk:
        for _ in range(5):
            with pytest.raises(StoreError):
                desk.ask(messages.PutRig, messages.RigReply, toml=CRANE.replace('"crane"', '"other"', 1), who="test")
        assert [rig["rig"] for rig in desk.ask(messages.ListRigs, messages.RigsReply).rigs] == ["crane"]
    assert [service.process_number(name) for name in (KEEPER, "nearhand.service.action.process")] == numbers


def test_damaged_pages_are_named_when_read_and_the_rest_goes_on(service: ServiceProcess, tmp_path: Path) -> None:
    data = tmp_path / "data"
    with (
        Desk(service.lanes["desk"]) as desk,
        DemonstrationStream(RIG, service.lanes["intake"], tmp_path / "spool") as stream,
    ):
        damaged = record(stream, 3)
        wait_for(lambda: stream.deliveries()[damaged].state == "closed", "the first episode")
        part = desk.ask(messages.GetEpisode, messages.EpisodeReply, episode=damaged).obs[4000:4016]
    service.stop()
    content = bytearray((data / "nearhand.sqlite3").read_bytes())
    at = content.find(part)
    assert at > 0
    content[at : at + 16] = bytes(16)
    (data / "nearhand.sqlite3").write_bytes(content)
    observation = np.zeros(len(RIG.observations), dtype=np.float32)
    with (
        ServiceProcess(data) as again,
        Desk(again.lanes["desk"]) as desk,
        RigLink(RIG, again.lanes["action"], wait_s=2.0) as link,
        DemonstrationStream(RIG, again.lanes["intake"], tmp_path / "spool") as stream,
    ):
        with pytest.raises(StoreError, match=f"{damaged}.*restore a backup") as caught:
            desk.ask(messages.GetEpisode, messages.EpisodeReply, episode=damaged)
        assert caught.value.code == "store.damaged"
        wait_for(lambda: link.exchange(observation).fresh, "acting")
        later = record(stream, 4)
        wait_for(lambda: stream.deliveries()[later].state == "closed", "a later episode")
        assert desk.ask(messages.GetEpisode, messages.EpisodeReply, episode=later).samples == SAMPLES
        faults = {found.part: found.fault for found in check(data) if found.fault and found.part != "disk"}
        assert list(faults) == ["samples"]
        assert damaged in faults["samples"]
