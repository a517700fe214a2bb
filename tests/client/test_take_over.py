"""Take-over at the rig: the operator drives within limits, with the service, without it, and on the record."""

from __future__ import annotations

import dataclasses
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from nearhand.client.demos import DemonstrationStream
from nearhand.client.link import Drive
from nearhand.client.spool import SUFFIX, SpoolFile
from nearhand.client.take_over import TakeOver
from nearhand.service.bus.action_messages import Reason
from nearhand.service.bus.arrays import pack
from nearhand.service.envelope.chain import limit
from nearhand.service.envelope.limits import Limits
from nearhand.service.episodes.correction import TASK, Correction
from tests.client.pretenders import DEADLINE_S, PERIOD_S, STILL, Pace, Pretender, Rigged, Server, crane, silent


def hand(*values: float) -> Any:
    """Return what an operator wants."""
    return np.array(values, dtype=np.float32)


def test_the_operators_action_is_taken_at_once_within_slew(rigged: Rigged, pretender: Pretender) -> None:
    assert rigged.exchange().action == pytest.approx([0.1])
    rigged.link.take_over()
    first = rigged.exchange(STILL, hand(-1.0))
    assert first.mode == "taken" and first.action == pytest.approx([-0.1]) and first.reasons & Reason.TAKEN
    assert first.reasons & Reason.SLEWED
    assert [round(float(rigged.exchange(STILL, hand(-1.0)).action[0]), 4) for _ in range(3)] == [-0.3, -0.5, -0.7]


def test_the_server_sees_what_the_operator_does(rigged: Rigged, pretender: Pretender) -> None:
    rigged.exchange()
    rigged.link.take_over()
    rigged.exchange(STILL, hand(0.2))
    rigged.exchange(STILL, hand(0.3))
    rigged.link.hand_back()
    rigged.exchange()
    assert [act.by_operator for act in pretender.acts] == [False, True, True, False]
    assert [act.applied for act in pretender.acts[1:]] == [pack([0.1]), pack([0.2]), pack([0.3])]


def test_without_any_service_the_operator_still_drives_and_waits_for_nobody(
    rigged: Rigged, pretender: Pretender
) -> None:
    rigged.exchange()
    pretender.answer = silent
    rigged.link.take_over()
    rigged.link._wait_s = 1e9  # a wait would hang
    assert [round(float(rigged.exchange(STILL, hand(0.4)).action[0]), 4) for _ in range(20)][-1] == 0.4


@pytest.mark.parametrize("wanted", [None, hand(np.nan), hand(np.inf), hand(0.1, 0.2), "left", [[1.0]]], ids=str)
def test_no_hand_on_the_lever_brings_the_machine_to_rest(rigged: Rigged, pretender: Pretender, wanted: Any) -> None:
    rigged.exchange()
    rigged.link.take_over()
    rigged.exchange(STILL, hand(1.0))
    drives = [rigged.exchange(STILL, wanted) for _ in range(150)]
    assert drives[-1].action == pytest.approx([0.0]) and drives[-1].reasons & Reason.FORM


def test_after_a_silent_service_handing_back_stays_silent_until_it_must_have_latched(
    rigged: Rigged, pretender: Pretender
) -> None:
    rigged.exchange()
    rigged.link.take_over()
    rigged.link._welcome = False  # as after a service that no longer knows the session
    rigged.link.hand_back()
    asked = len(pretender.acts)
    for _ in range(round(2 * (DEADLINE_S + PERIOD_S) / PERIOD_S) - 1):
        assert not rigged.exchange().fresh
    assert len(pretender.acts) == asked
    assert rigged.exchange().fresh


@settings(max_examples=60, deadline=None)
@given(
    plan=st.lists(
        st.tuples(
            st.sampled_from(["policy", "operator"]),
            st.one_of(st.none(), st.lists(st.floats(width=32), max_size=2)),
            st.lists(st.floats(width=32), max_size=3),
        ),
        max_size=10,
    )
)
def test_whoever_drives_and_however_limits_and_slew_hold(plan: list[tuple[str, Any, Any]]) -> None:
    rig = crane()
    limits = Limits.of(rig)
    rigged = Rigged(rig, "tcp://127.0.0.1:9", wait_s=0.0)
    try:
        held = limits.rest
        for driver, wanted, observation in plan:
            (rigged.link.take_over if driver == "operator" else rigged.link.hand_back)()
            action = rigged.exchange(observation, wanted).action
            assert np.isfinite(action).all()
            # What the chain leaves alone is inside the range and one slew step from what was held.
            assert limit(limits, action, held, None).action == pytest.approx(action)
            held = action
    finally:
        rigged.link.close()


