"""A simulated rig as a process of its own: ``python -m nearhand.sim.rig_process collect|drive --rig FILE|NAME …``.

Prints one JSON object per line on standard output: ``kind`` is ``episode`` for each episode, ``steps`` now and then
while driving, and ``total`` last. Exit status 1 and one line on standard error if it cannot go on.
"""

from __future__ import annotations

import argparse
import json
import sys
import time
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from nearhand.client.demos import Delivery
from nearhand.client.options import rig_text
from nearhand.service.bus.intake_messages import Outcome
from nearhand.service.config import DEFAULT_HOST, DEFAULT_PORTS
from nearhand.service.errors import ConfigError, NearhandError
from nearhand.service.rigs import Rig
from nearhand.sim.loop import Alter, DrivenEpisode, Faults, collect, drive

TELL_EVERY_S = 0.1


def tell(kind: str, **fields: Any) -> None:
    """Print one line."""
    print(json.dumps({"kind": kind, **fields}), flush=True)


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(prog="nearhand-rig", description=__doc__)
    verbs = parser.add_subparsers(dest="verb", required=True)
    for verb in ("collect", "drive"):
        one = verbs.add_parser(verb)
        one.add_argument("--rig", required=True, help="a built-in rig or a .toml file")
        one.add_argument("--episodes", type=int, default=1, help="how many (default: %(default)s)")
        one.add_argument("--seed", type=int, default=1, help="of start states and disturbances (default: %(default)s)")
        one.add_argument("--paced", action="store_true", help="in real time")
    collecting = verbs.choices["collect"]
    collecting.add_argument("--expert", help="which of the rig's experts drives (default: the rig's own)")
    collecting.add_argument("--operator", help="name to record (default: the expert's)")
    collecting.add_argument("--intake", default=_address("intake"), help="the intake lane (default: %(default)s)")
    collecting.add_argument("--spool", type=Path, required=True, help="folder for what is not acknowledged yet")
    driving = verbs.choices["drive"]
    driving.add_argument("--action", default=_address("action"), help="the action lane (default: %(default)s)")
    driving.add_argument("--steps", type=int, help="most control periods per episode")
    driving.add_argument(
        "--patience", type=float, default=0.0, metavar="S", help="wait so long before an episode to be armed"
    )
    driving.add_argument("--stop-after", type=int, metavar="STEP", help="fault: stop asking after this many steps")
    driving.add_argument("--pause-at", type=int, metavar="STEP", help="fault: say nothing for a while at this step")
    driving.add_argument("--pause-s", type=float, default=0.5, help="how long that while is (default: %(default)s)")
    driving.add_argument(
        "--bias", metavar="CHANNEL=VALUE", help="fault: report an observation channel too high by this"
    )
    driving.add_argument("--bias-from", type=int, default=0, metavar="STEP", help="from this step on (default: 0)")
    return parser


def _address(lane: str) -> str:
    return f"tcp://{DEFAULT_HOST}:{DEFAULT_PORTS[lane]}"


def bias(rig: Rig, text: str, begin: int) -> Alter:
    """Return what makes one observation channel read too high from a step on.

    Raises:
        ConfigError: ``text`` is no CHANNEL=VALUE of this rig.
    """
    name, _, value = text.partition("=")
    names = [channel.name for channel in rig.observations]
    try:
        amount = float(value)
    except ValueError as error:
        raise ConfigError(f"--bias {text}: expected CHANNEL=VALUE with a number") from error
    if name not in names:
        raise ConfigError(f"--bias {text}: rig {rig.name} has no such observation; it has: {', '.join(names)}")
    index = names.index(name)

    def alter(step: int, observation: NDArray[np.float32]) -> NDArray[np.float32]:
        reported = observation.copy()
        if step >= begin:
            reported[index] += np.float32(amount)
        return reported

    return alter


def _collect(options: argparse.Namespace, rig: Rig) -> None:
    expert = options.expert or rig.expert
    if expert is None:
        raise ConfigError(f"rig {rig.name} names no expert of its own; choose one: {', '.join(rig.experts) or 'none'}")

    def progress(episode: str, outcome: Outcome, delivery: Delivery) -> None:
        tell(
            "episode", episode=episode, outcome=outcome, sent=delivery.sent, acknowledged=delivery.acknowledged,
            state=delivery.state, reason=delivery.reason,
        )  # fmt: skip

    deliveries = collect(
        rig, expert, options.episodes, options.intake, options.spool, options.seed, options.operator or expert,
        paced=options.paced, on_progress=progress,
    )  # fmt: skip
    tell(
        "total",
        episodes=len(deliveries),
        sent=sum(delivery.sent for delivery in deliveries),
        acknowledged=sum(delivery.acknowledged for delivery in deliveries),
    )


def figures(episode: DrivenEpisode) -> dict[str, Any]:
    """Return what is told of an episode, or of all of them."""
    trips_ms = 1e3 * np.array(episode.round_trips_s or [np.nan])
    rounded = dict(zip(("median", "p99", "max"), np.quantile(trips_ms, [0.5, 0.99, 1.0]), strict=True))
    return {
        "steps": episode.steps,
        "over": episode.over,
        "score": episode.score,
        "outcomes": episode.outcomes,
        "modes": dict(episode.modes),
        "reasons": dict(episode.reasons),
        "versions": list(episode.versions),
        "unanswered": episode.unanswered,
        "fallback_steps": episode.fallback_steps,
        "round_trip_ms": {name: float(value) if np.isfinite(value) else None for name, value in rounded.items()},
    }


def _drive(options: argparse.Namespace, rig: Rig) -> None:
    told_s = [0.0]

    def stepped(steps: int) -> None:
        now_s = time.monotonic()
        if steps == 1 or now_s - told_s[0] >= TELL_EVERY_S:
            told_s[0] = now_s
            tell("steps", steps=steps)

    result = drive(
        rig, options.action, options.episodes, options.seed, paced=options.paced, max_steps=options.steps,
        on_step=stepped,
        on_episode=lambda number, episode: tell("episode", episode=number, **figures(episode)),
        faults=Faults(
            stop_after=options.stop_after,
            pause_at=options.pause_at,
            pause_s=options.pause_s,
            alter=None if options.bias is None else bias(rig, options.bias, options.bias_from),
        ),
        patience_s=options.patience,
    )  # fmt: skip
    tell("total", episodes=len(result.episodes), **figures(result.total()))


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one verb; exit status 0, or 1 with the reason on standard error."""
    options = _parser().parse_args(arguments)
    try:
        if options.episodes < 1:
            raise ConfigError(f"--episodes = {options.episodes}; expected at least 1")
        rig, _ = rig_text(options.rig)
        (_collect if options.verb == "collect" else _drive)(options, rig)
    except NearhandError as error:
        print(f"nearhand-rig: {error.message}", file=sys.stderr)
        return 1
    except (KeyboardInterrupt, BrokenPipeError):
        return 1
    return 0


if __name__ == "__main__":
    raise SystemExit(main())
