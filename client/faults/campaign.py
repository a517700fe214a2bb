"""A crane in closed loop through real processes, hundreds of faults at random moments, and an oracle that sees all.

The rig's program runs here, in real time: simulator, link, and a troublemaker on the wire. The service runs in its own
processes. After each fault an operator re-arms, now and then only after the machine must have come to rest.
"""

from __future__ import annotations

import random
import tempfile
import time
from collections import Counter
from contextlib import ExitStack
from pathlib import Path
from typing import Any

import numpy as np

from nearhand.client.desk import Desk
from nearhand.client.faults.injections import KINDS, Bench, SteppedClock
from nearhand.client.faults.operator import Operator
from nearhand.client.faults.oracle import Oracle
from nearhand.client.faults.proxy import Proxy
from nearhand.client.jobs import start_job, wait_job
from nearhand.client.link import Drive, RigLink
from nearhand.client.options import rig_text
from nearhand.client.tryout.rig_process import RigProcess
from nearhand.client.tryout.service_process import ServiceProcess
from nearhand.service.bus.desk_messages import PutRig, Release, ReleaseReply, RigReply, VerifyEvents, VerifyReply
from nearhand.service.errors import LinkError
from nearhand.service.rigs import Rig
from nearhand.service.simulators import make_simulator

RIG, WHO = "crane", "bench"
DEMONSTRATIONS, CLONE_STEPS = 12, 1_500
#: How long a fault lasts, and how long an armed rig is left in peace before the next, s.
LASTS_S, LONG_FAULT_S, PEACE_S = (0.05, 0.4), (1.0, 3.0), (0.1, 0.5)
#: Shares of faults that last long, and that do not come alone.
LONG_FAULT_SHARE, PAIR_SHARE = 0.2, 0.3
#: How soon the operator re-arms after a fault; the long time lets the oracle see the machine stand.
REARM_S, LONG_S, LONG_SHARE = (0.1, 0.5), 8.0, 0.04
#: Without being armed for so long, the service has not come back.
GIVE_UP_S = 40.0


def run(count: int = 300, seed: int = 1) -> dict[str, Any]:
    """Inject ``count`` faults; return bench, figures, ratios and targets.

    Raises:
        LinkError: the service did not start, or never came back after a fault.
    """
    rig, toml = rig_text(RIG)
    with tempfile.TemporaryDirectory(prefix="nearhand-") as name:
        folder = Path(name)
        with ServiceProcess(folder / "data") as service:
            _in_service(service, toml, folder)
            with Proxy(service.lanes["action"]) as proxy:
                campaign = Campaign(rig, service, proxy, seed)
                campaign.run(count)
            with Desk(service.lanes["desk"]) as desk:
                record = desk.ask(VerifyEvents, VerifyReply)
    return campaign.result(record.intact)


def _in_service(service: ServiceProcess, toml: str, folder: Path) -> None:
    """Teach the service the crane and put a clone in service; how well it drives does not matter here."""
    arguments = [
        "collect", "--rig", RIG, "--expert", "designed", "--operator", "designed", "--episodes", str(DEMONSTRATIONS),
        "--seed", "11", "--intake", service.lanes["intake"], "--spool", str(folder / "spool"),
    ]  # fmt: skip
    with Desk(service.lanes["desk"]) as desk:
        desk.ask(PutRig, RigReply, toml=toml, who=WHO, why="faults")
        with RigProcess(arguments) as process:
            for _ in process.lines():
                pass
        recipe = {"method": "clone", "clone": {"steps": CLONE_STEPS}}
        job = start_job(desk, "distil", RIG, WHO, {"recipe": recipe, "episodes": 0, "operators": []})
        (version,) = wait_job(desk, job).versions
        wishes = {"version": version, "closed_loop_episodes": 2, "seed": 1, "operators": []}
        wait_job(desk, start_job(desk, "measure", RIG, WHO, wishes))
        why = "a fault campaign looks at the envelope, not at the policy"
        desk.ask(Release, ReleaseReply, version=version, who=WHO, why=why, override=True)


