"""Credit: a bounded number of bytes under way, shared by whoever is sending."""

from __future__ import annotations

from hypothesis import given
from hypothesis import strategies as st

from nearhand.service.clock import FakeClock
from nearhand.service.keeper.credit import BUDGET_BYTES, MOST_CHUNKS, Credit

MIB = 1024 * 1024


def test_small_chunks_get_the_most_there_is() -> None:
    credit = Credit(FakeClock())
    credit.heard("e1", 500)
    assert credit.chunks("e1") == MOST_CHUNKS


def test_large_chunks_and_many_senders_get_less() -> None:
    credit = Credit(FakeClock())
    credit.heard("e1", 4 * MIB)
    assert credit.chunks("e1") == BUDGET_BYTES // (4 * MIB) == 8
    credit.heard("e2", 500)
    assert credit.chunks("e1") == 4
    credit.forget("e2")
    assert credit.chunks("e1") == 8


def test_who_falls_silent_gives_its_share_back() -> None:
    clock = FakeClock()
    credit = Credit(clock)
    credit.heard("e1", 4 * MIB)
    credit.heard("e2", 4 * MIB)
    clock.advance_s(4)
    credit.heard("e1", 4 * MIB)
    assert credit.chunks("e1") == 4
    clock.advance_s(2)
    assert credit.chunks("e1") == 8


@given(st.lists(st.tuples(st.sampled_from("abcdef"), st.integers(1, 8 * MIB), st.integers(0, 3)), max_size=40))
def test_nobody_is_ever_shut_out_and_the_budget_holds(steps: list[tuple[str, int, int]]) -> None:
    clock = FakeClock()
    credit = Credit(clock)
    largest: dict[str, int] = {}
    for episode, size, pause_s in steps:
        credit.heard(episode, size)
        largest[episode] = max(size, largest.get(episode, 0))
        given_out = {name: credit.chunks(name) for name in largest}
        assert all(1 <= chunks <= MOST_CHUNKS for chunks in given_out.values())
        assert given_out[episode] == 1 or given_out[episode] * size <= BUDGET_BYTES
        clock.advance_s(pause_s)
