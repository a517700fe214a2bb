"""See the rigs live: mode, version, observation and action against their limits, novelty, jobs, events."""

from __future__ import annotations

import argparse

from nearhand.client.options import add_desk_options, open_desk, print_json
from nearhand.service.bus.desk_messages import GetHealth, HealthReply


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of ``watch``."""
    add_desk_options(parser)
    parser.add_argument("--once", action="store_true", help="show the present state once")
    parser.add_argument("--metrics", action="store_true", help="print health and counters as OpenMetrics text")


def run(options: argparse.Namespace) -> int:
    """Run ``watch``."""
    with open_desk(options) as desk:
        if options.metrics:
            from nearhand.client.metrics import open_metrics

            print(open_metrics(desk.ask(GetHealth, HealthReply)), end="")
            return 0
        if options.json:
            print_json(desk.ask(GetHealth, HealthReply).model_dump(exclude={"v", "kind", "request"}))
            return 0
        from nearhand.client.desk import Feed
        from nearhand.client.watch import watch

        with Feed(desk.lanes().feed) as feed:
            watch(desk, feed, once=options.once)
    return 0
