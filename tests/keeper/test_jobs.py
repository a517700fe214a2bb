"""Jobs: what they are given, what is taken from them, and what happens when they or the keeper are killed."""

from __future__ import annotations

import contextlib
import os
import signal
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import pytest
import zmq

from nearhand.service.bus.codec import encode
from nearhand.service.bus.desk_messages import (
    CancelJob,
    GetHealth,
    GetJob,
    GetVersion,
    HealthReply,
    JobReply,
    JobsReply,
    ListJobs,
    ListVersions,
    StartJob,
    VersionReply,
    VersionsReply,
)
from nearhand.service.bus.feed_messages import Progress
from nearhand.service.config import ServiceSettings
from nearhand.service.jobs.folder import JobFolder
from nearhand.service.rigs import rig_from_toml
from nearhand.service.store.store import Store

if TYPE_CHECKING:
    from tests.keeper.conftest import Client, KeeperProcess, Samples

ENDED = ("done", "failed", "cancelled")


@pytest.fixture
def stocked(keeper: KeeperProcess, client: Client) -> Client:
    """A client of a keeper with seven episodes by one operator and one by another."""
    client.put_rig()
    for index in range(7):
        client.record(f"a{index}", operator="ann")
    client.record("b0", operator="ben")
    return client


def start(client: Client, kind: str, **options: Any) -> int:
    return client.ask(StartJob, JobReply, job_kind=kind, rig="yard-crane", who="ann", options=options).job


def ended(client: Client, job: int) -> JobReply:
    return client.until(lambda reply: reply.state in ENDED, GetJob, JobReply, job=job)


def hold(keeper: KeeperProcess, client: Client, job: int, *, listening: bool = False) -> int:
    """Stop a job's process as soon as it runs, or as soon as it listens to SIGTERM; returns its number."""
    client.until(lambda reply: reply.state == "running", GetJob, JobReply, job=job)
    (number,) = keeper.children()
    while listening and not handles_sigterm(number):
        pass
    os.kill(number, signal.SIGSTOP)
    return number


def handles_sigterm(number: int) -> bool:
    """Tell whether a process has its own handler for SIGTERM (proc(5), SigCgt)."""
    lines = Path(f"/proc/{number}/status").read_text().splitlines()
    (mask,) = (line.split()[1] for line in lines if line.startswith("SigCgt"))
    return bool(int(mask, 16) >> (signal.SIGTERM - 1) & 1)


def let_go(number: int) -> None:
    """Let a stopped process go on; one that had no handler yet may be dead already."""
    with contextlib.suppress(ProcessLookupError):
        os.kill(number, signal.SIGCONT)


def folder_of(settings: ServiceSettings, job: int) -> JobFolder:
    return JobFolder(settings.jobs / f"job-{job:06d}")


def leave_job(
    settings: ServiceSettings,
    samples: Samples,
    kind: str,
    result: dict[str, Any],
    *,
    policies: Sequence[tuple[str, bytes]] = (),
    options: dict[str, Any] | None = None,
    before: Sequence[bytes] = (),
) -> int:
    """Leave a store and a folder as a keeper does that was killed after its job had ended."""
    rig = rig_from_toml(samples.rig_toml)
    store = Store(settings.database)
    store.rigs.put(rig, samples.rig_toml, "w")
    for data in before:
        store.versions.add(
            rig=rig.name, rig_digest=rig.digest(), name="clone", method="clone", policy=data, provenance={}
        )
    job = store.jobs.begin(store.jobs.add(kind, rig.name, options or {}, who="ann", why="").job)
    store.close()
    folder = folder_of(settings, job.job)
    described = {"job": job.job, "kind": kind, "rig": rig.model_dump(mode="json"), "options": options or {}}
    folder.write_json("job.json", {**described, "progress": "", "given": {"episodes": {"train": 3}}})
    folder.write_bytes("episodes.safetensors", b"copies")
    for name, data in policies:
        folder.write_bytes(f"output-{name}.policy", data)
    folder.write_json("result.json", result)
    return job.job


DISTILLED = {
    "state": "done",
    "versions": [
        {"name": "clone", "method": "clone", "provenance": {"seed": 1}},
        {"name": "proximal", "method": "proximal-online", "provenance": {"seed": 1}},
    ],
    "result": {"chosen": {"name": "proximal"}, "huge": 2**70},
}


