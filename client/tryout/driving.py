"""Driving the rig in closed loop, from a separate process, through the bus and the envelope."""

from __future__ import annotations

import threading
from typing import Any

from nearhand.client.desk import Desk
from nearhand.client.tryout.judging import arm
from nearhand.client.tryout.narrator import Narrator
from nearhand.client.tryout.plan import Plan
from nearhand.client.tryout.rig_process import RigProcess
from nearhand.service.errors import LinkError

STEPS_TIMEOUT_S = 30.0
#: How long a rig waits before an episode for an operator to arm it.
PATIENCE_S = 5.0
#: One reply in so many may come too late on a machine that does other work as well.
LATE_SHARE = 1000
#: Reasons that are limits doing their work, not trips.
LIMITS = ("clipped", "slewed", "braked")


class Drive:
    """A rig process that drives in the background; a context manager that ends it.

    Attributes:
        steps: control periods so far, told ten times a second.
        episodes: what it told of each finished episode.
        total: what it told at the end.
    """

    def __init__(self, plan: Plan, address: str, *, episodes: int, paced: bool, seed: int, steps: int | None) -> None:
        arguments = [
            "drive", "--rig", plan.rig_source, "--action", address, "--episodes", str(episodes), "--seed", str(seed),
            "--patience", str(PATIENCE_S),
        ]  # fmt: skip
        arguments += ["--paced"] if paced else []
        arguments += ["--steps", str(steps)] if steps is not None else []
        self._process = RigProcess(arguments)
        self.steps = 0
        self._moved = threading.Condition()
        self._failure: LinkError | None = None
        self.episodes: list[dict[str, Any]] = []
        self.total: dict[str, Any] = {}
        self._thread = threading.Thread(target=self._read, name="drive", daemon=True)
        self._thread.start()

    def __enter__(self) -> Drive:
        return self

    def __exit__(self, *exc: object) -> None:
        self._process.stop()
        self._thread.join(STEPS_TIMEOUT_S)

    def _read(self) -> None:
        try:
            for line in self._process.lines():
                with self._moved:
                    if line["kind"] == "steps":
                        self.steps = int(line["steps"])
                    elif line["kind"] == "episode":
                        self.episodes.append(line)
                    else:
                        self.total = line
                    self._moved.notify_all()
        except (LinkError, ValueError) as error:
            self._failure = error if isinstance(error, LinkError) else LinkError(f"the rig process was ended: {error}")
        finally:
            with self._moved:
                self._moved.notify_all()

    def await_steps(self, steps: int) -> None:
        """Wait until so many control periods have been driven.

        Raises:
            LinkError: the process ended or stood still first.
        """
        with self._moved:
            if not self._moved.wait_for(lambda: self.steps >= steps or bool(self.total), STEPS_TIMEOUT_S):
                raise LinkError(f"the rig drove {self.steps} of {steps} control periods")
        if self._failure is not None:
            raise self._failure

    def await_line(self) -> bool:
        """Wait for the next thing that the process tells; return whether it still runs."""
        with self._moved:
            self._moved.wait(0.2)
        return self._thread.is_alive()

    def finish(self, timeout_s: float) -> dict[str, Any]:
        """Wait for the end and return the totals.

        Raises:
            LinkError: the process failed or did not end in time.
        """
        self._thread.join(timeout_s)
        if self._failure is not None:
            raise self._failure
        if not self.total:
            raise LinkError(f"the rig process did not end within {timeout_s:g} s")
        return self.total


def drive_closed_loop(desk: Desk, narrator: Narrator, plan: Plan, address: str) -> None:
    """Drive the plan's episodes and tell score, interventions, trips and round-trip times.

    A trip ends the policy's part in its episode; an operator re-arms before the next one, and the number of trips is
    held against what the confidence gate promises.
    """
    rearmed = 0
    with (
        Drive(plan, address, episodes=plan.driven_episodes, paced=False, seed=plan.drive_seed, steps=None) as drive,
        narrator.bar("drive", plan.driven_episodes) as advance,
    ):
        shown = 0
        while drive.await_line() or shown < len(drive.episodes):
            for episode in drive.episodes[shown:]:
                advance()
                shown += 1
                if episode["modes"].get("latched") and shown < plan.driven_episodes:
                    arm(desk, plan, why="tryout: re-armed after a trip, before the next episode")
                    rearmed += 1
        total = drive.finish(5.0)
    _tell(narrator, plan, drive.episodes, total, rearmed)


def _tell(narrator: Narrator, plan: Plan, episodes: list[dict[str, Any]], total: dict[str, Any], rearmed: int) -> None:
    steps, count = int(total["steps"]), len(episodes)
    reasons = total["reasons"]
    succeeded = sum(bool(episode["outcomes"].get("success")) for episode in episodes)
    tripped = sum(bool(episode["modes"].get("latched")) for episode in episodes)
    novel = sum("novel" in episode["reasons"] for episode in episodes)
    limited = {name: reasons[name] for name in LIMITS if name in reasons}
    narrator.check(count == plan.driven_episodes, f"{count} episodes, {steps} control periods driven")
    late = int(total["unanswered"])
    narrator.check(late <= steps // LATE_SHARE, f"{late} of {steps} replies came too late; the lease covered them")
    narrator.check(
        2 * succeeded > count, f"{succeeded} of {count} episodes succeeded; score {total['score']:.4g} in all"
    )
    narrator.check(
        tripped == novel and 4 * novel <= count,
        f"{tripped} episodes tripped, {novel} of them at the confidence gate; re-armed {rearmed} times",
    )
    trips_ms = total["round_trip_ms"]
    told = ", ".join(f"{name} {value:.2f} ms" for name, value in trips_ms.items() if value is not None)
    narrator.say(f"periods limited by the envelope: {limited or 'none'}; round trip: {told}")
    narrator.note("episodes", count)
    narrator.note("succeeded", succeeded)
    narrator.note("tripped", tripped)
    narrator.note("score", total["score"])
    narrator.note("reasons", reasons)
    narrator.note("round_trip_ms", trips_ms)
