"""Inspection: each defect planted on purpose is found, told in a sentence, and not found where it is not."""

from __future__ import annotations

import json
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from nearhand.service.episodes.agreement import coverage, disagreement, pool
from nearhand.service.episodes.episode import Episode, split_of
from nearhand.service.episodes.inspection import inspect_episodes, run_inspect
from nearhand.service.episodes.quality import idle_ends, limits, outside, saturation
from nearhand.service.errors import LearningError, StoreError
from nearhand.service.jobs.folder import JobFolder
from nearhand.service.jobs.reporter import Reporter
from nearhand.service.rigs import Rig

PERIOD_S = 0.02


def drive(seed: int, *, length: int = 400, operator: str = "ann", gain: float = 1.0, noise: float = 0.02) -> Episode:
    """Return a cart driven to a moving aim by feedback, with a hand's noise."""
    generator = np.random.default_rng(seed)
    observations = np.zeros((length + 1, 3))
    actions = np.zeros((length, 1))
    observations[0] = generator.uniform([-0.5, -0.2, -0.1], [0.5, 0.2, 0.1])
    phases = generator.uniform(0, 2 * np.pi, 3)
    for t in range(length):
        aim = 0.3 * np.sin(np.array([0.9, 1.7, 2.9]) * t * PERIOD_S + phases).sum()
        position, speed, angle = observations[t]
        push = np.clip(gain * (2 * (aim - position) - 1.5 * speed - 0.5 * angle), -1, 1)
        actions[t] = np.clip(0.6 * push + noise * generator.standard_normal(), -1, 1)
        change = np.array([speed, actions[t, 0], -4 * angle - 1.5 * actions[t, 0]])
        observations[t + 1] = observations[t] + PERIOD_S * change + 1e-4 * generator.standard_normal(3)
    return Episode(
        episode=f"{operator}-{seed}", rig="cart", operator=operator,
        times_s=PERIOD_S * np.arange(length, dtype=np.float64),
        observations=observations.astype(np.float32), actions=actions.astype(np.float32), outcome="success",
        split=split_of(seed),
    )  # fmt: skip


@pytest.fixture(scope="module")
def good() -> list[Episode]:
    """Sixty ordinary episodes, enough for the rig's confidence gate."""
    return [drive(seed) for seed in range(60)]


def sentences(result: dict[str, Any], level: str) -> str:
    return "\n".join(one["sentence"] for one in result["verdicts"] if one["level"] == level)


def spoilt(good: list[Episode], change: Callable[[Episode], Episode], count: int = 1) -> list[Episode]:
    return [*map(change, good[:count]), *good[count:]]


def test_ordinary_demonstrations_have_no_problem(rig: Rig, good: list[Episode]) -> None:
    result = inspect_episodes(rig, good)
    assert sentences(result, "problem") == ""
    assert json.loads(json.dumps(result, allow_nan=False)) == result
    assert result["samples"] == 60 * 400
    assert result["duration_s"] == pytest.approx(60 * 400 * PERIOD_S)
    assert result["splits"] == {"train": 30, "held-out": 10, "calibration": 20}
    assert result["operators"] == {"ann": {"episodes": 60, "samples": 24_000, "successes": 60}}
    row = result["episodes"][0]
    assert (row["gaps"], row["backward"], row["stuck"], row["not_finite"], row["outside"]) == (0, 0, [], 0, {})
    assert row["jitter"] < 1e-9


def test_nothing_to_inspect_is_said_so(rig: Rig) -> None:
    result = inspect_episodes(rig, [])
    assert "no closed demonstrations" in sentences(result, "problem")
    assert (result["lag"], result["disagreement"], result["coverage"]) == (None, None, None)


def set_value(index: int, name: str, value: float, *, rows: slice = slice(10, 12)) -> Callable[[Episode], Episode]:
    def change(episode: Episode) -> Episode:
        values = getattr(episode, name).copy()
        values[rows, index] = value
        return replace(episode, **{name: values})

    return change


@pytest.mark.parametrize("value", [np.nan, np.inf, -np.inf])
@pytest.mark.parametrize(("name", "index"), [("observations", 1), ("actions", 0)])
def test_values_that_are_not_finite(rig: Rig, good: list[Episode], value: float, name: str, index: int) -> None:
    result = inspect_episodes(rig, spoilt(good, set_value(index, name, value)))
    assert result["episodes"][0]["not_finite"] == 2
    assert "NaN or infinite" in sentences(result, "problem")
    assert good[0].episode in sentences(result, "problem")
    json.dumps(result, allow_nan=False)


