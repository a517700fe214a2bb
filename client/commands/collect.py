"""Stream demonstrations to the service: from a simulated rig with its expert, or from a CSV file.

Every sample goes through a spool file first; what the service has acknowledged is on its disk.
"""

from __future__ import annotations

import argparse
import json
import sys
import tempfile
from pathlib import Path
from typing import Any, cast

from nearhand.client.demos import Delivery, DemonstrationStream
from nearhand.client.desk import Desk
from nearhand.client.options import add_deed_options, add_desk_options, open_desk, print_json, rig_text
from nearhand.client.tryout.rig_process import RigProcess
from nearhand.service.bus.desk_messages import GetRig, PutRig, RigReply
from nearhand.service.bus.intake_messages import Outcome
from nearhand.service.errors import ConfigError, UnknownNameError
from nearhand.service.rigs import Rig

DELIVERY_TIMEOUT_S = 120.0


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of ``collect``."""
    add_desk_options(parser)
    add_deed_options(parser)
    parser.add_argument(
        "--rig", default="crane", help="a known or built-in rig, or a .toml file (default: %(default)s)"
    )
    parser.add_argument("--expert", help="which of the rig's experts drives (default: the rig's own)")
    parser.add_argument("--operator", help="name to record (default: the expert's)")
    parser.add_argument("--episodes", type=int, default=24, help="how many (default: %(default)s)")
    parser.add_argument("--seed", type=int, default=1, help="seed of the start states (default: %(default)s)")
    parser.add_argument(
        "--from",
        dest="source",
        type=Path,
        metavar="FILE",
        help="import a CSV file, or all .csv files of a folder, instead",
    )
    parser.add_argument(
        "--map", type=Path, metavar="FILE", help="with --from: a TOML file that renames and converts columns"
    )
    parser.add_argument("--spool", type=Path, help="folder for what is not acknowledged yet (default: a temporary one)")


def run(options: argparse.Namespace) -> int:
    """Run ``collect``; exit status 1 unless everything sent was acknowledged."""
    if options.episodes < 1:
        raise ConfigError(f"--episodes = {options.episodes}; expected at least 1")
    if options.map and not options.source:
        raise ConfigError("--map needs --from FILE", code="config.option")
    with open_desk(options) as desk, tempfile.TemporaryDirectory(prefix="nearhand-") as folder:
        rig, source = _settle_rig(desk, options, Path(folder))
        intake = desk.lanes().intake
        spool = options.spool or Path(folder) / "spool"
        rows = (
            _imported(rig, options, intake, spool) if options.source else _driven(rig, source, options, intake, spool)
        )
    whole = [row for row in rows if row["sent"] == row["acknowledged"]]
    if options.json:
        print_json({"rig": rig.name, "episodes": rows})
    else:
        samples = sum(int(row["acknowledged"]) for row in rows)
        print(f"{rig.name}: {len(whole)} of {len(rows)} episodes acknowledged whole, {samples} samples on disk")
    return 0 if rows and len(whole) == len(rows) else 1


def _settle_rig(desk: Desk, options: argparse.Namespace, folder: Path) -> tuple[Rig, str]:
    """Return the rig, registered with the service, and where its TOML is for a rig process."""
    try:
        rig, text = rig_text(options.rig)
    except ConfigError:
        if options.rig.endswith(".toml"):
            raise
        try:
            known = desk.ask(GetRig, RigReply, rig=options.rig)
        except UnknownNameError as error:
            raise ConfigError(
                f"{options.rig!r} is neither a rig that the service knows, a built-in one, nor a .toml file"
            ) from error
        path = folder / f"{options.rig}.json"
        path.write_text(json.dumps(known.description), encoding="utf-8")
        return Rig.model_validate(known.description), str(path)
    desk.ask(PutRig, RigReply, toml=text, who=options.who, why=options.why or "collect")
    path = folder / f"{rig.name}.toml"
    path.write_text(text, encoding="utf-8")
    return rig, str(path)


def _driven(rig: Rig, source: str, options: argparse.Namespace, intake: str, spool: Path) -> list[dict[str, Any]]:
    from rich.progress import track

    expert = options.expert or rig.expert
    if expert is None or expert not in rig.experts:
        raise ConfigError(f"rig {rig.name} has no expert {expert!r}; it has: {', '.join(rig.experts) or 'none'}")
    arguments = [
        "collect", "--rig", source, "--expert", expert, "--operator", options.operator or expert,
        "--episodes", str(options.episodes), "--seed", str(options.seed), "--intake", intake, "--spool", str(spool),
    ]  # fmt: skip
    with RigProcess(arguments) as process:
        lines = (line for line in process.lines() if line.get("kind") == "episode")
        return list(track(lines, f"collect from {expert}", options.episodes, disable=options.json, console=_console()))


def _console() -> Any:
    from rich.console import Console

    return Console(file=sys.stderr)


def _imported(rig: Rig, options: argparse.Namespace, intake: str, spool: Path) -> list[dict[str, Any]]:
    from nearhand.service.episodes.mapping import read_map
    from nearhand.service.episodes.tables import NO_MAP, read_csv

    mapping = read_map(options.map) if options.map else NO_MAP
    files = sorted(options.source.glob("*.csv")) if options.source.is_dir() else [options.source]
    if not files:
        raise ConfigError(f"folder {options.source} holds no .csv file; nothing was imported", code="config.csv")
    # All are read before the first sample is sent: a bad row in the last file imports nothing.
    episodes = [(file, episode) for file in files for episode in read_csv(file, rig, mapping)]
    with DemonstrationStream(rig, intake, spool) as stream:
        for file, episode in episodes:
            recording = stream.open(
                options.operator or episode.operator or "imported", notes=f"imported from {file.name}"
            )
            for row, time_s in enumerate(episode.times_s):
                recording.add(float(time_s), episode.observations[row], episode.actions[row])
            recording.close(cast(Outcome, episode.outcome), episode.observations[-1], episode.terminated)
        deliveries = stream.flush(DELIVERY_TIMEOUT_S)
    return [_row(name, delivery) for name, delivery in deliveries.items()]


def _row(name: str, delivery: Delivery) -> dict[str, Any]:
    return {
        "kind": "episode",
        "episode": name,
        "sent": delivery.sent,
        "acknowledged": delivery.acknowledged,
        "state": delivery.state,
    }
