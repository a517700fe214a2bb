"""Have a version look on beside the operator, or beside the version in service, without acting.

Without a version it shows how far the rig's latest shadow is from what was done.
"""

from __future__ import annotations

import argparse
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from nearhand.client.options import (
    add_deed_options,
    add_desk_options,
    add_rig_option,
    known_rig,
    open_desk,
    print_json,
)
from nearhand.client.tables import number, show
from nearhand.service.bus.shadow_messages import GetShadow, ShadowReply, StartShadow, StopShadow

if TYPE_CHECKING:
    from rich.console import RenderableType


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of ``shadow``."""
    add_desk_options(parser)
    add_deed_options(parser)
    add_rig_option(parser)
    parser.add_argument("version", type=int, nargs="?", help="which version begins to look on")
    parser.add_argument("--stop", action="store_true", help="end the rig's shadow")


def run(options: argparse.Namespace) -> int:
    """Run ``shadow``."""
    with open_desk(options) as desk:
        if options.version is not None and not options.stop:
            reply = desk.ask(StartShadow, ShadowReply, version=options.version, who=options.who, why=options.why)
        elif options.stop:
            rig = known_rig(desk, options.rig)
            reply = desk.ask(StopShadow, ShadowReply, rig=rig, who=options.who, why=options.why)
        else:
            reply = desk.ask(GetShadow, ShadowReply, rig=known_rig(desk, options.rig))
    if options.json:
        print_json(reply.model_dump(exclude={"v", "kind", "request"}))
    else:
        print(f"{reply.rig}: version {reply.version} {reply.state} since {reply.began_utc}; {reply.rows} periods seen")
        if reply.beside:
            show(disagreement_table(reply.beside))
    return 0


def disagreement_table(beside: Mapping[str, Mapping[str, Any]]) -> RenderableType:
    """Return the table of would-be less done actions, by who acted."""
    from rich import box
    from rich.table import Table

    table = Table(box=box.SIMPLE_HEAD, pad_edge=False, padding=(0, 1, 0, 0))
    table.caption, table.caption_justify = "root mean square and [95 % interval] over stretches of 5 s", "left"
    for name in ("beside", "periods", "channel", "would-be less done", "of range"):
        table.add_column(name, justify="left" if name in ("beside", "channel") else "right")
    for who, told in beside.items():
        for channel, figure in told["figures"].items():
            table.add_row(
                who, str(told["periods"]), channel,
                f"{number(figure['value'])} [{number(figure['low'])}, {number(figure['high'])}] {figure['unit']}",
                f"{100 * figure['of_range']:.1f} %",
            )  # fmt: skip
    return table
