"""Measuring versions, being refused by the gate, releasing."""

from __future__ import annotations

from typing import Any

from nearhand.client.desk import Desk
from nearhand.client.jobs import JobBar, start_job, wait_job
from nearhand.client.tables import distance_table, gate_table
from nearhand.client.tryout.narrator import Narrator
from nearhand.client.tryout.plan import WHO, Plan
from nearhand.service.bus.desk_messages import Rearm, Release, ReleaseReply, RigStateReply


def measure(desk: Desk, narrator: Narrator, plan: Plan, version: int, what: str) -> dict[str, Any]:
    """Measure a version and return the measurement."""
    wishes = {
        "version": version,
        "closed_loop_episodes": plan.measured_episodes,
        "seed": plan.measure_seed,
        "operators": [plan.expert],
    }
    with JobBar(f"measure {what}") as bar:
        state = wait_job(desk, start_job(desk, "measure", plan.rig.name, WHO, wishes), show=bar.show)
    return state.result or {}


def measure_all(desk: Desk, narrator: Narrator, plan: Plan, versions: dict[str, int]) -> None:
    """Measure every version and show the chosen one's distances beside the clone's and the floor."""
    for name, version in versions.items():
        measurement = measure(desk, narrator, plan, version, name)
        figures = measurement.get("figures", {})
        narrator.note(name, {figure: values.get("value") for figure, values in figures.items()})
        if name == "proximal":
            narrator.show(distance_table(measurement, f"version {version} (proximal): distance to the expert"))
            spread = [figure for figure, values in figures.items() if values.get("low") is None]
            narrator.check(bool(figures), f"{len(figures)} figures measured, {len(spread)} of them without interval")
    for note in measurement.get("notes", []):
        narrator.say(f"note: {note}")


def release(desk: Desk, version: int, *, why: str, override: bool = False) -> ReleaseReply:
    """Ask for a release."""
    return desk.ask(Release, ReleaseReply, version=version, who=WHO, why=why, override=override)


def refuse_and_release(desk: Desk, narrator: Narrator, plan: Plan, versions: dict[str, int]) -> None:
    """Be refused with the bad version, then release the good one and arm the rig."""
    bad = release(desk, versions["bad"], why="tryout: this one must be refused")
    broken = [bound for bound in bad.bounds if not bound.get("met")]
    narrator.check(not bad.released and bool(broken), f"version {versions['bad']} (hardly trained) is refused")
    for bound in broken:
        narrator.say(f"broken: {bound.get('sentence')}")
    narrator.note("refused", [bound.get("figure") for bound in broken])
    good = release(desk, versions["proximal"], why="tryout: passes the gate")
    narrator.show(gate_table(good))
    narrator.check(good.released, f"version {versions['proximal']} (proximal) is released through the gate")
    narrator.note("released", good.released)
    state = arm(desk, plan, why="tryout: first start")
    narrator.check(state.mode == "armed", f"an operator arms the rig; mode {state.mode}, version {state.version}")


def arm(desk: Desk, plan: Plan, *, why: str) -> RigStateReply:
    """Re-arm the rig as an operator."""
    return desk.ask(Rearm, RigStateReply, rig=plan.rig.name, who=WHO, why=why)
