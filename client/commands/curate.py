"""Keep, exclude, trim, weight and tag demonstrations, and save training sets; what was recorded is never changed.

Without a decision it shows what is in force. Every decision is recorded with who and why.
"""

from __future__ import annotations

import argparse
from typing import Any

from nearhand.client.options import (
    add_deed_options,
    add_desk_options,
    add_rig_option,
    known_rig,
    open_desk,
    print_json,
)
from nearhand.service.bus.curation_messages import (
    Curate,
    CurationReply,
    ListCuration,
    ListSets,
    SaveSet,
    SetsReply,
)
from nearhand.service.errors import ConfigError


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of ``curate``."""
    add_desk_options(parser)
    add_deed_options(parser)
    add_rig_option(parser)
    parser.add_argument("episodes", nargs="*", metavar="EPISODE", help="which episodes")
    either = parser.add_mutually_exclusive_group()
    either.add_argument("--exclude", action="store_true", help="no job but inspect sees them")
    either.add_argument("--keep", action="store_true", help="take an exclusion back")
    parser.add_argument("--start", type=float, metavar="S", help="leave out what comes before, in seconds; 0: nothing")
    parser.add_argument("--end", type=float, metavar="S", help="leave out what comes after, in seconds; 0: nothing")
    parser.add_argument("--weight", type=float, help="how much they count in training (1 from the start)")
    parser.add_argument("--tag", action="append", default=[], help="add a word; may be repeated")
    parser.add_argument("--untag", action="append", default=[], help="take a word away; may be repeated")
    parser.add_argument(
        "--save-set", metavar="NAME", help="save these episodes, or all training episodes kept, as a training set"
    )
    parser.add_argument("--sets", action="store_true", help="list the training sets")


def run(options: argparse.Namespace) -> int:
    """Run ``curate``.

    Raises:
        ConfigError: options that do not go together.
    """
    wishes: dict[str, Any] = {
        "excluded": True if options.exclude else (False if options.keep else None),
        "start_s": options.start, "end_s": options.end, "weight": options.weight,
        "tag": tuple(options.tag), "untag": tuple(options.untag),
    }  # fmt: skip
    has_wish = any(value not in (None, ()) for value in wishes.values())
    if has_wish and not (options.episodes and options.why):
        raise ConfigError("a decision needs the episodes that it is about and --why REASON", code="config.option")
    if has_wish and (options.save_set or options.sets):
        raise ConfigError("decide first, then save or list sets in a second command", code="config.option")
    with open_desk(options) as desk:
        rig = known_rig(desk, options.rig)
        episodes = tuple(options.episodes)
        if options.save_set or options.sets:
            sets = (
                desk.ask(
                    SaveSet, SetsReply, rig=rig, name=options.save_set, episodes=episodes, who=options.who,
                    why=options.why,
                )
                if options.save_set
                else desk.ask(ListSets, SetsReply, rig=rig)
            )  # fmt: skip
            _tell_sets(options, sets)
            return 0
        if has_wish:
            reply = desk.ask(
                Curate, CurationReply, rig=rig, episodes=episodes, who=options.who, why=options.why, **wishes
            )
        else:
            reply = desk.ask(ListCuration, CurationReply, rig=rig)
    rows = [row for row in reply.episodes if not episodes or row["episode"] in episodes]
    if options.json:
        print_json({"rig": rig, "episodes": rows})
    else:
        for row in rows:
            print(_line(row))
    return 0


def _line(row: dict[str, Any]) -> str:
    said = ["excluded" if row["excluded"] else "kept"]
    if row["start_s"] or row["end_s"] is not None:
        end = "its end" if row["end_s"] is None else f"{row['end_s']:g} s"
        said.append(f"from {row['start_s']:g} s to {end}")
    if row["weight"] != 1:
        said.append(f"weight {row['weight']:g}")
    if row["tags"]:
        said.append("tags " + ", ".join(row["tags"]))
    return f"{row['episode']}  {row['operator']}  {row['split']}  {row['samples']} samples  {'; '.join(said)}"


def _tell_sets(options: argparse.Namespace, reply: SetsReply) -> None:
    if options.json:
        print_json({"rig": reply.rig, "sets": reply.sets})
        return
    for row in reply.sets:
        print(f"{row['name']}  {len(row['members'])} episodes  sha256 {row['sha256']}  by {row['who']}")
