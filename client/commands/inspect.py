"""Check the demonstrations of a rig: gaps, jitter, saturation, idle ends, lag, coverage, and what to do about them.

``--envelope`` looks at a rig's description instead, without a service: how far each axis runs when all goes silent.
"""

from __future__ import annotations

import argparse
from dataclasses import asdict

from nearhand.client.jobs import JobBar, start_job, wait_job
from nearhand.client.options import (
    add_deed_options,
    add_desk_options,
    add_rig_option,
    known_rig,
    open_desk,
    print_json,
    rig_text,
)
from nearhand.client.tables import budget_table, inspection_tables, show


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of ``inspect``."""
    add_desk_options(parser)
    add_deed_options(parser)
    add_rig_option(parser)
    parser.add_argument(
        "--envelope",
        metavar="RIG",
        help="show the envelope's budget of a rig, built-in or a TOML file, and its warnings",
    )


def run(options: argparse.Namespace) -> int:
    """Run ``inspect``."""
    if options.envelope is not None:
        return _show_envelope(options.envelope, as_json=options.json)
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


def _show_envelope(name: str, *, as_json: bool) -> int:
    from nearhand.service.envelope.budget import budgets, unbraked

    rig, _ = rig_text(name)
    axes, free = budgets(rig), unbraked(rig)
    if as_json:
        print_json({"rig": rig.name, "axes": [asdict(axis) for axis in axes], "without_axis": list(free)})
        return 0
    if axes:
        show(budget_table(axes, f"{rig.title}: from the last good observation to standstill"))
    for axis in axes:
        for warning in axis.warnings:
            print(f"! {axis.axis}, {axis.end} end: {warning}")
    if free:
        print(f"! no braking axis stands behind {', '.join(free)}: only range and slew bound what they do")
    return 0
