"""The simulated rig against real processes: a keeper that takes demonstrations, an action server that drives."""

from __future__ import annotations

import json
import os
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import zmq

from nearhand.client.desk import Desk
from nearhand.configs import builtin_text
from nearhand.service.action.governor import Governor
from nearhand.service.bus.codec import decode, encode
from nearhand.service.bus.control_messages import CONTROL_REPLIES, Arm, ControlReply, Load
from nearhand.service.bus.desk_messages import (
    EpisodeReply,
    EpisodesReply,
    GetEpisode,
    ListEpisodes,
    PutRig,
    RigReply,
)
from nearhand.service.bus.message import Message
from nearhand.service.config import ServiceSettings
from nearhand.service.errors import ConfigError
from nearhand.service.policy.format import PolicyFile, read_policy, sha256, write_policy
from nearhand.service.policy.network import Policy
from nearhand.service.rigs import Rig, rig_from_toml
from nearhand.service.simulators import make_expert
from nearhand.sim.loop import Faults, action_limits, build_simulator, collect, drive
from nearhand.sim.rig_process import bias, main

CRANE = rig_from_toml(builtin_text("rigs", "crane"))
SEED = 2_001


def free_port() -> int:
    """Return a port that is free at this moment."""
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


def service_settings(folder: Path) -> ServiceSettings:
    lanes = {lane: f"tcp://127.0.0.1:{free_port()}" for lane in ("action", "intake", "desk", "feed")}
    return ServiceSettings(data=folder, control=f"ipc://{folder}/c", progress=f"ipc://{folder}/p", **lanes)


class Service:
    """One process of the service."""

    def __init__(self, folder: Path, module: str) -> None:
        self.settings = service_settings(folder)
        file = folder / "settings.json"
        file.write_text(self.settings.model_dump_json(), encoding="utf-8")
        readable, writable = os.pipe()
        self._log = (folder / "log").open("wb")
        self._process = subprocess.Popen(
            [
                sys.executable, "-m", module, "--settings", str(file), "--ready-fd", str(writable),
                "--parent", str(os.getpid()),
            ],
            pass_fds=[writable], stderr=self._log,
        )  # fmt: skip
        os.close(writable)
        said = os.read(readable, 16)
        os.close(readable)
        assert said == b"ready\n", (folder / "log").read_text(encoding="utf-8")

    def stop(self, number: int = signal.SIGTERM) -> None:
        self._process.send_signal(number)
        self._process.wait(20)
        self._log.close()


@pytest.fixture
def keeper(tmp_path: Path) -> Iterator[Service]:
    """A keeper that knows the crane."""
    service = Service(tmp_path, "nearhand.service.keeper.process")
    with Desk(service.settings.desk) as desk:
        desk.ask(PutRig, RigReply, toml=builtin_text("rigs", "crane"), who="test")
    yield service
    service.stop()


def linear_policy(rig: Rig) -> PolicyFile:
    """Return the straight line through the designed expert's actions on four seeds: good enough to move the crane."""
    simulator = build_simulator(rig)
    expert = make_expert("crane-designed", simulator, {})
    observations = simulator.reset(4, seed=77)
    expert.reset(observations, seed=77)
    seen, done = [], []
    for _ in range(300):
        actions = np.clip(expert.act(observations), *action_limits(rig))
        seen.append(observations)
        done.append(actions)
        observations = simulator.step(actions).observations
    inputs, outputs = np.concatenate(seen), np.concatenate(done)
    mean, scale = inputs.mean(axis=0), inputs.std(axis=0) + 1e-3
    low, high = action_limits(rig)
    middle, half = (low + high) / 2, (high - low) / 2
    design = np.column_stack([(inputs - mean) / scale, np.ones(inputs.shape[0])])
    weights, *_ = np.linalg.lstsq(design, (outputs - middle) / half, rcond=None)

    def single(values: Any) -> Any:
        return np.asarray(values, dtype=np.float32)

    policy = Policy(
        weights=(single(weights[:-1]),), biases=(single(weights[-1]),), observation_mean=single(mean),
        observation_scale=single(scale), action_middle=single(middle), action_half=single(half),
        log_sd=single(np.zeros(low.size)),
    )  # fmt: skip
    names = tuple(channel.name for channel in rig.observations), tuple(channel.name for channel in rig.actions)
    return PolicyFile(policy, rig.name, *names, method="clone", novelty={}, extra={})


