"""The ten steps in order."""

from __future__ import annotations

import contextlib
import json
import shutil
import sys
import tempfile
import time
from collections.abc import Iterator
from pathlib import Path

from nearhand.client.desk import Desk
from nearhand.client.options import rig_text
from nearhand.client.report import write_report
from nearhand.client.tryout.driving import drive_closed_loop
from nearhand.client.tryout.faults import inject_all
from nearhand.client.tryout.judging import measure_all, refuse_and_release
from nearhand.client.tryout.narrator import Narrator
from nearhand.client.tryout.plan import WHO, make_plan
from nearhand.client.tryout.service_process import ServiceProcess
from nearhand.client.tryout.swapping import swap_under_load
from nearhand.client.tryout.teaching import collect, distil, inspect
from nearhand.service.bus.desk_messages import PutRig, RigReply, VerifyEvents, VerifyReply
from nearhand.service.errors import NearhandError


@contextlib.contextmanager
def data_folder(keep: Path | None) -> Iterator[Path]:
    """Yield the folder for data and report; a temporary one is removed, but for the report."""
    if keep is not None:
        keep.mkdir(parents=True, exist_ok=True)
        yield keep.resolve()
        return
    with tempfile.TemporaryDirectory(prefix="nearhand-") as folder:
        yield Path(folder)


def run_tryout(rig_name: str, *, quick: bool, keep: Path | None, json_output: bool) -> int:
    """Go through the whole job; return 0 if every check held."""
    rig, toml = rig_text(rig_name)
    plan = make_plan(rig, rig_name, quick=quick)
    narrator = Narrator(json=json_output)
    begin_s = time.monotonic()
    report: Path | None = None
    error: NearhandError | None = None
    try:
        with data_folder(keep) as folder:
            narrator.step(1, "start", f"start the service; data in {folder}")
            with ServiceProcess(folder / "data") as service, Desk(service.lanes["desk"]) as desk:
                narrator.say(
                    ", ".join(f"{lane} {address}" for lane, address in service.lanes.items() if lane != "data")
                )
                narrator.say(f"ready after {time.monotonic() - begin_s:.1f} s")
                desk.ask(PutRig, RigReply, toml=toml, who=WHO, why="tryout")
                narrator.step(2, "collect", f"stream demonstrations of the {rig.title}")
                collect(narrator, plan, service.lanes["intake"], folder / "spool")
                narrator.step(3, "inspect", "inspect them")
                inspect(desk, narrator, plan)
                narrator.step(4, "distil", "distil a clone, a proximal-point version, and one that must be refused")
                versions = distil(desk, narrator, plan)
                narrator.step(5, "measure", "measure their distance to the expert")
                measure_all(desk, narrator, plan, versions)
                narrator.step(6, "release", "try to release the bad one, then the good one")
                refuse_and_release(desk, narrator, plan, versions)
                narrator.step(7, "drive", "drive in closed loop, through the bus and the envelope")
                drive_closed_loop(desk, narrator, plan, service.lanes["action"])
                narrator.step(8, "faults", "inject faults")
                inject_all(desk, narrator, plan, service)
                narrator.step(9, "swap", "release a second version and roll back while queries run")
                swap_under_load(desk, narrator, plan, service.lanes["action"], versions["proximal"], versions["clone"])
                narrator.step(10, "report", "write the evidence")
                verdict = desk.ask(VerifyEvents, VerifyReply)
                narrator.check(verdict.intact, f"the event record's {verdict.events} events verify")
                written = folder / "report.html"
                write_report(desk, versions["proximal"], written)
                report = written if keep is not None else Path(shutil.copy(written, Path.cwd() / "report.html"))
                narrator.check(report.stat().st_size > 10_000, f"report: {report}")
    except NearhandError as failure:
        error = failure
        narrator.check(False, failure.message)
    seconds = time.monotonic() - begin_s
    held = narrator.checks - len(narrator.failed)
    narrator.say("")
    narrator.say(f"{held} of {narrator.checks} checks held, in {seconds:.0f} s")
    for claim in narrator.failed:
        narrator.say(f"did not hold: {claim}")
    if json_output:
        summary = {
            "rig": rig.name,
            "quick": quick,
            "seconds": seconds,
            "checks": narrator.checks,
            "failed": narrator.failed,
            "error": error.code if error else None,
            "report": str(report) if report else None,
            "steps": narrator.facts,
        }
        json.dump(summary, sys.stdout)
        print(flush=True)
    return 1 if narrator.failed else 0
