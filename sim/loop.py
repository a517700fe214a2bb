"""Running a simulated rig against the service: an expert that demonstrates, or the service that drives.

What stands here is what a real rig's program would do; only the machine is simulated.
"""

from __future__ import annotations

import time
from collections import Counter
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from nearhand.client.demos import Delivery, DemonstrationStream
from nearhand.client.link import RigLink
from nearhand.client.recording import Recording
from nearhand.service.bus.action_messages import reason_names
from nearhand.service.bus.intake_messages import Outcome
from nearhand.service.errors import ConfigError
from nearhand.service.rigs import Rig
from nearhand.service.simulators import Expert, Simulator, make_expert, make_simulator

BATCH = 16
#: How long the service may take over one episode before the rest are left to the spool.
DELIVERY_TIMEOUT_S = 30.0

Collected = Callable[[str, Outcome, Delivery], None]
#: Changes what the rig reports, given the step within the run and the true observation (n,).
Alter = Callable[[int, NDArray[np.float32]], NDArray[np.float32]]


class Pace:
    """Waits for the beginning of each control period; not in real time, only when told that nothing was answered."""

    def __init__(self, period_s: float, *, real_time: bool) -> None:
        self._period_s = period_s
        self._real_time = real_time
        self._due_s = time.monotonic()

    def wait(self, *, answered: bool = True) -> None:
        """Return when the next period begins; a period that was missed altogether is not made up for."""
        if self._real_time:
            self._due_s = max(self._due_s + self._period_s, time.monotonic() - self._period_s)
            time.sleep(max(0.0, self._due_s - time.monotonic()))
        elif not answered:
            # A link that holds the machine by itself answers at once; the machine needs its time all the same.
            time.sleep(self._period_s)


def build_simulator(rig: Rig) -> Simulator:
    """Return the rig's simulator, its sizes checked against the rig's channels.

    Raises:
        ConfigError: the rig has none, or it does not fit.
    """
    if rig.simulator is None:
        raise ConfigError(f"rig {rig.name} has no simulator; give it a [simulator] table, or use the machine itself")
    simulator = make_simulator(rig.simulator.name, rig.simulator.options)
    sizes = simulator.observation_size, simulator.action_size
    if sizes != (len(rig.observations), len(rig.actions)):
        raise ConfigError(
            f"simulator {rig.simulator.name} has {sizes[0]} observation and {sizes[1]} action channels; "
            f"rig {rig.name} names {len(rig.observations)} and {len(rig.actions)}"
        )
    if not np.isclose(simulator.period_s, rig.timing.period_s, rtol=1e-6):
        raise ConfigError(
            f"simulator {rig.simulator.name} steps {simulator.period_s} s; rig {rig.name} has period_s = "
            f"{rig.timing.period_s}"
        )
    return simulator


def build_expert(rig: Rig, name: str, simulator: Simulator) -> Expert:
    """Return one of the rig's experts.

    Raises:
        ConfigError: the rig has none of that name.
    """
    if name not in rig.experts:
        raise ConfigError(f"rig {rig.name} has no expert {name!r}; it has: {', '.join(rig.experts) or 'none'}")
    return make_expert(rig.experts[name].name, simulator, rig.experts[name].options)


def collect(
    rig: Rig,
    expert_name: str,
    episodes: int,
    intake_address: str,
    spool: Path,
    seed: int,
    operator: str,
    *,
    paced: bool = False,
    on_progress: Collected | None = None,
) -> list[Delivery]:
    """Let an expert drive the simulated rig and stream every sample as it happens.

    Unpaced, several episodes are simulated together, faster than real time; paced, one after the other in real time.
    Episodes are closed in order of their number, each acknowledged before the next, so the service's division into
    uses is the same in every run with the same seed.

    Args:
        spool: folder for what is not acknowledged yet; leftovers of an earlier run are delivered too.
        seed: of start states, disturbances and the expert.
        on_progress: told of each episode (identifier, outcome, delivery).

    Returns:
        One delivery per episode, in order of their number.

    Raises:
        ConfigError: the rig has no such simulator or expert.
    """
    simulator = build_simulator(rig)
    expert = build_expert(rig, expert_name, simulator)
    result: list[Delivery] = []
    with DemonstrationStream(rig, intake_address, spool) as stream:
        size = 1 if paced else BATCH
        patience_s = DELIVERY_TIMEOUT_S
        for batch, start in enumerate(range(0, episodes, size)):
            count = min(size, episodes - start)
            recordings = [stream.open(operator, notes=f"simulated, seed {seed}") for _ in range(count)]
            ends = _demonstrate(rig, simulator, expert, recordings, _batch_seed(seed, batch), paced=paced)
            for recording, end in zip(recordings, ends, strict=True):
                recording.close(end.outcome, end.observation, end.terminated)
                delivery = stream.flush(patience_s)[recording.episode]
                if delivery.state == "waiting":
                    patience_s = 0.0
                result.append(delivery)
                if on_progress is not None:
                    on_progress(recording.episode, end.outcome, delivery)
    return result


