"""A shadow sees everything, is seen nowhere, and never acts."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import numpy as np
import pytest

from nearhand.service.action.shadow import BY_FALLBACK, BY_OPERATOR, BY_POLICY, MOST_ROWS, Shadow
from nearhand.service.bus.arrays import pack
from nearhand.service.bus.control_messages import Accompany, ControlReply, Drain, DrainReply
from nearhand.service.bus.message import ErrorReply
from nearhand.service.policy.format import PolicyFile, sha256, write_policy
from nearhand.service.rigs import Rig

if TYPE_CHECKING:
    from tests.action.conftest import Lane, Served

RigWith = Callable[..., Rig]
FileWith = Callable[..., PolicyFile]


def accompany(served: Served, version: int, file: PolicyFile | None) -> Any:
    """Have a version look on."""
    data = b"" if file is None else write_policy(file)
    return served.do(Accompany, rig="rig", version=version, policy=data, sha256=sha256(data) if data else "")


def rows(served: Served, after: int = 0) -> dict[str, Any]:
    """Return what the shadow has seen, decoded."""
    reply = served.do(Drain, after=0, shadows={"rig": after})
    assert isinstance(reply, DrainReply)
    told = dict(reply.shadows["rig"])
    for name in ("would", "done"):
        told[name] = np.frombuffer(told[name], dtype="<f4").reshape(-1, 2)
    told["driver"] = list(told["driver"])
    return told


@pytest.fixture
def lane(served: Served, rig_with: RigWith, file_with: FileWith) -> Lane:
    """An armed rig with version 1 in service, and version 2 looking on."""
    rig = rig_with()
    served.load(rig, 1, file_with((0.1, 0.3)))
    served.arm(rig)
    made = served.lane(rig)
    made.hello()
    assert isinstance(accompany(served, 2, file_with((-0.4, 0.5), gain=1.0)), ControlReply)
    return made


def test_would_be_actions_stand_beside_what_was_done(served: Served, lane: Lane) -> None:
    for value in (0.0, 0.1, 0.2):
        assert lane.action((value, 0.0, 0.0)).version == 1
    told = rows(served)
    assert (told["version"], told["first"], told["count"]) == (2, 1, 2)
    assert told["would"] == pytest.approx(np.array([[-0.4, 0.5], [-0.3, 0.5]]))
    assert told["done"] == pytest.approx(np.array([[0.1, 0.3], [0.1, 0.3]]))
    assert told["driver"] == [BY_POLICY, BY_POLICY]


def test_beside_the_operator_what_the_operator_did_is_taken_from_the_rig(served: Served, lane: Lane) -> None:
    lane.action()
    lane.action(by_operator=True, applied=pack([0.1, 0.3]))
    lane.action(by_operator=True, applied=pack([-0.05, 0.25]))
    lane.action(applied=pack([-0.1, 0.2]))
    lane.action()
    told = rows(served)
    assert told["done"] == pytest.approx(np.array([[0.1, 0.3], [-0.05, 0.25], [-0.1, 0.2], told["done"][3]]))
    assert told["driver"] == [BY_POLICY, BY_OPERATOR, BY_OPERATOR, BY_FALLBACK]


def test_a_shadow_changes_no_reply(served: Served, lane: Lane) -> None:
    before = [lane.action((0.1, 0.0, 0.0)) for _ in range(5)]
    accompany(served, 0, None)
    after = [lane.action((0.1, 0.0, 0.0)) for _ in range(5)]
    assert [reply.action for reply in before[2:]] == [reply.action for reply in after[2:]]
    assert {reply.version for reply in before + after} == {1}


def test_nothing_is_paired_over_a_gap_in_what_was_seen(served: Served, lane: Lane) -> None:
    lane.action()
    lane.action((np.nan, 0.0, 0.0))
    lane.action()
    lane.hello(session="s1")
    lane.seq = 0
    lane.action()
    assert rows(served)["count"] == 0
    lane.action()
    assert rows(served)["count"] == 1


def test_a_version_for_another_rig_is_refused_and_the_present_shadow_stays(
    served: Served, lane: Lane, file_with: FileWith
) -> None:
    refused = accompany(served, 3, file_with(rig="other"))
    assert isinstance(refused, ErrorReply) and refused.code == "policy.rig"
    lane.action()
    lane.action()
    assert rows(served)["version"] == 2


def test_a_new_shadow_counts_on_from_the_last(served: Served, lane: Lane, file_with: FileWith) -> None:
    for _ in range(4):
        lane.action()
    accompany(served, 4, file_with((0.0, 0.0)))
    lane.action()
    lane.action()
    told = rows(served, after=3)
    assert (told["version"], told["first"], told["count"]) == (4, 4, 1)


def test_what_nobody_drains_is_bounded_and_shows_as_a_gap(file_with: FileWith) -> None:
    from nearhand.service.action.serving import History

    shadow = Shadow(1, file_with().policy)
    observed, acted = History(3), History(2)
    observed.fill(np.zeros(3, dtype=np.float32))
    for step in range(MOST_ROWS + 11):
        acted.push(np.array([step, 0.0], dtype=np.float32))
        shadow.look(observed, acted, BY_POLICY)
    told = shadow.after(0, 5)
    assert (told["first"], told["count"]) == (11, 5)
    assert np.frombuffer(told["done"], dtype="<f4")[0] == 11.0