@pytest.fixture(scope="module")
def policy() -> bytes:
    """A policy file for the crane."""
    return write_policy(linear_policy(CRANE))


@pytest.fixture
def server(tmp_path: Path, context: zmq.Context[zmq.Socket[bytes]], policy: bytes) -> Iterator[Service]:
    """An action server with the policy in service and armed."""
    service = Service(tmp_path, "nearhand.service.action.process")
    description = CRANE.model_dump(mode="json")
    requests: list[Message] = [
        Load(request="1", rig="crane", description=description, version=5, sha256=sha256(policy), policy=policy),
        Arm(request="2", rig="crane", who="test", why="test"),
    ]
    with context.socket(zmq.DEALER) as control:
        control.connect(service.settings.control)
        for request in requests:
            control.send(encode(request))
            assert control.poll(10_000)
            assert isinstance(decode(control.recv(), CONTROL_REPLIES), ControlReply)
    yield service
    service.stop()


def stored(desk: Desk) -> list[EpisodeReply]:
    rows = desk.ask(ListEpisodes, EpisodesReply, rig="crane").episodes
    return [desk.ask(GetEpisode, EpisodeReply, episode=row["episode"]) for row in rows]


def test_what_the_expert_did_is_what_is_stored(keeper: Service, tmp_path: Path) -> None:
    told = []
    deliveries = collect(
        CRANE, "designed", 3, keeper.settings.intake, tmp_path / "spool", 11, "ann",
        on_progress=lambda episode, outcome, delivery: told.append((episode, outcome, delivery)),
    )  # fmt: skip
    assert [delivery.state for delivery in deliveries] == ["closed"] * 3
    assert [delivery for _, _, delivery in told] == deliveries
    with Desk(keeper.settings.desk) as desk:
        episodes = stored(desk)
    assert [one.episode for one in episodes] == [episode for episode, _, _ in told]
    assert [one.outcome for one in episodes] == [outcome for _, outcome, _ in told]
    assert [one.samples for one in episodes] == [delivery.acknowledged for delivery in deliveries]
    simulator = build_simulator(CRANE)
    for number in range(3):
        observations = np.frombuffer(episodes[number].obs, dtype="<f4").reshape(-1, len(CRANE.observations))
        actions = np.frombuffer(episodes[number].act, dtype="<f4").reshape(-1, len(CRANE.actions))
        assert observations.shape[0] == actions.shape[0] + 1
        assert np.isfinite(observations).all()
        low, high = action_limits(CRANE)
        assert (actions >= low.astype(np.float32)).all()
        assert (actions <= high.astype(np.float32)).all()
        times = np.frombuffer(episodes[number].times, dtype="<f8")
        np.testing.assert_allclose(np.diff(times), simulator.period_s, rtol=1e-9)


def test_the_same_seed_stores_the_same_and_another_does_not(keeper: Service, tmp_path: Path) -> None:
    for seed in (11, 11, 12):
        collect(CRANE, "designed", 2, keeper.settings.intake, tmp_path / "spool", seed, "ann")
    with Desk(keeper.settings.desk) as desk:
        runs = [(one.obs, one.act) for one in stored(desk)]
        splits = [row["split"] for row in desk.ask(ListEpisodes, EpisodesReply, rig="crane").episodes]
    assert runs[:2] == runs[2:4]
    assert runs[4:] != runs[:2]
    assert splits == ["train", "held-out", "train", "calibration", "train", "calibration"]


