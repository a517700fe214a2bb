"""The recovered cost as an object: names, round trip, and distilling again from it alone in changed dynamics."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from nearhand.service.errors import LearningError
from nearhand.service.jobs.folder import JobFolder
from nearhand.service.jobs.reporter import Reporter
from nearhand.service.learn.demonstrations import blank_policy, read_demonstrations
from nearhand.service.learn.distil import run_distil
from nearhand.service.learn.features import fit_features
from nearhand.service.learn.recovered_cost import ABSORBED, RecoveredCost, read_cost
from nearhand.service.policy.format import read_policy

SHORT = {"max_steps": 40}
SMALL: dict[str, Any] = {
    "seed": 3,
    "clone": {"steps": 300, "hidden": [16, 16]},
    "online": {"iterations": 6, "episodes": 8, "transitions": 400, "inner_steps": 10, "first_inner_steps": 30,
               "improvement_steps": 6, "critic_hidden": [16]},
    "selection": {"every": 2, "episodes": 16},
}  # fmt: skip


def never() -> bool:
    """Never stop."""
    return False


@pytest.fixture
def cost(rigs: Any, recorded: Any) -> RecoveredCost:
    """A cost with random weights on the integrator's features."""
    episodes = recorded("integrator", 4, 10, **SHORT)
    blank = blank_policy(rigs("integrator"), episodes)
    features = fit_features(2, read_demonstrations(blank, np.zeros(1, dtype=np.float32), episodes))
    weights = np.random.default_rng(1).normal(size=features.count + 1)
    return RecoveredCost("integrator", ("position", "velocity"), ("drive",), features, weights, 0.9)


def test_cost_comes_back_from_its_json_and_prices_alike(cost: RecoveredCost) -> None:
    back = read_cost(json.loads(json.dumps(cost.to_map(), allow_nan=False)))
    generator = np.random.default_rng(2)
    windows, actions = generator.normal(size=(3, 6, 2)).astype(np.float32), np.zeros((3, 5, 1), dtype=np.float32)
    lengths, ended = np.array([5, 2, 3]), np.array([False, True, False])
    found = back.of_episodes(windows, actions, lengths, ended)
    np.testing.assert_array_equal(found, cost.of_episodes(windows, actions, lengths, ended))
    # By hand: two periods lived, three absorbed.
    rows = cost.features(windows[1, :2], actions[1, :2]).astype(np.float64)
    assert found[1] == pytest.approx((rows @ cost.weights[:-1]).sum() / 5 + 3 / 5 * cost.weights[-1])


def test_features_have_the_names_of_what_they_measure(cost: RecoveredCost) -> None:
    names = cost.names()
    assert len(names) == len(set(names)) == cost.features.count + 1
    row = names.index("position × drive")
    at = np.array([[1.0, 0.5]], dtype=np.float32), np.array([[0.5]], dtype=np.float32)
    sole = RecoveredCost(cost.rig, cost.observations, cost.actions, cost.features, np.eye(len(names))[row], 0.9)
    assert sole.prices()[0] == {"feature": "position × drive", "price": 1.0, "share": 1.0}
    z = 5 * np.tanh(np.concatenate([at[0][0], (at[1][0] - cost.features.action_mean) / cost.features.action_sd]) / 5)
    wanted = (z[0] * z[2] - cost.features.centre[row]) / cost.features.scale[row]
    assert float(cost.features(*at)[0, row]) == pytest.approx(float(wanted), rel=1e-4)
    assert "position × drive (100%)" in sole.words()
    assert names[-1] == ABSORBED


@pytest.mark.parametrize("damage", [
    lambda c: c.pop("weights"), lambda c: c["weights"].pop(), lambda c: c["weights"].__setitem__(0, float("nan")),
    lambda c: c.__setitem__("format", 9), lambda c: c["features"].__setitem__("products", [[0, 99]]),
    lambda c: c.__setitem__("discount", 1.0),
])  # fmt: skip
def test_damaged_cost_is_refused_in_words(cost: RecoveredCost, damage: Callable[[Any], None]) -> None:
    content = json.loads(json.dumps(cost.to_map()))
    damage(content)
    with pytest.raises(LearningError, match="this is no recovered cost"):
        read_cost(content)


def test_version_distilled_again_from_its_cost_alone_is_cheaper_or_the_same(
    job: Callable[..., JobFolder], rigs: Any, recorded: Any, tmp_path: Path
) -> None:
    rig = rigs("integrator", **SHORT)
    folder = job(rig, recorded("integrator", 4, 10, **SHORT), SMALL)
    taught = run_distil(folder, Reporter(1, ""), never)
    content = taught["versions"][1]["provenance"]["recovered_cost"]
    assert "recovered_cost" not in taught["versions"][0]["provenance"]
    assert 0 < float(np.linalg.norm(content["weights"])) <= 1 + 1e-6

    def again(name: str) -> JobFolder:
        made = JobFolder(tmp_path / name)
        made.write_bytes("input-version.policy", folder.read_bytes("output-proximal.policy"))
        made.write_json("input-cost.json", content)
        options = {"recipe": SMALL, "from_version": 2, "simulator": {"max_steps": 30}}
        made.write_json(
            "job.json", {"job": 2, "kind": "distil", "rig": rig.model_dump(mode="json"), "options": options}
        )
        return made

    whole, broken = again("whole"), again("broken")
    result = run_distil(whole, Reporter(1, ""), never)
    chosen = result["result"]["chosen"]
    assert chosen["name"] == "start" or chosen["costs"][chosen["name"]] < chosen["costs"]["start"]
    assert len(result["result"]["curves"]["cost"]) == 6
    assert result["versions"][0]["provenance"]["simulator"] == {"max_steps": 30}
    file = read_policy(whole.read_bytes("output-from-cost.policy"))
    assert (file.method, file.rig) == ("from-cost", "integrator")
    # Stopped after every iteration, and taken up again: the same bytes.
    for _ in range(6):
        asked = iter([False, True])

        def stop(answers: Iterator[bool] = asked) -> bool:
            return next(answers, True)

        with pytest.raises(LearningError, match="stopped"):
            run_distil(broken, Reporter(1, ""), stop)
    run_distil(broken, Reporter(1, ""), never)
    assert broken.read_bytes("output-from-cost.policy") == whole.read_bytes("output-from-cost.policy")
