"""Measure a version's distance to the expert, on held-out episodes and in closed loop, with 95 % intervals."""

from __future__ import annotations

import argparse

from nearhand.client.desk import Desk
from nearhand.client.jobs import JobBar, start_job, wait_job
from nearhand.client.options import add_deed_options, add_desk_options, open_desk, print_json
from nearhand.client.tables import distance_table, paired_table, plan_table, show
from nearhand.service.bus.desk_messages import GetPlan, GetVersion, PlanReply, VersionReply


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of ``measure``."""
    add_desk_options(parser)
    add_deed_options(parser)
    parser.add_argument("version", type=int, help="the version's number")
    parser.add_argument("--against", type=int, default=0, metavar="VERSION", help="compare with it, start by start")
    parser.add_argument(
        "--plan",
        action="store_true",
        help="do not measure; say how many episodes the gate needs, from the last measurement",
    )
    parser.add_argument("--episodes", type=int, default=50, help="closed-loop episodes (default: %(default)s)")
    parser.add_argument("--seed", type=int, default=1, help="seed of their start states (default: %(default)s)")
    parser.add_argument("--operator", action="append", default=[], help="compare with this operator only")


def run(options: argparse.Namespace) -> int:
    """Run ``measure``."""
    with open_desk(options) as desk:
        if options.plan:
            return _plan(desk, options.version, as_json=options.json)
        rig = desk.ask(GetVersion, VersionReply, version=options.version).rig
        wishes = {
            "version": options.version,
            "closed_loop_episodes": options.episodes,
            "seed": options.seed,
            "operators": options.operator,
            "against": options.against,
        }
        job = start_job(desk, "measure", rig, options.who, wishes, why=options.why)
        with JobBar(f"measure {options.version}", quiet=options.json) as bar:
            result = wait_job(desk, job, show=bar.show).result or {}
    if options.json:
        print_json(result)
    else:
        show(distance_table(result, f"version {options.version}: distance to the expert"))
        if result.get("against"):
            show(
                paired_table(
                    result["against"], f"version {options.version} less version {options.against}, same starts"
                )
            )
    return 0


def _plan(desk: Desk, version: int, *, as_json: bool) -> int:
    reply = desk.ask(GetPlan, PlanReply, version=version)
    if as_json:
        print_json(reply.model_dump(exclude={"v", "kind", "request"}))
    else:
        show(plan_table(reply.bounds, f"version {version}: episodes that the gate needs"))
    return 0
