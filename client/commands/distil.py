"""Train a policy from a rig's demonstrations: a cloned baseline and a proximal-point version.

Ctrl-C leaves the job running in the service; ``--attach JOB`` follows it again, ``--cancel JOB`` ends it.
"""

from __future__ import annotations

import argparse
import json
import sys
import tomllib
from pathlib import Path
from typing import Any

from nearhand.client.jobs import JobBar, cancel_job, start_job, wait_job
from nearhand.client.options import (
    add_deed_options,
    add_desk_options,
    add_rig_option,
    known_rig,
    open_desk,
    print_json,
)
from nearhand.configs import builtin_names, builtin_text
from nearhand.service.bus.desk_messages import GetVersion, VersionReply
from nearhand.service.errors import ConfigError, ConflictError

#: Rows of the table of prices.
SHOWN = 12


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of ``distil``."""
    add_desk_options(parser)
    add_deed_options(parser)
    add_rig_option(parser)
    parser.add_argument("--recipe", default="standard", help="a built-in recipe or a .toml file (default: %(default)s)")
    parser.add_argument("--episodes", type=int, default=0, help="train on at most so many episodes (default: all)")
    parser.add_argument("--operator", action="append", default=[], help="only this operator's; may be repeated")
    parser.add_argument("--set", metavar="NAME", help="train on a saved training set (nearhand curate --save-set)")
    parser.add_argument("--seed", type=int, help="seed, instead of the recipe's")
    parser.add_argument(
        "--cost-of", type=int, metavar="VERSION", help="show what a version's recovered cost charges for; starts no job"
    )
    parser.add_argument("--output", "-o", metavar="FILE", help="with --cost-of: also write the cost there, as JSON")
    parser.add_argument(
        "--from-cost", type=int, metavar="VERSION", help="distil again from that version's recovered cost alone"
    )
    parser.add_argument(
        "--simulator", action="append", default=[], metavar="OPTION=VALUE",
        help="with --from-cost: replace an option of the rig's simulator; may be repeated",
    )  # fmt: skip
    parser.add_argument("--attach", type=int, metavar="JOB", help="follow a job that runs already")
    parser.add_argument("--cancel", type=int, metavar="JOB", help="end a job; its checkpoint is dropped")


def read_recipe(name_or_path: str) -> dict[str, Any]:
    """Return a recipe as a map, from a file or from those that come with Nearhand.

    Raises:
        ConfigError: there is none of that name, or it is no TOML.
    """
    try:
        if name_or_path.endswith(".toml"):
            with open(name_or_path, "rb") as stream:  # noqa: PTH123
                return tomllib.load(stream)
        return tomllib.loads(builtin_text("recipes", name_or_path))
    except (OSError, tomllib.TOMLDecodeError) as error:
        known = ", ".join(builtin_names("recipes"))
        raise ConfigError(f"cannot use the recipe {name_or_path!r}: {error}; built in are: {known}") from error


def changes(texts: list[str]) -> dict[str, Any]:
    """Return ``OPTION=VALUE`` texts as a map; a value is read as TOML would, else as text.

    Raises:
        ConfigError: one has no ``=``.
    """
    found: dict[str, Any] = {}
    for text in texts:
        name, mark, value = text.partition("=")
        if not mark or not name.isidentifier():
            raise ConfigError(
                f"--simulator {text!r}: expected OPTION=VALUE, such as rope_scale=1.5", code="config.option"
            )
        try:
            found[name] = tomllib.loads(f"value = {value}")["value"]
        except tomllib.TOMLDecodeError:
            found[name] = value
    return found


def _show_cost(options: argparse.Namespace) -> int:
    with open_desk(options) as desk:
        found = desk.ask(GetVersion, VersionReply, version=options.cost_of)
    cost = found.provenance.get("recovered_cost")
    if not isinstance(cost, dict):
        raise ConflictError(
            f"version {options.cost_of} ({found.method}) has no recovered cost; proximal-online versions have one",
            code="conflict.no_cost",
        )
    if options.output is not None:
        text = json.dumps(cost, indent=1, sort_keys=True, ensure_ascii=False)
        Path(options.output).write_text(text + "\n", encoding="utf-8")
    rows = sorted(zip(cost["names"], cost["weights"], strict=True), key=lambda row: -abs(row[1]))
    total = sum(abs(weight) for _, weight in rows) or 1.0
    table = [{"feature": name, "price": weight, "share": abs(weight) / total} for name, weight in rows]
    lines = [f"{cost['words']}.", "", f"{'price per sd':>12}  {'share':>6}  feature"]
    lines += [f"{row['price']:>+12.4f}  {row['share']:>6.1%}  {row['feature']}" for row in table[:SHOWN]]
    if len(table) > SHOWN:
        lines.append(f"and {len(table) - SHOWN} lesser ones")
    _tell(
        options, {"version": options.cost_of, "words": cost["words"], "prices": table, "cost": cost}, "\n".join(lines)
    )
    return 0


def run(options: argparse.Namespace) -> int:
    """Run ``distil``.

    Raises:
        ConfigError: options that do not go together, or one of them is wrong.
        ConflictError: the version has no recovered cost.
    """
    if options.simulator and options.from_cost is None:
        raise ConfigError("--simulator needs --from-cost VERSION", code="config.option")
    if options.output is not None and options.cost_of is None:
        raise ConfigError("--output needs --cost-of VERSION", code="config.option")
    if options.cost_of is not None:
        return _show_cost(options)
    with open_desk(options) as desk:
        if options.cancel is not None:
            state = cancel_job(desk, options.cancel, options.who, why=options.why)
            _tell(options, {"job": state.job, "state": state.state}, f"job {state.job}: {state.state}")
            return 0
        job = options.attach
        if job is None:
            recipe = read_recipe(options.recipe)
            if options.seed is not None:
                recipe["seed"] = options.seed
            wishes: dict[str, Any] = {"recipe": recipe, "episodes": options.episodes, "operators": options.operator}
            if options.set is not None:
                wishes["set"] = options.set
            if options.from_cost is not None:
                wishes |= {"from_version": options.from_cost, "simulator": changes(options.simulator)}
            rig = known_rig(desk, options.rig)
            job = start_job(desk, "distil", rig, options.who, wishes, why=options.why)
        try:
            with JobBar(f"distil (job {job})", quiet=options.json) as bar:
                state = wait_job(desk, job, show=bar.show)
        except KeyboardInterrupt:
            print(
                f"job {job} goes on; nearhand distil --attach {job} follows it, --cancel {job} ends it", file=sys.stderr
            )
            return 130
    result = state.result or {}
    chosen = result.get("chosen", {})
    lines = [f"drafted version{'s' if len(state.versions) > 1 else ''} {', '.join(map(str, state.versions))}"]
    if isinstance(chosen, dict) and chosen:
        lines.append(f"chosen: {chosen.get('name', '?')}; {chosen.get('reason', '')}")
    lines.append(f"next: nearhand measure {state.versions[-1]}" if state.versions else "")
    _tell(options, {"job": job, "versions": list(state.versions), "result": result}, "\n".join(lines))
    return 0


def _tell(options: argparse.Namespace, value: dict[str, Any], text: str) -> None:
    if options.json:
        print_json(value)
    else:
        print(text)
