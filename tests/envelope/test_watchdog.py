"""Freshness on the receiver's clock alone."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from nearhand.service.envelope.watchdog import Watchdog

MS = 1_000_000


def test_nothing_is_overdue_before_the_first_query_and_after_a_pause() -> None:
    watchdog = Watchdog(0.1)
    assert not watchdog.is_overdue(10**15)
    assert watchdog.due_ns() is None
    watchdog.received(0, 0)
    assert watchdog.is_overdue(101 * MS)
    watchdog.pause()
    assert not watchdog.is_overdue(10**15)


def test_a_gap_is_too_long_just_after_the_deadline() -> None:
    watchdog = Watchdog(0.1)
    watchdog.received(0, 50 * MS)
    assert not watchdog.is_overdue(150 * MS)
    due = watchdog.due_ns()
    assert due == 150 * MS + 1
    assert watchdog.is_overdue(due)


@given(offset=st.integers(-(10**18), 10**18), transit=st.integers(0, 10**9))
def test_neither_the_clocks_offset_nor_a_constant_transit_counts(offset: int, transit: int) -> None:
    watchdog = Watchdog(0.1)
    for step in range(50):
        sent = step * 20 * MS
        assert not watchdog.received(sent, sent + offset + transit)
    late = 50 * 20 * MS
    assert watchdog.received(late, late + offset + transit + 102 * MS)


def test_a_drift_between_the_clocks_is_followed_and_a_sudden_delay_is_not() -> None:
    watchdog = Watchdog(0.1)
    drift = 50e-6  # 50 µs per s, more than quartz clocks differ by
    for step in range(200_000):
        sent = step * 20 * MS
        assert not watchdog.received(sent, sent + round(sent * drift))
    sent = 200_000 * 20 * MS
    assert watchdog.received(sent, sent + round(sent * drift) + 110 * MS)


@pytest.mark.parametrize("excess_ms", [0, 50, 99])
def test_up_to_the_deadline_is_in_time(excess_ms: int) -> None:
    watchdog = Watchdog(0.1)
    watchdog.received(0, 0)
    assert not watchdog.received(20 * MS, (20 + excess_ms) * MS)


def test_a_new_session_has_another_clock() -> None:
    watchdog = Watchdog(0.1)
    watchdog.received(0, 0)
    watchdog.forget()
    assert not watchdog.received(0, 10**12)