def test_what_a_job_left_while_the_keeper_was_away_is_taken_in(
    settings: ServiceSettings, stopped_keeper: KeeperProcess, client: Client, samples: Samples
) -> None:
    policies = [("clone", samples.policy(1)), ("proximal", samples.policy(2))]
    job = leave_job(settings, samples, "distil", DISTILLED, policies=policies, options={"recipe": {"seed": 1}})
    stopped_keeper.start()
    reply = ended(client, job)
    assert (reply.state, reply.versions, reply.fraction) == ("done", (1, 2), 1.0)
    assert reply.result == {"chosen": {"name": "proximal"}, "huge": str(2**70)}
    rows = client.ask(ListVersions, VersionsReply, rig="yard-crane").versions
    assert [(row["method"], row["state"], row["parent"], row["job"]) for row in rows] == [
        ("clone", "drafted", None, job),
        ("proximal-online", "drafted", 1, job),
    ]
    shown = client.ask(GetVersion, VersionReply, version=2, with_policy=True)
    assert shown.policy == samples.policy(2)
    assert shown.provenance["seed"] == 1
    assert shown.provenance["demonstrations"] == {"episodes": {"train": 3}}
    assert shown.provenance["rig_digest"] == rig_from_toml(samples.rig_toml).digest()
    assert [event["what"] for event in client.events()] == ["drafted", "drafted", "job-done"]
    assert not folder_of(settings, job).has("episodes.safetensors")
    stopped_keeper.kill()
    client.close()
    stopped_keeper.start()
    assert len(client.ask(ListVersions, VersionsReply, rig="yard-crane").versions) == 2


def test_a_damaged_policy_file_fails_the_job_as_a_whole(
    settings: ServiceSettings, stopped_keeper: KeeperProcess, client: Client, samples: Samples
) -> None:
    damaged = bytearray(samples.policy(2))
    damaged[-3] ^= 0xFF
    policies = [("clone", samples.policy(1)), ("proximal", bytes(damaged))]
    job = leave_job(settings, samples, "distil", DISTILLED, policies=policies)
    stopped_keeper.start()
    reply = ended(client, job)
    assert (reply.state, reply.versions) == ("failed", ())
    assert reply.result is not None
    assert reply.result["code"] == "policy.format"
    assert client.ask(ListVersions, VersionsReply, rig="yard-crane").versions == ()


@pytest.mark.parametrize(
    ("result", "policies", "code"),
    [
        (DISTILLED, (), "store.failed"),
        ({**DISTILLED, "versions": [{"method": "clone"}]}, (), "job.result"),
        ({**DISTILLED, "versions": "two"}, (), "job.result"),
        ({**DISTILLED, "versions": ["one"]}, (), "job.result"),
        ({**DISTILLED, "result": ["one"]}, (), "job.result"),
        ({"state": "failed", "code": "learn.diverged", "message": "the loss is not finite"}, (), "learn.diverged"),
        ({}, (), "job.failed"),
    ],
)
def test_a_result_that_cannot_be_used_fails_the_job(
    settings: ServiceSettings,
    stopped_keeper: KeeperProcess,
    client: Client,
    samples: Samples,
    result: dict[str, Any],
    policies: tuple[tuple[str, bytes], ...],
    code: str,
) -> None:
    job = leave_job(settings, samples, "distil", result, policies=policies)
    stopped_keeper.start()
    reply = ended(client, job)
    assert reply.state == "failed"
    assert reply.result == {"code": code, "message": reply.message}
    assert client.events("job-failed")[0]["detail"]["code"] == code


def test_a_policy_for_another_rig_is_not_taken(
    settings: ServiceSettings, stopped_keeper: KeeperProcess, client: Client, samples: Samples
) -> None:
    result = {**DISTILLED, "versions": DISTILLED["versions"][:1]}  # type: ignore[index]
    job = leave_job(settings, samples, "distil", result, policies=[("clone", samples.policy(1, rig="another-crane"))])
    stopped_keeper.start()
    assert (ended(client, job).result or {})["code"] == "policy.channels"


