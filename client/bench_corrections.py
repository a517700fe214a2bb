"""What corrections buy on a task that has shifted, against as many ordinary demonstrations of it.

A clone of the crane's expert meets longer ways than it was taught. The expert stands by as the operator: where the
policy is about to do something else for a while, it takes over through the link and drives to the end; that is recorded
as a correction. The same expert also demonstrates as many whole episodes of the shifted task. Two second rounds of
cloning, each with the first demonstrations and one of both, are measured on fresh episodes of the shifted task.
"""

from __future__ import annotations

import tempfile
import time
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from nearhand.client.demos import DemonstrationStream
from nearhand.client.desk import Desk
from nearhand.client.jobs import start_job, wait_job
from nearhand.client.link import RigLink
from nearhand.client.options import rig_text
from nearhand.client.take_over import TakeOver
from nearhand.client.tryout.rig_process import RigProcess
from nearhand.client.tryout.service_process import ServiceProcess
from nearhand.service.bus.desk_messages import PutRig, Rearm, Release, ReleaseReply, RigReply, RigStateReply
from nearhand.service.errors import LinkError
from nearhand.service.rigs import Rig, rig_from_toml
from nearhand.service.simulators import Expert, Simulator, make_expert, make_simulator

RIG, WHO = "crane", "bench"
FIRST, MEASURED, STEPS = 36, 60, 6_000
#: The shift: the bays lie farther apart than in any demonstration so far.
SHIFT = "\n[simulator.options]\ndistance_low_m = 9.5\ndistance_high_m = 11.0\n"
#: The operator takes over when the policy's action differs from theirs by so much (m/s²) for so many periods.
DOUBT, PATIENCE = 0.12, 10
ARM_TIMEOUT_S = 20.0


def run(count: int = 24) -> dict[str, Any]:
    """Measure; return bench, figures, ratios and targets.

    Args:
        count: corrections, and ordinary demonstrations of the shifted task.

    Raises:
        LinkError: the service did not start or did not do its part.
    """
    _, toml = rig_text(RIG)
    shifted = toml.replace('[simulator]\nname = "crane"\n', f'[simulator]\nname = "crane"\n{SHIFT}')
    with (
        tempfile.TemporaryDirectory(prefix="nearhand-") as name,
        ServiceProcess(Path(name) / "data") as service,
        Desk(service.lanes["desk"]) as desk,
    ):
        spool = Path(name) / "spool"
        _put(desk, toml)
        _collect(service, spool, RIG, "designed", FIRST, 11)
        first = _clone(desk, ["designed"])
        _put(desk, shifted)
        path = Path(name) / "shifted.toml"
        path.write_text(shifted, encoding="utf-8")
        before = _measure(desk, first)
        why = "the corrections' bench looks at what the operator adds"
        desk.ask(Release, ReleaseReply, version=first, who=WHO, why=why, override=True)
        taken, periods = _correct(desk, service, rig_from_toml(shifted), spool, count)
        _collect(service, spool, str(path), "ordinary", count, 5_011)
        scores = {
            name: _measure(desk, _clone(desk, ["designed", operator]))
            for name, operator in (("corrections", "corrector"), ("ordinary demonstrations", "ordinary"))
        }
    scores = {"first round": before, **scores}
    figures: dict[str, float] = {"take-overs": float(taken), "share of periods driven by the operator": periods}
    for name, told in scores.items():
        for label in ("score", "success"):
            row = told[f"closed_loop.{label}"]
            figures |= {f"{name}: {label}{end}": float(row[key]) for end, key in ENDS if row[key] is not None}
    after, ordinary = (figures[f"{name}: score"] for name in ("corrections", "ordinary demonstrations"))
    gain = after - figures["first round: score"]
    return {
        "bench": "corrections",
        "figures": figures,
        "ratios": {"score, corrections to ordinary": after / ordinary, "success to first round": (
            figures["corrections: success"] / max(figures["first round: success"], 1 / MEASURED)
        )},
        "targets": {"gain in score": {"value": gain, "goal": 0.0, "met": gain > 0.0}},
    }  # fmt: skip


