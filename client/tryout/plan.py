"""How much a tryout does: how many episodes, which recipes, which seeds."""

from __future__ import annotations

from dataclasses import dataclass

from nearhand.service.rigs import Rig

WHO = "tryout"


@dataclass(frozen=True)
class Plan:
    """The sizes of a tryout.

    Attributes:
        rig, rig_source: the rig and where its TOML is (a built-in name or a file).
        expert: the expert whose driving is distilled; its name is also its operator's.
        demonstrations: episodes by expert name.
        recipe, bad_recipe: for the good versions, and for the one that must be refused.
        training_episodes: how many demonstrations the good versions may see, 0 for all.
        measured_episodes: closed-loop episodes per measurement.
        driven_episodes: episodes through the bus and the envelope.
    """

    rig: Rig
    rig_source: str
    expert: str
    demonstrations: dict[str, int]
    recipe: str
    training_episodes: int
    measured_episodes: int
    driven_episodes: int
    collect_seed: int = 11
    measure_seed: int = 1_001
    drive_seed: int = 2_001


def make_plan(rig: Rig, rig_source: str, *, quick: bool) -> Plan:
    """Return the plan for a rig.

    The expert named in the rig's TOML gives most of the demonstrations; an ``operator`` among its experts, if there
    is one, gives some more, which are inspected beside them.
    """
    expert = rig.expert or next(iter(rig.experts))
    demonstrations = {expert: 96}
    if "operator" in rig.experts and expert != "operator":
        demonstrations["operator"] = 3 if quick else 6
    return Plan(
        rig=rig,
        rig_source=rig_source,
        expert=expert,
        demonstrations=demonstrations,
        recipe="quick" if quick else "standard",
        training_episodes=0,
        measured_episodes=30 if quick else 50,
        driven_episodes=10 if quick else 20,
    )
