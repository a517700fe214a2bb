"""Train a policy from a rig's demonstrations: a cloned baseline and a proximal-point version.

Ctrl-C leaves the job running in the service; ``--attach JOB`` follows it again, ``--cancel JOB`` ends it.
"""

from __future__ import annotations

import argparse
import sys
import tomllib
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
from nearhand.service.errors import ConfigError


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of ``distil``."""
    add_desk_options(parser)
    add_deed_options(parser)
    add_rig_option(parser)
    parser.add_argument("--recipe", default="standard", help="a built-in recipe or a .toml file (default: %(default)s)")
    parser.add_argument("--episodes", type=int, default=0, help="train on at most so many episodes (default: all)")
    parser.add_argument("--operator", action="append", default=[], help="only this operator's; may be repeated")
    parser.add_argument("--seed", type=int, help="seed, instead of the recipe's")
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


def run(options: argparse.Namespace) -> int:
    """Run ``distil``."""
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
            wishes = {"recipe": recipe, "episodes": options.episodes, "operators": options.operator}
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