ENDS = (("", "value"), (", low", "low"), (", high", "high"))


def _put(desk: Desk, toml: str) -> None:
    desk.ask(PutRig, RigReply, toml=toml, who=WHO, why="corrections")


def _collect(service: ServiceProcess, spool: Path, rig: str, operator: str, count: int, seed: int) -> None:
    arguments = [
        "collect", "--rig", rig, "--expert", "designed", "--operator", operator, "--episodes", str(count),
        "--seed", str(seed), "--intake", service.lanes["intake"], "--spool", str(spool),
    ]  # fmt: skip
    with RigProcess(arguments) as process:
        for _ in process.lines():
            pass


def _clone(desk: Desk, operators: list[str]) -> int:
    recipe = {"method": "clone", "clone": {"steps": STEPS}}
    job = start_job(desk, "distil", RIG, WHO, {"recipe": recipe, "episodes": 0, "operators": operators})
    (version,) = wait_job(desk, job).versions
    return version


def _measure(desk: Desk, version: int) -> dict[str, Any]:
    wishes = {"version": version, "closed_loop_episodes": MEASURED, "seed": 77, "operators": []}
    result = wait_job(desk, start_job(desk, "measure", RIG, WHO, wishes)).result or {}
    return dict(result["figures"])


def _correct(desk: Desk, service: ServiceProcess, rig: Rig, spool: Path, count: int) -> tuple[int, float]:
    """Let the policy drive with the expert standing by; return the take-overs and the operator's share of periods."""
    assert rig.simulator is not None
    simulator = make_simulator(rig.simulator.name, rig.simulator.options)
    expert = make_expert(rig.experts["designed"].name, simulator, rig.experts["designed"].options)
    taken = operated = periods = 0
    with DemonstrationStream(rig, service.lanes["intake"], spool) as stream:
        for number in range(count):
            with RigLink(rig, service.lanes["action"]) as link, TakeOver(link, stream, "corrector") as over:
                _await_armed(desk, over, simulator.reset(1, seed=9_000 + number)[0])
                operated_now, periods_now = _episode(over, simulator, expert, 9_000 + number)
            taken += bool(over.corrections)
            operated += operated_now
            periods += periods_now
        if any(told.state != "closed" for told in stream.flush().values()):
            raise LinkError("a correction was not delivered")
    return taken, operated / max(periods, 1)


def _await_armed(desk: Desk, over: TakeOver, observation: NDArray[np.float64]) -> None:
    """Have the operator arm the rig while it stands at its start."""
    end_s = time.monotonic() + ARM_TIMEOUT_S
    while over.exchange(observation).mode != "armed":
        if time.monotonic() > end_s:
            raise LinkError("the rig could not be armed")
        desk.ask(Rearm, RigStateReply, rig=RIG, who=WHO, why="corrections")


def _episode(over: TakeOver, simulator: Simulator, expert: Expert, seed: int) -> tuple[int, int]:
    """Drive one episode; return how many periods the operator drove, and how many there were."""
    observations = simulator.reset(1, seed=seed)
    expert.reset(observations, seed=seed)
    doubts = operated = 0
    for _ in range(simulator.max_steps):
        wanted = expert.act(observations)[0]
        drive = over.exchange(observations[0], wanted)
        operated += drive.mode == "taken"
        doubts = doubts + 1 if float(np.abs(drive.action - wanted).max()) > DOUBT else 0
        if not over.taken and (doubts >= PATIENCE or drive.mode != "armed"):
            over.begin("about to do something else")
        observations = simulator.step(np.array([drive.action], dtype=np.float64)).observations
    if over.taken:
        over.end("success" if simulator.outcomes()["success"][0] else "failure", observations[0])
    return operated, simulator.max_steps