def test_a_measurement_makes_a_version_measured(
    settings: ServiceSettings, stopped_keeper: KeeperProcess, client: Client, samples: Samples
) -> None:
    measurement = {"version": 1, "figures": {"action error": {"value": 0.1, "low": 0.05, "high": 0.2}}}
    job = leave_job(
        settings, samples, "measure", {"state": "done", "result": measurement}, options={"version": 1},
        before=[samples.policy(1)],
    )  # fmt: skip
    stopped_keeper.start()
    assert ended(client, job).result == measurement
    shown = client.ask(GetVersion, VersionReply, version=1)
    assert (shown.state, shown.measurement) == ("measured", measurement)


def test_an_inspection_runs_to_its_end(stocked: Client, settings: ServiceSettings) -> None:
    job = start(stocked, "inspect")
    reply = ended(stocked, job)
    assert (reply.state, reply.versions) == ("done", ()), reply.message
    assert reply.result
    (event,) = stocked.events("job-queued")
    assert (event["who"], event["detail"]["kind"]) == ("ann", "inspect")
    assert len(stocked.events("job-done")) == 1
    assert [row["state"] for row in stocked.ask(ListJobs, JobsReply, rig="yard-crane").jobs] == ["done"]
    assert (folder_of(settings, job).path / "log.txt").is_file()


def test_a_distillation_never_sees_what_is_held_out(
    stocked: Client, keeper: KeeperProcess, settings: ServiceSettings, samples: Samples
) -> None:
    stocked.ack(samples.open("odd"))
    stocked.ack(samples.chunk("odd", 0, act=np.full(5, np.nan, dtype="<f4").tobytes()))
    stocked.ack(samples.close("odd", 1))
    job = start(stocked, "distil", operators=["ann"])
    number = hold(keeper, stocked, job)
    episodes = folder_of(settings, job).read_episodes()
    assert [(one.episode, one.split) for one in episodes] == [
        ("a0", "train"), ("a2", "train"), ("a3", "calibration"), ("a4", "train"), ("a5", "calibration"),
        ("a6", "train"),
    ]  # fmt: skip
    assert {one.operator for one in episodes} == {"ann"}
    assert episodes[0].actions.tobytes() == samples.chunk("a0", 0).act + samples.chunk("a0", 1).act
    content = folder_of(settings, job).read_json("job.json")
    assert (content["job"], content["kind"], content["rig"]["name"]) == (job, "distil", "yard-crane")
    assert content["given"]["episodes"] == {"train": 4, "calibration": 2}
    stocked.ask(CancelJob, JobReply, job=job, who="ann")
    let_go(number)


def test_a_measurement_is_given_the_policies_to_compare(
    settings: ServiceSettings, stopped_keeper: KeeperProcess, client: Client, samples: Samples
) -> None:
    policies = [("clone", samples.policy(1)), ("proximal", samples.policy(2))]
    leave_job(settings, samples, "distil", DISTILLED, policies=policies)
    stopped_keeper.start()
    for index in range(3):
        client.record(f"a{index}")
    job = start(client, "measure", version=2, closed_loop_episodes=4, seed=9)
    number = hold(stopped_keeper, client, job)
    folder = folder_of(settings, job)
    assert folder.read_bytes("input-version.policy") == samples.policy(2)
    assert folder.read_bytes("input-clone.policy") == samples.policy(1)
    assert not folder.has("input-in-service.policy")
    assert folder.read_json("job.json")["options"] == {
        "version": 2, "clone": 1, "in_service": 0, "against": 0, "closed_loop_episodes": 4, "seed": 9,
    }  # fmt: skip
    assert [one.split for one in folder.read_episodes()] == ["train", "held-out", "train"]
    client.ask(CancelJob, JobReply, job=job, who="ann")
    let_go(number)


def test_options_that_cannot_be_used_are_refused_at_once(stocked: Client) -> None:
    def code(kind: str, **options: Any) -> str:
        return stocked.refused(StartJob, job_kind=kind, rig="yard-crane", who="ann", options=options)

    assert code("measure") == "config.options"
    assert code("measure", version=3) == "unknown.version"
    assert code("measure", version=1, closed_loop_episodes=-1) == "config.options"
    assert code("distil", episodes=1.5) == "config.options"
    assert code("distil", operators="ann") == "config.options"
    assert code("distil", recipe=7) == "config.recipe"
    assert code("distil", recipe={"seed": "one"}) == "config.recipe"
    assert code("distil", operators=["nobody"]) == "conflict.no_demonstrations"
    assert code("inspect", note=b"bytes") == "config.invalid"
    assert stocked.refused(StartJob, job_kind="inspect", rig="nobody", who="ann") == "unknown.rig"
    assert stocked.refused(GetJob, job=5) == "unknown.job"
    assert stocked.ask(ListJobs, JobsReply).jobs == ()
    assert stocked.events("job-queued") == []