@dataclass(frozen=True, slots=True)
class _End:
    outcome: Outcome
    observation: NDArray[np.float32]
    terminated: bool


def _batch_seed(seed: int, batch: int) -> int:
    return int(np.random.SeedSequence([seed, batch]).generate_state(1)[0])


def _demonstrate(
    rig: Rig, simulator: Simulator, expert: Expert, recordings: list[Recording], seed: int, *, paced: bool
) -> list[_End]:
    """Record one batch to its end; what is recorded is the action as applied, in float32 and within limits."""
    low, high = action_limits(rig)
    observations = simulator.reset(len(recordings), seed=seed)
    expert.reset(observations, seed=seed)
    ends: list[_End | None] = [None] * len(recordings)
    pace = Pace(rig.timing.period_s, real_time=paced)
    for step in range(simulator.max_steps):
        actions = np.clip(expert.act(observations), low, high).astype(np.float32)
        time_s = step * simulator.period_s
        for index, recording in enumerate(recordings):
            if ends[index] is None:
                recording.add(time_s, observations[index], actions[index])
        done = simulator.step(actions.astype(np.float64))
        observations = done.observations
        over = done.terminated | done.truncated
        if over.any():
            success = simulator.outcomes()["success"]
            for index in map(int, np.flatnonzero(over)):
                if ends[index] is None:
                    outcome: Outcome = "success" if success[index] else "failure"
                    final = observations[index].astype(np.float32)
                    ends[index] = _End(outcome, final, bool(done.terminated[index]))
        if over.all():
            break
        pace.wait()
    return [end or _End("cut", observations[i].astype(np.float32), False) for i, end in enumerate(ends)]


def action_limits(rig: Rig) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return the action channels' limits, (m,) each."""
    low = np.array([channel.low for channel in rig.actions])
    return low, np.array([channel.high for channel in rig.actions])


@dataclass(slots=True)
class DrivenEpisode:
    """What happened in one episode that the service drove.

    Attributes:
        steps: control periods.
        score: sum of the task score.
        outcomes: the simulator's figures; ``success`` is 0 or 1.
        over: the task or its time ended; false when the run stopped asking before.
        modes: control periods by mode; reasons: by reason; versions: by version, in order of appearance.
        unanswered: control periods without a usable reply in time.
        fallback_steps: control periods in which the policy did not act.
        round_trips_s: of the answered ones.
    """

    steps: int = 0
    score: float = 0.0
    outcomes: dict[str, float] = field(default_factory=dict)
    over: bool = False
    modes: Counter[str] = field(default_factory=Counter)
    reasons: Counter[str] = field(default_factory=Counter)
    versions: Counter[int] = field(default_factory=Counter)
    unanswered: int = 0
    fallback_steps: int = 0
    round_trips_s: list[float] = field(default_factory=list)


@dataclass(slots=True)
class DriveResult:
    """What happened over all episodes; ``total`` sums them up."""

    episodes: list[DrivenEpisode] = field(default_factory=list)

    def total(self) -> DrivenEpisode:
        """Return the sums; ``outcomes`` are means over the episodes that came to their end."""
        whole = DrivenEpisode(over=all(episode.over for episode in self.episodes))
        for episode in self.episodes:
            whole.steps += episode.steps
            whole.score += episode.score
            whole.modes.update(episode.modes)
            whole.reasons.update(episode.reasons)
            whole.versions.update(episode.versions)
            whole.unanswered += episode.unanswered
            whole.fallback_steps += episode.fallback_steps
            whole.round_trips_s.extend(episode.round_trips_s)
        ended = [episode.outcomes for episode in self.episodes if episode.over]
        if ended:
            whole.outcomes = {name: float(np.mean([one[name] for one in ended])) for name in ended[0]}
        return whole


@dataclass(frozen=True, slots=True)
class Faults:
    """What goes wrong on purpose, by step within the run (counted over all episodes).

    Attributes:
        stop_after: the rig stops asking after this many steps, without a word.
        pause_at, pause_s: the rig says nothing for a while before this step.
        alter: changes what the rig reports.
    """

    stop_after: int | None = None
    pause_at: int | None = None
    pause_s: float = 0.0
    alter: Alter | None = None


