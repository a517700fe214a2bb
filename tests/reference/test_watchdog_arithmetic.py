"""Watchdog, sequence and slew arithmetic against values computed from their closed forms, and what RFCs say."""

from __future__ import annotations

import math

import numpy as np
import pytest

from nearhand.service.action.governor import Governor
from nearhand.service.bus.action_messages import Reason
from nearhand.service.envelope.chain import limit, slew
from nearhand.service.envelope.limits import Float32, Limits
from nearhand.service.envelope.watchdog import Watchdog
from nearhand.service.rigs import Rig

MS = 1_000_000


def vector(*values: float) -> Float32:
    """Return a float32 vector."""
    return np.array(values, dtype=np.float32)


def rig(*, slew_per_s: float = 3.0, period_s: float = 0.1) -> Rig:
    """Return a rig with one action channel in [−1, 1]."""
    return Rig.model_validate(
        {
            "name": "r",
            "title": "r",
            "observations": [{"name": "o", "unit": "", "low": -1.0, "high": 1.0}],
            "actions": [{"name": "a", "unit": "", "low": -1.0, "high": 1.0, "slew_per_s": slew_per_s}],
            "timing": {"period_s": period_s, "deadline_s": 0.1, "lease_s": 0.2},
        }
    )


def test_clip_and_slew_compose_in_either_order_from_inside() -> None:
    # Box [−1, 1], slew step 0.3, previous 0.9, wanted 2: clip then slew and slew then clip agree on 1.0.
    limits = Limits.of(rig())
    assert limit(limits, vector(2.0), vector(0.9), None).action == pytest.approx([1.0])
    generator = np.random.default_rng(0)
    for _ in range(200):
        previous, wanted = generator.uniform(-1, 1), generator.uniform(-5, 5)
        one = previous + np.clip(np.clip(wanted, -1, 1) - previous, -0.3, 0.3)
        other = np.clip(previous + np.clip(wanted - previous, -0.3, 0.3), -1, 1)
        assert one == pytest.approx(other)
        assert limit(limits, vector(wanted), vector(previous), None).action == pytest.approx([one], abs=1e-6)


def test_from_outside_a_tightened_box_the_box_wins() -> None:
    # Previous 1.5, wanted 2: 1.2 would break the box, 1.0 breaks slew by 0.2. Ours keeps the box.
    assert slew(Limits.of(rig()), vector(2.0), vector(1.5)) == pytest.approx([1.0])


def test_a_step_takes_its_number_of_samples() -> None:
    # n = ⌈|step| / (r·dt)⌉: step 1, r = 3/s, dt = 0.1 s → 0.3, 0.6, 0.9, 1.0.
    limits = Limits.of(rig())
    value, course = vector(0.0), []
    for _ in range(math.ceil(1 / 0.3)):
        value = limit(limits, vector(1.0), value, None).action
        course.append(float(value[0]))
    assert course == pytest.approx([0.3, 0.6, 0.9, 1.0], abs=1e-6)


def test_excess_delay_over_the_quickest_is_what_counts() -> None:
    # Sending and receiving times of a worked jitter example (computed after RFC 3550, 6.4.1): 0, 20 … and 5, 26, 44 …
    sent, received = [0, 20, 40, 60, 80, 100], [5, 26, 44, 70, 85, 107]
    # Transit 5, 6, 4, 10, 5, 7; above the smallest so far: 0, 1, 0, 6, 1, 3.
    watchdog = Watchdog(0.0045)
    late = [watchdog.received(s * MS, r * MS) for s, r in zip(sent, received, strict=True)]
    assert late == [False, False, False, True, False, False]


@pytest.mark.parametrize(
    ("numbers", "old"), [([10, 11, 11, 12, 14], [11]), ([1, 2, 4, 3, 5], [3]), ([1, 2**63 - 1, 2], [2])]
)
def test_repetition_and_wrong_order_are_told(numbers: list[int], old: list[int]) -> None:
    # Of the communication errors that IEC 61784-3 lists, repetition, wrong order, loss and insertion are found by the
    # sequence number, delay by the time expectation (from memory).
    governor = Governor(rig())
    governor.begin_session("s", 0)
    told = []
    for index, seq in enumerate(numbers):
        decision = governor.act(vector(0.0), seq, index, index)
        if decision.reasons & Reason.OLD:
            told.append(seq)
    assert told == old


def test_the_sequence_number_does_not_wrap_in_a_machines_life() -> None:
    # 2^bits / rate: 16 bits at 50 Hz wrap after 1310.72 s; 63 bits at 1 kHz after some 292 million years.
    governor = Governor(rig())
    governor.begin_session("s", 0)
    assert not governor.act(vector(0.0), 2**63 - 2, 0, 0).reasons & Reason.OLD
    assert not governor.act(vector(0.0), 2**63 - 1, 1, 1).reasons & Reason.OLD


def test_the_gap_is_measured_to_the_nanosecond() -> None:
    watchdog = Watchdog(0.1)
    watchdog.received(0, 10**18)
    assert not watchdog.is_overdue(10**18 + 100 * MS)
    assert watchdog.is_overdue(10**18 + 100 * MS + 1)