def test_a_job_that_is_killed_fails_and_the_next_one_runs(stocked: Client, keeper: KeeperProcess) -> None:
    first, second = start(stocked, "inspect"), start(stocked, "inspect")
    number = hold(keeper, stocked, first)
    assert stocked.ask(GetJob, JobReply, job=second).state == "queued"
    os.kill(number, signal.SIGKILL)
    reply = ended(stocked, first)
    assert (reply.state, (reply.result or {})["code"]) == ("failed", "job.ended")
    assert "SIGKILL" in reply.message
    assert ended(stocked, second).state == "done"


def test_a_job_can_be_cancelled_before_and_while_it_runs(
    stocked: Client, keeper: KeeperProcess, settings: ServiceSettings
) -> None:
    first, second, third = (start(stocked, "inspect") for _ in range(3))
    number = hold(keeper, stocked, first)
    assert stocked.ask(CancelJob, JobReply, job=second, who="ben").state == "cancelled"
    assert stocked.ask(CancelJob, JobReply, job=first, who="ben", why="wrong data").state == "cancelled"
    assert stocked.refused(CancelJob, job=first, who="ben") == "conflict.job_ended"
    assert stocked.ask(GetJob, JobReply, job=third).state == "queued"
    let_go(number)
    assert ended(stocked, third).state == "done"
    assert [stocked.ask(GetJob, JobReply, job=job).state for job in (first, second)] == ["cancelled", "cancelled"]
    assert not folder_of(settings, first).path.exists()
    assert [event["detail"]["job"] for event in stocked.events("job-cancelled")] == [second, first]


def test_a_job_that_does_not_listen_is_killed(stocked: Client, keeper: KeeperProcess) -> None:
    first, second = start(stocked, "inspect"), start(stocked, "inspect")
    hold(keeper, stocked, first, listening=True)
    stocked.ask(CancelJob, JobReply, job=first, who="ben")
    # It stays stopped, so that only SIGKILL can end it.
    assert ended(stocked, second).state == "done"
    assert stocked.ask(GetJob, JobReply, job=first).state == "cancelled"


@pytest.mark.parametrize("end", ["kill", "stop"])
def test_a_job_goes_on_after_the_keeper_was_away(stocked: Client, keeper: KeeperProcess, end: str) -> None:
    job = start(stocked, "inspect")
    number = hold(keeper, stocked, job)
    if end == "kill":
        keeper.kill()
        let_go(number)
    else:
        assert keeper.stop() == 0
        assert not Path(f"/proc/{number}").exists()
    stocked.close()
    keeper.start()
    assert ended(stocked, job).state == "done"
    assert f"job-resumed job={job}" in keeper.log()


def test_progress_is_shown_and_strange_messages_are_counted(
    stocked: Client, keeper: KeeperProcess, settings: ServiceSettings, context: zmq.Context[zmq.Socket[bytes]]
) -> None:
    job = start(stocked, "inspect")
    number = hold(keeper, stocked, job)
    sender = context.socket(zmq.PUSH)
    sender.connect(settings.progress)
    sender.send(b"\xc1 nothing")
    sender.send(encode(Progress(job=job + 1, stage="another's", fraction=0.9)))
    sender.send(encode(Progress(job=job, stage="looking", fraction=0.25, eta_s=3.0, figures={"loss": 0.5})))
    reply = stocked.until(lambda it: it.stage == "looking", GetJob, JobReply, job=job)
    assert (reply.fraction, reply.eta_s, reply.figures) == (0.25, 3.0, {"loss": 0.5})
    assert stocked.ask(GetHealth, HealthReply).counters["jobs.strange_messages"] == 2
    let_go(number)
    assert ended(stocked, job).state == "done"
    sender.close(linger=0)