def test_without_a_service_the_episodes_wait_in_the_spool_for_the_next_run(keeper: Service, tmp_path: Path) -> None:
    spool = tmp_path / "spool"
    command = [
        sys.executable, "-m", "nearhand.sim.rig_process", "collect", "--rig", "crane", "--seed", "3", "--episodes", "1",
        "--paced", "--intake", keeper.settings.intake, "--spool", str(spool),
    ]  # fmt: skip
    process = subprocess.Popen(command, stdout=subprocess.DEVNULL)
    while not (spool.is_dir() and any(path.stat().st_size > 1500 for path in spool.glob("*.spool"))):
        assert process.poll() is None
        time.sleep(0.005)
    process.kill()
    process.wait()
    (left,) = spool.glob("*.spool")
    deliveries = collect(CRANE, "designed", 1, keeper.settings.intake, spool, 4, "ann")
    assert [delivery.state for delivery in deliveries] == ["closed"]
    with Desk(keeper.settings.desk) as desk:
        by_name = {one.episode: one for one in stored(desk)}
    assert by_name[left.stem].outcome == "cut"
    assert 0 < by_name[left.stem].samples < deliveries[0].sent
    assert list(spool.iterdir()) == []


def test_driving_through_the_bus_is_driving_with_the_governor_itself(server: Service, policy: bytes) -> None:
    """Bit for bit: the same simulator, the same state machine, no bus, no processes in between."""
    steps: list[int] = []
    result = drive(CRANE, server.settings.action, 2, SEED, max_steps=200, on_step=steps.append)
    governor = Governor(CRANE)
    governor.load(5, read_policy(policy))
    governor.arm()
    simulator = build_simulator(CRANE)
    period_ns = round(CRANE.timing.period_s * 1e9)
    now_ns = 0
    for number, episode in enumerate(result.episodes):
        observation = simulator.reset(1, seed=SEED + number)[0].astype(np.float32)
        governor.begin_session(str(number), now_ns)
        score = 0.0
        for step in range(200):
            now_ns += period_ns
            decision = governor.act(observation, step + 1, now_ns, now_ns)
            done = simulator.step(decision.action.astype(np.float64)[None, :])
            observation = done.observations[0].astype(np.float32)
            score += float(done.score[0])
        assert episode.score == score
        assert episode.modes == {"armed": 200}
        assert episode.versions == {5: 200}
        assert (episode.steps, episode.unanswered, episode.fallback_steps, episode.over) == (200, 0, 0, False)
        assert len(episode.round_trips_s) == 200
        assert all(0 < one < CRANE.timing.period_s for one in episode.round_trips_s)
        assert "success" in episode.outcomes
    assert steps == list(range(1, 401))
    total = result.total()
    assert (total.steps, total.modes, total.score) == (400, {"armed": 400}, sum(one.score for one in result.episodes))


def test_an_episode_ends_with_its_task(server: Service) -> None:
    simulator = build_simulator(CRANE)
    (episode,) = drive(CRANE, server.settings.action, 1, SEED).episodes
    assert episode.over
    assert 0 < episode.steps <= simulator.max_steps


def test_a_pause_latches_and_the_rest_is_fallback(server: Service) -> None:
    faults = Faults(pause_at=20, pause_s=3 * CRANE.timing.deadline_s)
    (episode,) = drive(CRANE, server.settings.action, 1, SEED, max_steps=40, paced=True, faults=faults).episodes
    assert episode.modes["armed"] == 20
    assert episode.fallback_steps == 20
    assert episode.reasons["link"] or episode.reasons["gap"]


def test_stopping_without_a_word_ends_the_run(server: Service) -> None:
    result = drive(CRANE, server.settings.action, 3, SEED, max_steps=30, faults=Faults(stop_after=45))
    assert [episode.steps for episode in result.episodes] == [30, 15]
    assert not result.total().over


def test_a_dead_service_is_driven_without(tmp_path: Path) -> None:
    (episode,) = drive(CRANE, f"tcp://127.0.0.1:{free_port()}", 1, SEED, max_steps=10).episodes
    assert (episode.steps, episode.unanswered, episode.fallback_steps) == (10, 10, 10)
    assert episode.round_trips_s == []
    assert episode.reasons["link"] == 10