def test_a_stuck_sensor(rig: Rig, good: list[Episode]) -> None:
    result = inspect_episodes(rig, spoilt(good, set_value(2, "observations", 0.01, rows=slice(100, 130))))
    assert result["episodes"][0]["stuck"] == ["angle"]
    assert "angle stood still" in sentences(result, "problem")
    brief = inspect_episodes(rig, spoilt(good, set_value(2, "observations", 0.01, rows=slice(100, 115))))
    assert brief["episodes"][0]["stuck"] == []


def test_a_machine_at_rest_is_not_a_stuck_sensor(rig: Rig, good: list[Episode]) -> None:
    """The position repeats itself because the speed is zero, while the load goes on swinging."""

    def stop(episode: Episode) -> Episode:
        observations = episode.observations.copy()
        actions = episode.actions.copy()
        observations[200:300, 0] = observations[200, 0]
        observations[199:300, 1] = 0.0
        actions[200:300] = 0.0
        return replace(episode, observations=observations, actions=actions)

    result = inspect_episodes(rig, spoilt(good, stop, 5))
    assert all("position" not in row["stuck"] for row in result["episodes"])


def test_a_channel_that_is_constant_by_nature_is_not_stuck(rig: Rig, good: list[Episode]) -> None:
    def with_aim(number: int, episode: Episode) -> Episode:
        return set_value(0, "observations", 0.1 * (number % 5), rows=slice(None))(episode)

    result = inspect_episodes(rig, [with_aim(*item) for item in enumerate(good)])
    assert all(row["stuck"] == [] for row in result["episodes"])
    assert result["coverage"]["constant"] == []
    same = inspect_episodes(rig, [set_value(0, "observations", 0.1, rows=slice(None))(one) for one in good])
    assert same["coverage"]["constant"] == ["position"]
    assert "position never changes" in sentences(same, "note")


def test_values_outside_the_channels_range(rig: Rig, good: list[Episode]) -> None:
    result = inspect_episodes(rig, spoilt(good, set_value(0, "observations", 2.5, rows=slice(10, 50))))
    assert result["episodes"][0]["outside"] == {"position": pytest.approx(40 / 401)}
    assert "position leaves the range" in sentences(result, "note")
    edge = np.array([[0.1, 0.2, 0.3]], dtype=np.float32)
    tops = zip(rig.observations, (0.1, 0.2, 0.3), strict=True)
    narrow = tuple(one.model_copy(update={"high": high}) for one, high in tops)
    assert not outside(narrow, edge).any(), "rounding to float32 is not leaving the range"


def shift_times(change: Callable[[np.ndarray[Any, Any]], None]) -> Callable[[Episode], Episode]:
    def changed(episode: Episode) -> Episode:
        times = episode.times_s.copy()
        change(times)
        return replace(episode, times_s=times)

    return changed


