"""Check the demonstrations of a rig: gaps, jitter, saturation, idle ends, lag, coverage, and what to do about them."""

from __future__ import annotations

import argparse

from nearhand.client.jobs import JobBar, start_job, wait_job
from nearhand.client.options import (
    add_deed_options,
    add_desk_options,
    add_rig_option,
    known_rig,
    open_desk,
    print_json,
)
from nearhand.client.tables import inspection_tables, show


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of ``inspect``."""
    add_desk_options(parser)
    add_deed_options(parser)
    add_rig_option(parser)


def run(options: argparse.Namespace) -> int:
    """Run ``inspect``."""
    with open_desk(options) as desk:
        job = start_job(desk, "inspect", known_rig(desk, options.rig), options.who, {})
        with JobBar("inspect", quiet=options.json) as bar:
            state = wait_job(desk, job, show=bar.show)
    result = state.result or {}
    if options.json:
        print_json(result)
    else:
        show(*inspection_tables(result))
    return 0