def test_a_bias_changes_one_channel_from_one_step_on() -> None:
    alter = bias(CRANE, "swing-angle=0.5", 3)
    index = [channel.name for channel in CRANE.observations].index("swing-angle")
    observation = np.zeros(len(CRANE.observations), dtype=np.float32)
    np.testing.assert_array_equal(alter(2, observation), observation)
    changed = alter(3, observation)
    assert changed[index] == np.float32(0.5)
    assert np.count_nonzero(changed) == 1
    assert not observation.any()
    for wrong in ("swing-angle", "swing-angle=much", "weather=1", "=1"):
        with pytest.raises(ConfigError, match="--bias"):
            bias(CRANE, wrong, 0)


def test_a_rig_that_does_not_fit_its_simulator_is_refused() -> None:
    for change, what in (
        ({"simulator": None}, "no simulator"),
        ({"observations": CRANE.observations[:-1]}, "observation"),
        ({"timing": CRANE.timing.model_copy(update={"period_s": 0.05})}, "period_s"),
    ):
        with pytest.raises(ConfigError, match=what):
            build_simulator(CRANE.model_copy(update=change))
    with pytest.raises(ConfigError, match="no expert 'nobody'"):
        collect(CRANE, "nobody", 1, "tcp://127.0.0.1:1", Path("unused"), 1, "ann")


def run_process(*words: str) -> list[dict[str, Any]]:
    """Run a rig process and return its lines."""
    answer = subprocess.run(
        [sys.executable, "-m", "nearhand.sim.rig_process", *words], capture_output=True, text=True, timeout=60,
        check=False,
    )  # fmt: skip
    assert answer.returncode == 0, answer.stderr
    return [json.loads(line) for line in answer.stdout.splitlines()]


def test_the_process_tells_what_it_collects(keeper: Service, tmp_path: Path) -> None:
    lines = run_process(
        "collect", "--rig", "crane", "--episodes", "2", "--operator", "ben", "--intake", keeper.settings.intake,
        "--spool", str(tmp_path / "spool"),
    )  # fmt: skip
    assert [line["kind"] for line in lines] == ["episode", "episode", "total"]
    assert all(line["sent"] == line["acknowledged"] > 0 and line["state"] == "closed" for line in lines[:2])
    assert lines[2]["acknowledged"] == lines[0]["sent"] + lines[1]["sent"]
    with Desk(keeper.settings.desk) as desk:
        assert {one.operator for one in stored(desk)} == {"ben"}


def test_the_process_tells_how_it_is_driven(server: Service) -> None:
    lines = run_process(
        "drive", "--rig", "crane", "--action", server.settings.action, "--episodes", "2", "--steps", "60",
        "--seed", str(SEED),
    )  # fmt: skip
    kinds = [line["kind"] for line in lines]
    assert kinds[0] == "steps"
    assert kinds.count("episode") == 2
    assert kinds[-1] == "total"
    total = lines[-1]
    assert (total["steps"], total["episodes"], total["modes"], total["versions"]) == (120, 2, {"armed": 120}, [5])
    assert 0 < total["round_trip_ms"]["median"] <= total["round_trip_ms"]["max"]


@pytest.mark.parametrize(
    "words",
    [
        ["drive", "--rig", "no-such-rig"],
        ["drive", "--rig", "absent.toml"],
        ["drive", "--rig", "crane", "--episodes", "0"],
        ["drive", "--rig", "crane", "--bias", "weather=1"],
        ["collect", "--rig", "crane", "--expert", "nobody", "--spool", "unused"],
    ],
)
def test_a_wrong_command_is_one_line_and_status_one(words: list[str], capsys: pytest.CaptureFixture[str]) -> None:
    assert main(words) == 1
    said = capsys.readouterr().err.strip().splitlines()
    assert len(said) == 1
    assert said[0].startswith("nearhand-rig: ")