def test_taking_over_latches_the_server_and_only_rearming_lets_the_policy_act_again(server: Server, pace: Pace) -> None:
    pace.until(lambda drive: drive.mode == "armed" and float(drive.action[0]) > 0.4)
    pace.link.take_over()
    pace.operator = hand(-0.2)
    pace.until(lambda drive: drive.mode == "taken" and float(drive.action[0]) == pytest.approx(-0.2))
    pace.link.hand_back()
    back = pace.until(lambda drive: drive.fresh and drive.mode == "latched")
    assert back.reasons & Reason.OPERATOR
    pace.until(lambda drive: drive.mode == "latched" and float(drive.action[0]) == 0.0)
    server.arm()
    assert pace.until(lambda drive: drive.mode == "armed").version == 1


def test_armed_while_the_operator_drives_the_policy_follows_on_from_the_operators_action(
    server: Server, pace: Pace
) -> None:
    pace.until(lambda drive: drive.mode == "armed")
    pace.link.take_over()
    pace.operator = hand(-0.2)
    pace.until(lambda drive: drive.mode == "taken" and drive.version == 1 and float(drive.action[0]) < -0.15)
    server.arm()
    taken = [pace.until(lambda drive: True) for _ in range(5)]
    assert all(drive.mode == "taken" and drive.action == pytest.approx([-0.2]) for drive in taken)
    pace.link.hand_back()
    first = pace.until(lambda drive: True)
    assert first.mode == "armed" and first.action == pytest.approx([0.0], abs=1e-6)  # one slew step of 0.2 from −0.2


def test_the_interval_is_recorded_as_a_correction_with_its_transient_marked(
    rigged: Rigged, pretender: Pretender, tmp_path: Path
) -> None:
    rigged.exchange()
    times = iter(np.arange(100) * PERIOD_S)
    with (
        DemonstrationStream(crane(), "tcp://127.0.0.1:9", tmp_path) as stream,
        TakeOver(rigged.link, stream, "Ada", transient_s=0.25, now_s=lambda: float(next(times))) as over,
    ):
        step(rigged, over)
        over.begin("it swings")
        over.begin("twice is once")
        applied = [float(step(rigged, over, hand(0.6)).action[0]) for _ in range(5)]
        over.end("success", hand(1.0, 0.0))
        step(rigged, over)
        stream.close(0.0)
    assert len(over.corrections) == 1 and over.failure is None
    (path,) = tmp_path.glob(f"*{SUFFIX}")
    spool = SpoolFile.take_up(path)
    assert spool is not None and spool.ending is not None
    assert spool.head.task == TASK and spool.head.operator == "Ada"
    assert Correction.of(spool.head.task, spool.head.notes) == Correction(version=1, transient_s=0.25)
    assert spool.head.notes.endswith("; it swings")
    assert spool.ending.samples == 5 and spool.ending.outcome == "success"
    rows = spool.read(0, 5)
    assert rows["act"][:, 0] == pytest.approx(applied)
    spool.close()


def step(rigged: Rigged, over: TakeOver, wanted: Any = None) -> Drive:
    """Exchange through the take-over, one period later."""
    rigged.clock.advance_s(PERIOD_S)
    return over.exchange(STILL, wanted)


def test_a_recording_that_fails_does_not_touch_the_driving(
    rigged: Rigged, pretender: Pretender, tmp_path: Path
) -> None:
    rigged.exchange()
    stream = DemonstrationStream(crane(), "tcp://127.0.0.1:9", tmp_path)
    over = TakeOver(rigged.link, stream, "Ada")
    over.begin()
    stream.close(0.0)
    assert step(rigged, over, hand(0.2)).action == pytest.approx([0.2])
    assert step(rigged, over, hand(0.3)).mode == "taken"
    assert over.failure is not None and "ended" in over.failure.message
    over.end()
    over.begin()
    assert over.failure is not None and step(rigged, over, hand(0.3)).mode == "taken"


@given(version=st.integers(0, 10**9 - 1), transient=st.floats(0, 9999), text=st.text(max_size=30))
def test_a_corrections_mark_is_read_as_it_was_written(version: int, transient: float, text: str) -> None:
    mark = Correction(version, transient)
    read = Correction.of(TASK, mark.notes(text))
    assert read is not None and read.version == version and read.transient_s == pytest.approx(transient, abs=5e-4)
    assert Correction.of("lift", mark.notes(text)) is None
    assert Correction.of(TASK, text[:1] + "x") is None
    assert dataclasses.is_dataclass(read)