def test_gaps_jitter_and_clocks_that_run_backward(rig: Rig, good: list[Episode]) -> None:
    def gap(times: np.ndarray[Any, Any]) -> None:
        times[200:] += 0.5

    def holes(times: np.ndarray[Any, Any]) -> None:
        times += 0.07 * (np.arange(times.size) // 20)

    def backward(times: np.ndarray[Any, Any]) -> None:
        times[300] = times[299] - 0.001

    def jitter(times: np.ndarray[Any, Any]) -> None:
        times += np.random.default_rng(1).uniform(0, 0.019, times.size)

    one = inspect_episodes(rig, spoilt(good, shift_times(gap)))
    assert (one["episodes"][0]["gaps"], one["episodes"][0]["longest_gap_s"]) == (1, pytest.approx(0.52))
    assert "have a gap" in sentences(one, "note")
    many = inspect_episodes(rig, spoilt(good, shift_times(holes)))
    assert many["episodes"][0]["gaps"] == 19
    assert "miss samples" in sentences(many, "problem")
    assert "runs backward" in sentences(inspect_episodes(rig, spoilt(good, shift_times(backward))), "problem")
    shaky = inspect_episodes(rig, spoilt(good, shift_times(jitter)))
    assert shaky["episodes"][0]["jitter"] == pytest.approx(0.019 / np.sqrt(12) * np.sqrt(2) / PERIOD_S, rel=0.1)
    assert "The period varies" in sentences(shaky, "problem")


def test_saturation_is_counted_at_both_ends(rig: Rig, good: list[Episode]) -> None:
    actions = np.array([[-1, -0.9995, -0.99, 0, 0.5, 0.998, 0.9991, 1, 1, np.nan]], dtype=np.float32).T
    assert saturation(rig, actions) == pytest.approx(5 / 9)
    result = inspect_episodes(rig, spoilt(good, set_value(0, "actions", 1.0, rows=slice(0, 100))))
    assert result["episodes"][0]["saturation"]["push"] >= 0.25
    assert "push is at its limit" in sentences(result, "note")
    assert limits(rig.actions)[0] == -1.0


def test_idle_ends_are_measured_and_dwell_inside_is_not(rig: Rig, good: list[Episode]) -> None:
    episode = good[0]
    lead, tail, dwell = 40, 75, 50
    observations = np.concatenate(
        [
            np.repeat(episode.observations[:1], lead, axis=0), episode.observations[:200],
            np.repeat(episode.observations[200:201], dwell, axis=0), episode.observations[200:],
            np.repeat(episode.observations[-1:], tail, axis=0),
        ]
    )  # fmt: skip
    still = np.zeros((1, 1), dtype=np.float32)
    actions = np.concatenate(
        [np.repeat(still, lead, axis=0), episode.actions[:200], np.repeat(still, dwell, axis=0), episode.actions[200:],
         np.repeat(still, tail, axis=0)]
    )  # fmt: skip
    idle = replace(
        episode,
        observations=observations,
        actions=actions,
        times_s=PERIOD_S * np.arange(actions.shape[0], dtype=np.float64),
    )
    start_s, end_s = idle_ends(rig, idle)
    assert start_s == pytest.approx(lead * PERIOD_S, abs=2 * PERIOD_S)
    assert end_s == pytest.approx(tail * PERIOD_S, abs=2 * PERIOD_S)
    assert idle_ends(rig, episode) == (0.0, 0.0)
    result = inspect_episodes(rig, [idle, *good[1:]])
    assert "begin or end with more than" in sentences(result, "note")


def test_failures_and_cuts(rig: Rig, good: list[Episode]) -> None:
    few = inspect_episodes(rig, spoilt(good, lambda one: replace(one, outcome="failure"), 3))
    assert "3 episodes ended in failure" in sentences(few, "note")
    many = inspect_episodes(rig, spoilt(good, lambda one: replace(one, outcome="failure"), 30))
    assert "30 episodes ended in failure" in sentences(many, "problem")
    cut = inspect_episodes(rig, spoilt(good, lambda one: replace(one, outcome="cut"), 2))
    assert "2 episodes were cut short" in sentences(cut, "note")
    assert cut["outcomes"] == {"cut": 2, "success": 58}


def test_too_few_episodes_name_the_smallest_honest_epsilon(rig: Rig, good: list[Episode]) -> None:
    """Split conformal prediction: with n calibration episodes no level below 1/(n+1) can be promised."""
    told = sentences(inspect_episodes(rig, good[:6]), "note")
    assert "6 episodes are few" in told
    assert "With 2 calibration episodes" in told
    assert "33%" in told
    assert "needs 19" in told
    assert "calibration episodes" not in sentences(inspect_episodes(rig, good), "note")


def test_operators_that_drive_differently_are_told_apart_from_those_that_drive_alike(rig: Rig) -> None:
    twins = [drive(seed + 100 * (name == "ben"), operator=name) for seed in range(10) for name in ("ann", "ben")]
    agreeing = inspect_episodes(rig, twins)
    assert agreeing["disagreement"]["between_operators"] == pytest.approx(1.0, abs=0.35)
    assert "average them" not in sentences(agreeing, "problem")
    opposed = [
        drive(seed + 100 * (name == "ben"), operator=name, gain=-1.0 if name == "ben" else 1.0, length=60)
        for seed in range(20)
        for name in ("ann", "ben")
    ]
    opposing = inspect_episodes(rig, opposed)
    assert opposing["disagreement"]["between_operators"] > 2.0
    assert "average them" in sentences(opposing, "problem")


def test_unexplained_variance_is_one_for_random_actions_and_small_for_feedback(rig: Rig) -> None:
    generator = np.random.default_rng(3)
    observations = generator.standard_normal((20, 201, 3)).astype(np.float32)
    noise = generator.standard_normal((20, 200, 1)).astype(np.float32)

    def episodes(actions: np.ndarray[Any, Any]) -> list[Episode]:
        times = PERIOD_S * np.arange(200, dtype=np.float64)
        return [Episode(str(i), "cart", "ann", times, observations[i], actions[i]) for i in range(20)]

    random = disagreement(pool(episodes(noise)))
    assert random is not None
    assert random.unexplained[0] == pytest.approx(1.0, abs=0.05)
    assert random.between_operators is None
    feedback = disagreement(pool(episodes(observations[:, :-1, :1])))
    assert feedback is not None
    assert feedback.unexplained[0] < 0.2
    assert disagreement(pool(episodes(noise)[:1])) is None


def test_coverage_has_the_closed_forms_of_a_correlation_matrix(rig: Rig) -> None:
    """Eigenvalues of [[1, r], [r, 1]] are 1 ± r; the participation ratio of equal eigenvalues is their number."""
    generator = np.random.default_rng(5)
    z = generator.standard_normal((200_001, 3))
    q, _ = np.linalg.qr(z - z.mean(axis=0))
    white = q * np.sqrt(z.shape[0])
    r = 0.8

    def covered(columns: np.ndarray[Any, Any]) -> Any:
        values = np.concatenate([columns, columns[-1:]]).astype(np.float32)
        length = columns.shape[0]
        return coverage(pool([Episode("e", "cart", "a", np.arange(length) * 1.0, values, np.zeros((length, 1), "f4"))]))

    isotropic = covered(100 + 3 * white)
    assert isotropic.smallest_eigenvalue == pytest.approx(1.0, abs=1e-3)
    assert isotropic.effective_dimension == pytest.approx(3.0, abs=1e-3)
    mixed = np.column_stack([white[:, 0], r * white[:, 0] + np.sqrt(1 - r**2) * white[:, 1], white[:, 2]])
    correlated = covered(mixed)
    assert correlated.smallest_eigenvalue == pytest.approx(1 - r, abs=1e-3)
    assert correlated.effective_dimension == pytest.approx(9 / (1.8**2 + 0.2**2 + 1), abs=1e-2)
    constant = covered(np.column_stack([white[:, 0], np.full(z.shape[0], 7.0), white[:, 1]]))
    assert constant.varying.tolist() == [0, 2]
    collinear = covered(np.column_stack([white[:, 0], 2 * white[:, 0], white[:, 1]]))
    assert collinear.smallest_eigenvalue == pytest.approx(0.0, abs=1e-6)
    np.testing.assert_allclose(np.abs(collinear.direction), [np.sqrt(0.5), np.sqrt(0.5), 0], atol=1e-3)


def test_two_hundred_long_episodes_take_less_than_ten_seconds(rig: Rig) -> None:
    generator = np.random.default_rng(9)
    episodes = [
        Episode(
            str(number), "cart", ("ann", "ben")[number % 2], PERIOD_S * np.arange(800, dtype=np.float64),
            generator.standard_normal((801, 3)).astype(np.float32), generator.uniform(-1, 1, (800, 1)).astype("f4"),
        )
        for number in range(200)
    ]  # fmt: skip
    begin_s = time.process_time()
    inspect_episodes(rig, episodes)
    assert time.process_time() - begin_s < 10.0


def prepared(folder: Path, rig: Rig, episodes: list[Episode]) -> JobFolder:
    job = JobFolder(folder)
    job.write_json(
        "job.json", {"job": 1, "kind": "inspect", "rig": rig.model_dump(mode="json"), "options": {}, "progress": ""}
    )
    job.write_episodes(episodes)
    return job


def test_a_job_gives_what_the_function_gives(rig: Rig, good: list[Episode], tmp_path: Path) -> None:
    job = prepared(tmp_path, rig, good[:5])
    with Reporter(1, "") as reporter:
        done = run_inspect(job, reporter, lambda: False)
    assert (done["state"], done["versions"]) == ("done", [])
    assert done["result"] == inspect_episodes(rig, good[:5])
    job.write_json("result.json", done)


def test_a_stopped_job_says_so(rig: Rig, good: list[Episode], tmp_path: Path) -> None:
    job = prepared(tmp_path, rig, good[:5])
    with Reporter(1, "") as reporter, pytest.raises(LearningError) as caught:
        run_inspect(job, reporter, lambda: True)
    assert caught.value.code == "learn.stopped"


def test_a_damaged_folder_is_a_store_error(rig: Rig, tmp_path: Path) -> None:
    with Reporter(1, "") as reporter:
        with pytest.raises(StoreError):
            run_inspect(JobFolder(tmp_path / "absent"), reporter, lambda: False)
        job = prepared(tmp_path, rig, [])
        job.write_json("job.json", {"rig": {"name": "x"}})
        with pytest.raises(StoreError, match="rig is damaged"):
            run_inspect(job, reporter, lambda: False)
