"""The event record: appended only, and every change to it is found."""

from __future__ import annotations

import sqlite3
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from nearhand.service.errors import StoreError
from nearhand.service.store.canonical import canonical, plain
from nearhand.service.store.events import BEFORE_FIRST, event_digest
from nearhand.service.store.store import Store


@pytest.fixture
def written(store: Store) -> Store:
    """A store with ten events."""
    for number in range(10):
        store.events.append(
            "halt", rig="yard-crane", who="an operator", why="tea", detail={"number": number, "speed": 0.1}
        )
    return store


@pytest.fixture
def tamper(tmp_path: Path, written: Store) -> Callable[[str], None]:
    """A function that changes the file behind the store's back, its triggers removed."""

    def change(statements: str) -> None:
        other = sqlite3.connect(tmp_path / "nearhand.sqlite3")
        for trigger in ("events_never_change", "events_never_go", "events_are_appended"):
            other.execute(f"DROP TRIGGER {trigger}")
        other.executescript(statements)
        other.close()

    return change


def test_an_untouched_record_is_intact(written: Store) -> None:
    verdict = written.events.verify()
    assert (verdict.intact, verdict.events, verdict.first_bad) == (True, 10, None)
    head = written.database.value("SELECT digest FROM events WHERE event = 10")
    assert head in verdict.message


def test_an_empty_record_is_intact(store: Store) -> None:
    assert store.events.verify().intact


@pytest.mark.parametrize(
    ("statements", "first_bad"),
    [
        ("UPDATE events SET why = 'coffee' WHERE event = 4", 4),
        ('UPDATE events SET detail = \'{"number":3,"speed":0.2}\' WHERE event = 4', 4),
        ("UPDATE events SET detail = 'no map' WHERE event = 4", 4),
        ("UPDATE events SET detail = detail || ' ' WHERE event = 4", 4),
        ("UPDATE events SET utc = '2001-01-01T00:00:00.000Z' WHERE event = 1", 1),
        ("UPDATE events SET digest = replace(digest, 'a', 'b') WHERE event = 7", 7),
        ("DELETE FROM events WHERE event = 1", 1),
        ("DELETE FROM events WHERE event = 5", 5),
        ("DELETE FROM events WHERE event = 10", 10),
        ("DELETE FROM events", 1),
        ("DELETE FROM events WHERE event = 5; UPDATE events SET event = event - 1 WHERE event > 5", 5),
        (
            "UPDATE events SET event = 99 WHERE event = 3; UPDATE events SET event = 3 WHERE event = 4; "
            "UPDATE events SET event = 4 WHERE event = 99",
            3,
        ),
        (
            "INSERT INTO events SELECT 11, utc, rig, what, who, why, detail, previous, digest FROM events "
            "WHERE event = 10",
            11,
        ),
    ],
)
def test_the_first_row_that_does_not_hold_is_named(
    written: Store, tamper: Callable[[str], None], statements: str, first_bad: int
) -> None:
    tamper(statements)
    verdict = written.events.verify()
    assert not verdict.intact
    assert verdict.first_bad == first_bad


def test_a_row_forged_with_a_fitting_digest_breaks_the_link_after_it(
    written: Store, tamper: Callable[[str], None]
) -> None:
    third = written.events.after(2, limit=1)[0]
    previous = str(written.database.value("SELECT previous FROM events WHERE event = 3"))
    forged = event_digest(type(third)(3, third.utc, third.rig, "rearm", third.who, third.why, third.detail), previous)
    tamper(f"UPDATE events SET what = 'rearm', digest = '{forged}' WHERE event = 3")
    assert written.events.verify().first_bad == 4


@pytest.mark.parametrize(
    "statement",
    [
        "UPDATE events SET why = 'other' WHERE event = 2",
        "DELETE FROM events WHERE event = 10",
        "INSERT OR REPLACE INTO events SELECT * FROM events WHERE event = 2",
        "INSERT INTO events SELECT 12, utc, rig, what, who, why, detail, previous, digest FROM events WHERE event = 10",
    ],
)
def test_the_database_itself_only_appends(written: Store, statement: str) -> None:
    with pytest.raises(StoreError) as caught:
        written.database.execute(statement)
    assert caught.value.code == "store.constraint"
    assert written.events.verify().intact


def test_the_first_event_follows_the_agreed_beginning(store: Store) -> None:
    row = store.events.append("start", who="keeper")
    assert store.database.value("SELECT digest FROM events") == event_digest(row, BEFORE_FIRST)


def test_an_undone_transaction_leaves_no_event(written: Store) -> None:
    with pytest.raises(LookupError), written.database.atomic():
        written.events.append("release", who="an operator")
        raise LookupError
    written.events.append("halt", who="an operator")
    verdict = written.events.verify()
    assert (verdict.intact, verdict.events) == (True, 11)


def test_an_occurrence_is_recorded_once(store: Store) -> None:
    def tell(instance: str, number: int) -> object:
        return store.events.append_occurrence(instance, number, "trip", rig="r", utc="u", detail={"reason": "gap"})

    assert [tell("a", 1) is None, tell("a", 2) is None, tell("a", 1) is None, tell("b", 1) is None] == [
        False, False, True, False,
    ]  # fmt: skip
    assert [store.events.last_occurrence(instance) for instance in "abc"] == [2, 1, 0]
    assert store.events.verify().events == 3


values = st.recursive(
    st.none()
    | st.booleans()
    | st.integers()
    | st.floats()
    | st.binary(max_size=8)
    | st.text(st.characters(codec="utf-8")),
    lambda inner: (
        st.lists(inner, max_size=3) | st.dictionaries(st.text(st.characters(codec="utf-8")), inner, max_size=3)
    ),
    max_leaves=8,
)


@given(details=st.lists(st.dictionaries(st.text(st.characters(codec="utf-8")), values, max_size=3), max_size=4))
def test_whatever_is_told_the_record_stays_intact(
    tmp_path_factory: pytest.TempPathFactory, details: list[dict[str, Any]]
) -> None:
    store = Store(tmp_path_factory.mktemp("events") / "n.sqlite3")
    for detail in details:
        store.events.append("told", who="w", detail=detail)
    rows, verdict = store.events.after(0), store.events.verify()
    store.close()
    assert (verdict.intact, verdict.events) == (True, len(details))
    assert [canonical(row.detail) for row in rows] == [canonical(plain(detail)) for detail in details]


def test_canonical_json_is_one_text_per_value() -> None:
    # Sorted keys, no spaces, UTF-8 unescaped: the properties of RFC 8785 that our values need.
    assert canonical({"b": [1, 0.5], "a": "ü"}) == '{"a":"ü","b":[1,0.5]}'


def test_events_are_listed_by_rig_and_in_order(written: Store) -> None:
    written.events.append("halt", rig="other", who="w")
    assert [row.event for row in written.events.after(7, rig="yard-crane", limit=2)] == [8, 9]
    assert [row.rig for row in written.events.after(0, rig="other")] == ["other"]