def drive(
    rig: Rig,
    action_address: str,
    episodes: int,
    seed: int,
    *,
    paced: bool = False,
    max_steps: int | None = None,
    on_step: Callable[[int], None] | None = None,
    on_episode: Callable[[int, DrivenEpisode], None] | None = None,
    faults: Faults = Faults(),
    patience_s: float = 0.0,
) -> DriveResult:
    """Let the service drive the simulated rig in closed loop, each episode in a session of its own.

    Unpaced, the next observation is sent as soon as the action has come; the watchdogs at both ends keep real time all
    the same. While the rig pauses on purpose, the simulated machine stands still.

    Args:
        seed: episode k starts from ``seed + k``.
        max_steps: most control periods per episode.
        on_step: told the number of steps so far in the run.
        on_episode: told of each episode at its end.
        faults: what goes wrong on purpose.
        patience_s: how long the machine waits before an episode, at rest, for an operator to arm it.

    Raises:
        ConfigError: the rig has no simulator, or it does not fit.
    """
    run = _Run(rig, build_simulator(rig), faults, max_steps, paced, on_step, patience_s)
    result = DriveResult()
    # The next episode's link connects while the present one drives: the watchdogs allow no long pause in between.
    following = RigLink(rig, action_address)
    try:
        for number in range(episodes):
            link, following = following, RigLink(rig, action_address)
            try:
                episode = run.episode(link, seed + number)
            finally:
                link.close()
            result.episodes.append(episode)
            if on_episode is not None:
                on_episode(number, episode)
            if run.has_stopped:
                break
    finally:
        following.close()
    return result


class _Run:
    """Episodes driven one after the other; ``steps`` counts over all of them."""

    def __init__(
        self,
        rig: Rig,
        simulator: Simulator,
        faults: Faults,
        max_steps: int | None,
        paced: bool,
        on_step: Callable[[int], None] | None,
        patience_s: float,
    ) -> None:
        self._period_s = rig.timing.period_s
        self._simulator = simulator
        self._faults = faults
        self._limit = simulator.max_steps if max_steps is None else min(max_steps, simulator.max_steps)
        self._paced = paced
        self._on_step = on_step
        self._patience_s = patience_s
        self.steps = 0

    @property
    def has_stopped(self) -> bool:
        """Whether the rig has stopped asking on purpose."""
        return self._faults.stop_after is not None and self.steps >= self._faults.stop_after

    def episode(self, link: RigLink, seed: int) -> DrivenEpisode:
        """Drive one episode to its end, to the limit of steps, or until the rig stops asking."""
        episode = DrivenEpisode()
        observation = self._simulator.reset(1, seed=seed)[0].astype(np.float32)
        self._await_armed(link, observation)
        pace = Pace(self._period_s, real_time=self._paced)
        while episode.steps < self._limit and not episode.over and not self.has_stopped:
            if self._faults.pause_at == self.steps:
                time.sleep(self._faults.pause_s)
            alter = self._faults.alter
            reported = observation if alter is None else alter(self.steps, observation)
            unanswered = episode.unanswered
            observation = _drive_step(self._simulator, link, reported, episode)
            self.steps += 1
            if self._on_step is not None:
                self._on_step(self.steps)
            pace.wait(answered=episode.unanswered == unanswered)
        episode.outcomes = {name: float(values[0]) for name, values in self._simulator.outcomes().items()}
        return episode

    def _await_armed(self, link: RigLink, observation: NDArray[np.float32]) -> None:
        """Ask at the control rate, without moving, until the service is armed or patience ends."""
        end_s = time.monotonic() + self._patience_s
        while time.monotonic() < end_s:
            answer = link.exchange(observation)
            if answer.fresh and answer.mode == "armed":
                return
            time.sleep(self._period_s)


def _drive_step(
    simulator: Simulator, link: RigLink, reported: NDArray[np.float32], episode: DrivenEpisode
) -> NDArray[np.float32]:
    """Ask for one action, apply it, note what came back; return what followed."""
    answer = link.exchange(reported)
    done = simulator.step(np.asarray(answer.action, dtype=np.float64)[None, :])
    episode.steps += 1
    episode.score += float(done.score[0])
    episode.over = bool(done.terminated[0] or done.truncated[0])
    episode.modes[str(answer.mode)] += 1
    episode.reasons.update(reason_names(int(answer.reasons)))
    episode.versions[int(answer.version)] += 1
    episode.unanswered += not answer.fresh
    episode.fallback_steps += not (answer.fresh and answer.mode == "armed")
    if answer.fresh:
        episode.round_trips_s.append(float(answer.round_trip_s))
    return np.asarray(done.observations[0], dtype=np.float32)
