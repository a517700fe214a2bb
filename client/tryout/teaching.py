"""Collecting demonstrations from a separate rig process, inspecting them, distilling versions."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from nearhand.client.commands.distil import read_recipe
from nearhand.client.desk import Desk
from nearhand.client.jobs import JobBar, start_job, wait_job
from nearhand.client.tables import inspection_tables
from nearhand.client.tryout.narrator import Narrator
from nearhand.client.tryout.plan import WHO, Plan
from nearhand.client.tryout.rig_process import RigProcess
from nearhand.service.bus.desk_messages import JobReply

#: So few optimiser steps that the version cannot be good.
BAD_STEPS = 5


def collect(narrator: Narrator, plan: Plan, intake: str, spool: Path) -> None:
    """Stream demonstrations from a rig process of its own and compare what was sent with what is durable."""
    for index, (expert, episodes) in enumerate(plan.demonstrations.items()):
        arguments = [
            "collect", "--rig", plan.rig_source, "--expert", expert, "--operator", expert,
            "--episodes", str(episodes), "--seed", str(plan.collect_seed + index),
            "--intake", intake, "--spool", str(spool),
        ]  # fmt: skip
        rows = []
        with RigProcess(arguments) as process, narrator.bar(f"collect from {expert}", episodes) as advance:
            for line in process.lines():
                if line.get("kind") == "episode":
                    rows.append(line)
                    advance()
        sent = sum(int(row["sent"]) for row in rows)
        acknowledged = sum(int(row["acknowledged"]) for row in rows)
        equal = sum(row["sent"] == row["acknowledged"] and row["state"] == "closed" for row in rows)
        narrator.show_deliveries(expert, rows)
        narrator.check(
            equal == episodes and sent == acknowledged,
            f"{expert}: {equal} of {episodes} episodes acknowledged whole; {acknowledged} of {sent} samples",
        )
        narrator.note(expert, {"episodes": equal, "sent": sent, "acknowledged": acknowledged})


def inspect(desk: Desk, narrator: Narrator, plan: Plan) -> None:
    """Inspect all demonstrations and show what was found."""
    with JobBar("inspect") as bar:
        result = wait_job(desk, start_job(desk, "inspect", plan.rig.name, WHO, {}), show=bar.show).result or {}
    narrator.show(*inspection_tables(result, most=8))
    inspected = len(result.get("episodes", []))
    expected = sum(plan.demonstrations.values())
    narrator.check(inspected == expected, f"{inspected} of {expected} episodes inspected")
    narrator.note("verdicts", result.get("verdicts", []))


def distil(desk: Desk, narrator: Narrator, plan: Plan) -> dict[str, int]:
    """Distil the clone, the proximal-point version and a hardly trained one; return version by name."""
    good = _distil(desk, plan, "distil", read_recipe(plan.recipe), plan.training_episodes)
    result = good.result or {}
    chosen = result.get("chosen", {})
    if isinstance(chosen, dict) and chosen:
        narrator.say(f"chosen: {chosen.get('name', '?')}: {chosen.get('reason', '')}")
    narrator.check(len(good.versions) == 2, f"drafted versions {', '.join(map(str, good.versions))}")
    narrator.note("chosen", chosen)
    curves = result.get("curves", {})
    last = {name: values[-1] for name, values in curves.items() if values}
    narrator.note("diagnostics", last)
    narrator.say("diagnostics at the end: " + ", ".join(f"{k} {v:.3g}" for k, v in last.items() if v is not None))
    hardly = {**read_recipe("clone-only"), "seed": 7}
    hardly["clone"] = {**hardly.get("clone", {}), "steps": BAD_STEPS}
    bad = _distil(desk, plan, "distil badly", hardly, 1)
    narrator.say(f"version {bad.versions[0]} was trained for {BAD_STEPS} steps on one episode, to be refused")
    return {"clone": good.versions[0], "proximal": good.versions[1], "bad": bad.versions[0]}


def _distil(desk: Desk, plan: Plan, title: str, recipe: dict[str, Any], episodes: int) -> JobReply:
    wishes = {"recipe": recipe, "episodes": episodes, "operators": [plan.expert]}
    with JobBar(title) as bar:
        return wait_job(desk, start_job(desk, "distil", plan.rig.name, WHO, wishes), show=bar.show)
