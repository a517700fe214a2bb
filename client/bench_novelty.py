"""How often the confidence gate trips on what it knows, and how soon on what it does not.

A real service is taught the crane and distils a clone; its policy then drives fresh episodes through the governor that
serves. Those of the calibrated kind must alarm as seldom as promised, within the exact law of split conformal
prediction; four novel situations are each shown with the share that trips and the delay.
"""

from __future__ import annotations

import tempfile
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from nearhand.client.desk import Desk
from nearhand.client.jobs import start_job, wait_job
from nearhand.client.options import rig_text
from nearhand.client.tryout.rig_process import RigProcess
from nearhand.client.tryout.service_process import ServiceProcess
from nearhand.service.bus.desk_messages import GetVersion, PutRig, RigReply, VersionReply
from nearhand.service.errors import LinkError
from nearhand.service.rigs import Rig
from nearhand.service.simulators import make_simulator

RIG, WHO, SEED = "crane", "bench", 9_001
DEMONSTRATIONS = 96
#: Fresh episodes of each novel situation.
NOVEL = 100
#: The law's central probability; outside of it the promise is not kept.
BAND = 0.99
Alter = Callable[[NDArray[np.float64]], NDArray[np.float64]]


@dataclass(frozen=True)
class Situation:
    """What is different: the simulator's options, or what the sensors tell."""

    options: dict[str, float]
    alter: Alter | None = None


def _biased(rows: NDArray[np.float64]) -> NDArray[np.float64]:
    told = rows.copy()
    told[:, 2] += 0.05  # swing angle, rad
    return told


def _swapped(rows: NDArray[np.float64]) -> NDArray[np.float64]:
    return rows[:, [0, 1, 3, 2, 4, 5]]  # swing angle and swing rate


SITUATIONS = {
    "rope doubled": Situation({"rope_scale": 2.0}),
    "swing sensor biased by 0.05 rad": Situation({}, _biased),
    "drive at half gain": Situation({"gain": 0.5}),
    "swing angle and rate swapped": Situation({}, _swapped),
}


def run(count: int = 400) -> dict[str, Any]:
    """Measure; return bench, figures, ratios and targets.

    Args:
        count: fresh episodes of the calibrated kind.

    Raises:
        LinkError: the service did not start or did not do its part.
    """
    from scipy.stats import betabinom

    from nearhand.service.policy.format import read_policy

    rig, toml = rig_text(RIG)
    data = _distilled(toml)
    file = read_policy(data)
    n = len(file.novelty["maxima"])
    epsilon = max(rig.novelty.epsilon, 1 / (n + 1))
    alarms, trips, _ = _drive(rig, data, Situation({}), count, SEED)
    # p ≤ ε happens to a fresh episode with a probability that, over calibrations, is Beta(⌊ε(n+1)⌋, n+1−⌊ε(n+1)⌋)
    # (Vovk 2012); the count of such episodes is beta-binomial.
    rank = int(np.floor(epsilon * (n + 1) + 1e-9))
    law = betabinom(count, rank, n + 1 - rank)
    low, high = law.ppf((1 - BAND) / 2), law.ppf((1 + BAND) / 2)
    figures: dict[str, float] = {
        "calibration episodes": float(n), "promised rate": epsilon, "usual episodes": float(count),
        "usual episodes with an alarm": float(alarms.sum()), "usual episodes that trip": float(trips.sum()),
        "99 % band, low": float(low), "99 % band, high": float(high),
    }  # fmt: skip
    ratios: dict[str, float] = {"alarms to promised": float(alarms.mean() / epsilon)}
    for index, (name, situation) in enumerate(SITUATIONS.items()):
        _, tripped, delays_s = _drive(rig, data, situation, NOVEL, SEED + 1 + index)
        figures[f"{name}: share that trips"] = float(tripped.mean())
        figures[f"{name}: median delay (s)"] = float(np.median(delays_s)) if len(delays_s) else -1.0
    return {
        "bench": "novelty", "figures": figures, "ratios": ratios,
        "targets": {
            "usual episodes with an alarm": {
                "value": float(alarms.sum()), "goal": float(high), "met": bool(low <= alarms.sum() <= high),
            },
            "usual episodes that trip": {
                "value": float(trips.sum()), "goal": float(high), "met": bool(trips.sum() <= high),
            },
        },
        "unseen": [name for name in SITUATIONS if figures[f"{name}: share that trips"] < 0.5],
    }  # fmt: skip


def _distilled(toml: str) -> bytes:
    """Return the policy file of a clone that a real service has distilled."""
    with (
        tempfile.TemporaryDirectory(prefix="nearhand-") as name,
        ServiceProcess(Path(name) / "data") as service,
        Desk(service.lanes["desk"]) as desk,
    ):
        desk.ask(PutRig, RigReply, toml=toml, who=WHO, why="bench")
        arguments = [
            "collect", "--rig", RIG, "--expert", "designed", "--operator", "designed",
            "--episodes", str(DEMONSTRATIONS), "--seed", "11", "--intake", service.lanes["intake"],
            "--spool", str(Path(name) / "spool"),
        ]  # fmt: skip
        with RigProcess(arguments) as process:
            for _ in process.lines():
                pass
        recipe = {"method": "clone"}
        job = start_job(desk, "distil", RIG, WHO, {"recipe": recipe, "episodes": 0, "operators": []})
        versions = wait_job(desk, job).versions
        policy = desk.ask(GetVersion, VersionReply, version=versions[0], with_policy=True).policy
    if policy is None:
        raise LinkError("the service gave no policy file")
    return policy


def _drive(
    rig: Rig, data: bytes, situation: Situation, count: int, seed: int
) -> tuple[NDArray[np.bool_], NDArray[np.bool_], NDArray[np.float64]]:
    """Drive fresh episodes; return which alarmed, which tripped, and the delays of those that tripped, s."""
    from nearhand.service.action.governor import Governor
    from nearhand.service.policy.format import read_policy

    assert rig.simulator is not None
    simulator = make_simulator(rig.simulator.name, {**rig.simulator.options, **situation.options})
    file = read_policy(data)
    governors = [Governor(rig, gate_trips=False) for _ in range(count)]
    for governor in governors:
        governor.load(1, file)
        governor.arm()
        governor.begin_session("bench", 0)
    observations = simulator.reset(count, seed=seed)
    alarmed = np.zeros(count, dtype=bool)
    tripped_at = np.full(count, -1)
    period_ns = round(rig.timing.period_s * 1e9)
    for step in range(simulator.max_steps):
        told = (observations if situation.alter is None else situation.alter(observations)).astype(np.float32)
        with np.errstate(over="ignore", invalid="ignore"):
            decided = [
                g.act(row, step, step * period_ns, step * period_ns) for g, row in zip(governors, told, strict=True)
            ]
        alarmed |= np.array([decision.novelty <= governors[0].epsilon for decision in decided])
        novel = np.array([governor.counts["novel"] > 0 for governor in governors])
        tripped_at = np.where((tripped_at < 0) & novel, step, tripped_at)
        observations = simulator.step(
            np.array([decision.action for decision in decided], dtype=np.float64)
        ).observations
    tripped = tripped_at >= 0
    return alarmed, tripped, tripped_at[tripped] * rig.timing.period_s