class Campaign:
    """One run of faults."""

    def __init__(self, rig: Rig, service: ServiceProcess, proxy: Proxy, seed: int) -> None:
        assert rig.simulator is not None
        self._rig = rig
        self._simulator = make_simulator(rig.simulator.name, rig.simulator.options)
        self._oracle = Oracle(rig)
        self._generator = random.Random(seed)
        self._bench = Bench(service, proxy, SteppedClock(), self._generator)
        self._desk = service.lanes["desk"]
        self.injected: Counter[str] = Counter()
        self.periods: Counter[str] = Counter()
        self._note = "before any fault"
        self._armed_s = time.monotonic()
        self._link: RigLink | None = None
        self._steps = 0
        self._observation = np.zeros(len(rig.observations))
        (axis,) = rig.braking
        self._velocity = [channel.name for channel in rig.observations].index(axis.velocity)

    def run(self, count: int) -> None:
        """Drive until ``count`` faults were injected and lived through."""
        rounds = range(count // len(KINDS) + 1)
        kinds = [kind for _ in rounds for kind in self._generator.sample([*KINDS], len(KINDS))]
        with Operator(self._desk, self._rig.name, self._oracle.permit) as operator:
            self._operator = operator
            try:
                self._until_armed()
                for kind in kinds[:count]:
                    self._drive_for(self._generator.uniform(*PEACE_S))
                    self._inject(kind)
                    self._until_armed()
            finally:
                if self._link is not None:
                    self._link.close()

    def result(self, record_intact: bool) -> dict[str, Any]:
        """Return what came of it."""
        oracle = self._oracle
        figures = {
            "injections": float(self.injected.total()), "kinds": float(len(self.injected)),
            "actions judged": float(oracle.judged), "trips": float(oracle.trips), "times re-armed": float(oracle.arms),
            "frames tampered with": float(self._bench.proxy.touched),
            **{f"injections: {kind}": float(number) for kind, number in sorted(self.injected.items())},
        }  # fmt: skip
        values = {"violations": float(len(oracle.violations)), "broken event record": float(not record_intact)}
        return {
            "bench": "faults",
            "figures": figures,
            "ratios": {"armed share of periods": self.periods["armed"] / max(1, oracle.judged)},
            "targets": {name: {"value": value, "goal": 0.0, "met": value == 0.0} for name, value in values.items()},
            "violations": oracle.violations,
        }

    def _inject(self, kind: str) -> None:
        kinds = [kind]
        if self._generator.random() < PAIR_SHARE:
            kinds.append(self._generator.choice([other for other in KINDS if other != kind]))
        self._note = " and ".join(kinds)
        with ExitStack() as fault:
            for one in kinds:
                fault.enter_context(KINDS[one](self._bench))
                self.injected[one] += 1
                self._drive_for(self._generator.uniform(0.0, LASTS_S[0]))
            lasts_s = LONG_FAULT_S if self._generator.random() < LONG_FAULT_SHARE else LASTS_S
            self._drive_for(self._generator.uniform(*lasts_s))

    def _until_armed(self) -> None:
        """Drive, and have the operator re-arm, until the policy acts."""
        waits_s = LONG_S if self._generator.random() < LONG_SHARE else self._generator.uniform(*REARM_S)
        begin_s = asked_s = time.monotonic()
        while (drive := self._period()).mode != "armed" or not drive.fresh:
            now_s = time.monotonic()
            if drive.mode != "armed" and now_s - asked_s > waits_s:
                self._operator.rearm()
                asked_s, waits_s = now_s, 0.5
            if now_s - begin_s > GIVE_UP_S:
                raise LinkError(f"{GIVE_UP_S:g} s after {self._note!r} the policy still does not act: {drive}")

    def _drive_for(self, seconds: float) -> None:
        end_s = time.monotonic() + seconds
        while time.monotonic() < end_s:
            self._period()

    def _period(self) -> Drive:
        """Go through one control period of the rig's program."""
        begin_s = time.monotonic()
        if self._link is None or self._steps >= self._simulator.max_steps:
            self._begin_episode()
        assert self._link is not None
        if self._bench.pause_s:
            time.sleep(self._bench.pause_s)
            self._bench.pause_s = 0.0
        told = self._bench.sensors(self._observation)
        drive = self._link.exchange(told)
        speed = float(self._observation[self._velocity])
        self._oracle.judge(drive.action.tolist(), drive.mode, told.tolist(), [speed], self._note)
        self.periods[drive.mode] += 1
        self._observation = self._simulator.step(np.array([drive.action], dtype=np.float64)).observations[0]
        self._steps += 1
        time.sleep(max(0.0, self._rig.timing.period_s - (time.monotonic() - begin_s)))
        return drive

    def _begin_episode(self) -> None:
        if self._link is not None:
            self._link.close()
        self._link = RigLink(self._rig, self._bench.proxy.address, clock=self._bench.clock)
        self._observation = self._simulator.reset(1, seed=self._generator.randrange(10**6))[0]
        self._steps = 0
        self._oracle.begin()
