"""One rig's state machine: what trips, what latches, what an operator can do, what stays as it was."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from nearhand.service.action.governor import Decision, Governor
from nearhand.service.bus.action_messages import Reason
from nearhand.service.envelope.braking import Guards
from nearhand.service.envelope.chain import limit
from nearhand.service.envelope.limits import Limits
from nearhand.service.errors import ConflictError, PolicyFormatError
from nearhand.service.policy.format import PolicyFile
from nearhand.service.policy.network import Float32, episode_windows
from nearhand.service.rigs import Rig

RigWith = Callable[..., Rig]
FileWith = Callable[..., PolicyFile]
PERIOD_NS = 20_000_000
CALM = np.zeros(3, dtype=np.float32)


class Driver:
    """Asks a governor once per period on a clock of its own."""

    def __init__(self, governor: Governor) -> None:
        self.governor = governor
        self.seq = 0
        self.now_ns = 1_000_000_000
        governor.begin_session("s", self.now_ns)

    def ask(self, observation: Any = CALM, *, after_ns: int = PERIOD_NS, late_ns: int = 0, **changes: Any) -> Decision:
        """Advance the clock and ask."""
        self.seq += 1
        self.now_ns += after_ns
        row = np.asarray(observation, dtype=np.float32)
        with np.errstate(over="ignore", invalid="ignore"):
            return self.governor.act(row, self.seq, self.now_ns - late_ns, self.now_ns, **changes)


def armed(rig: Rig, file: PolicyFile, **options: Any) -> Driver:
    """Return a driver of an armed governor."""
    governor = Governor(rig, **options)
    governor.load(1, file)
    governor.arm()
    return Driver(governor)


def test_a_fresh_governor_is_empty_and_a_loaded_one_latched(rig_with: RigWith, file_with: FileWith) -> None:
    governor = Governor(rig_with())
    driver = Driver(governor)
    assert (governor.mode, governor.version) == ("empty", 0)
    first = driver.ask()
    assert first.action == pytest.approx([0.0, 0.25]) and first.reasons & Reason.EMPTY
    with pytest.raises(ConflictError):
        governor.arm()
    governor.load(4, file_with())
    assert (governor.mode, governor.version) == ("latched", 4)
    assert driver.ask().action == pytest.approx([0.0, 0.25])
    governor.arm()
    assert driver.ask().mode == "armed"


def test_an_armed_policy_is_approached_within_slew_and_then_followed(rig_with: RigWith, file_with: FileWith) -> None:
    driver = armed(rig_with(), file_with((0.5, 0.5)))
    first = driver.ask()
    assert first.action == pytest.approx([0.2, 0.45]) and first.reasons == Reason.SLEWED
    assert driver.ask().action == pytest.approx([0.4, 0.5])
    third = driver.ask()
    assert third.action == pytest.approx([0.5, 0.5])
    assert (third.mode, third.version, third.reasons) == ("armed", 1, Reason.NONE)
    assert driver.governor.counts["interventions"] == 2


def test_out_of_range_is_clipped_and_said(rig_with: RigWith, file_with: FileWith) -> None:
    driver = armed(rig_with(), file_with((9.0, 0.25)))
    for _ in range(6):
        last = driver.ask()
    assert last.action[0] == pytest.approx(1.0) and last.reasons == Reason.CLIPPED


@pytest.mark.parametrize(
    "bad", [[np.nan, 0, 0], [np.inf, 0, 0], [np.inf, -np.inf, 0], [0, 0], [[0, 0, 0]], [0, 0, 0, 0]], ids=str
)
def test_a_malformed_observation_trips_and_stays_tripped(rig_with: RigWith, file_with: FileWith, bad: Any) -> None:
    driver = armed(rig_with(), file_with())
    driver.ask()
    tripped = driver.ask(bad)
    assert tripped.mode == "latched" and tripped.reasons & Reason.FORM and tripped.reasons & Reason.LATCHED
    assert np.isfinite(tripped.action).all()
    for _ in range(50):
        after = driver.ask()
    assert after.mode == "latched" and after.action == pytest.approx([0.0, 0.25])
    assert list(driver.governor.happened) == [("trip", "form")]


def test_a_gap_latches_even_before_the_next_query(rig_with: RigWith, file_with: FileWith) -> None:
    driver = armed(rig_with(), file_with())
    driver.ask()
    due = driver.governor.due_ns()
    assert due is not None
    driver.governor.tick(due - 1)
    modes = [str(driver.governor.mode)]
    driver.governor.tick(due)
    assert [*modes, driver.governor.mode] == ["armed", "latched"] and driver.governor.reasons & Reason.GAP
    assert driver.governor.due_ns() is None


def test_the_return_of_messages_does_not_restart_and_arming_moves_nothing(
    rig_with: RigWith, file_with: FileWith
) -> None:
    # A reset permits restarting and does not restart (ISO 13850; Directive 2006/42/EC, Annex I, 1.2.4.3; from memory).
    driver = armed(rig_with(), file_with())
    driver.ask()
    assert driver.ask(after_ns=101_000_000).mode == "latched"
    for _ in range(100):
        assert driver.ask().mode == "latched"
    before = driver.governor.last_action
    driver.governor.arm()
    assert driver.governor.mode == "armed"
    assert np.array_equal(driver.governor.last_action, before)
    driver.governor.tick(driver.now_ns + 10**12)
    assert driver.governor.mode == "armed"  # nothing is expected before the rig asks
    assert driver.ask(after_ns=10**10).mode == "armed"


def test_arming_an_armed_rig_does_not_stop_its_watchdog(rig_with: RigWith, file_with: FileWith) -> None:
    driver = armed(rig_with(), file_with())
    driver.ask()
    driver.governor.arm()
    driver.governor.tick(driver.now_ns + 101_000_000)
    assert driver.governor.mode == "latched"


def test_a_late_observation_trips(rig_with: RigWith, file_with: FileWith) -> None:
    driver = armed(rig_with(), file_with())
    driver.ask()
    assert driver.ask(late_ns=90_000_000).mode == "armed"
    late = driver.ask(late_ns=110_000_000)
    assert late.mode == "latched" and late.reasons & Reason.LATE


def test_an_old_number_is_answered_as_such_and_never_acted_on(rig_with: RigWith, file_with: FileWith) -> None:
    driver = armed(rig_with(), file_with(gain=0.2))
    driver.ask([0.5, 0, 0])
    second = driver.ask([1.0, 0, 0])
    for seq in (2, 1, 0):
        old = driver.governor.act(np.full(3, 5.0, dtype=np.float32), seq, 0, driver.now_ns + PERIOD_NS)
        assert old.reasons & Reason.OLD and np.array_equal(old.action, second.action)
    assert driver.governor.counts["old"] == 3
    assert driver.governor.last_observation == pytest.approx([1.0, 0, 0])
    # Neither do old numbers feed the watchdog.
    driver.governor.tick(driver.now_ns + 100_000_001)
    assert driver.governor.mode == "latched"


@pytest.mark.filterwarnings("error")
def test_an_output_that_is_not_finite_trips(rig_with: RigWith, file_with: FileWith) -> None:
    driver = armed(rig_with(), file_with(poison=True))
    tripped = driver.ask()
    assert tripped.mode == "latched" and tripped.reasons & Reason.OUTPUT
    assert tripped.action == pytest.approx([0.0, 0.25])


def test_novelty_trips_m_of_n_latches_and_can_be_rearmed(rig_with: RigWith, file_with: FileWith) -> None:
    driver = armed(rig_with(), file_with(gate=True))
    strange = [40.0, 0, 0]
    assert driver.ask(strange).mode == "armed"
    assert driver.ask().novelty > 0.1
    assert driver.ask().mode == "armed"
    assert driver.ask(strange).mode == "armed"  # the first strange one has left the window of three
    tripped = driver.ask(strange)
    assert tripped.mode == "latched" and tripped.reasons & Reason.NOVEL
    assert tripped.novelty == pytest.approx(0.05)
    assert driver.ask().mode == "latched"
    driver.governor.arm()
    assert driver.ask(strange).mode == "armed"
    assert driver.ask(strange).mode == "latched"
    assert list(driver.governor.happened) == [("trip", "novel"), ("trip", "novel")]


def test_novelty_only_watches_when_told_so(rig_with: RigWith, file_with: FileWith) -> None:
    driver = armed(rig_with(), file_with(gate=True), gate_trips=False)
    for _ in range(10):
        answer = driver.ask([40.0, 0, 0])
    assert answer.mode == "armed" and answer.novelty < 0.1 and driver.governor.counts["novel"] == 9


def test_without_a_gate_novelty_is_one_and_says_nothing(rig_with: RigWith, file_with: FileWith) -> None:
    driver = armed(rig_with(), file_with())
    assert driver.ask([1e30, 0, 0]).novelty == 1.0
    assert driver.governor.epsilon == 1.0


def test_epsilon_is_never_finer_than_the_calibration_allows(rig_with: RigWith, file_with: FileWith) -> None:
    governor = Governor(rig_with(novelty={"epsilon": 0.01}))
    governor.load(1, file_with(gate=True))
    assert governor.epsilon == pytest.approx(1 / 20)


def test_an_operator_can_stop_it_in_every_mode(rig_with: RigWith, file_with: FileWith) -> None:
    # An emergency stop function is available in all modes (ISO 13850, 4.1.1; from memory).
    driver = armed(rig_with(), file_with())
    driver.ask()
    for _ in range(2):
        driver.governor.latch(Reason.OPERATOR)
        assert driver.ask().mode == "latched" and driver.governor.reasons & Reason.OPERATOR
    driver.governor.load(0, None)
    driver.governor.latch(Reason.OPERATOR)
    assert driver.ask().mode == "empty"


def test_a_swap_while_armed_acts_in_the_very_next_period(rig_with: RigWith, file_with: FileWith) -> None:
    driver = armed(rig_with(), file_with((0.1, 0.25)))
    driver.ask()
    driver.governor.load(2, file_with((-0.1, 0.25)))
    swapped = driver.ask()
    assert (swapped.mode, swapped.version) == ("armed", 2) and swapped.action[0] == pytest.approx(-0.1)
    driver.governor.load(1, file_with((0.1, 0.25)))
    assert driver.ask().version == 1


def test_a_swap_to_a_longer_history_finds_the_past_in_place(rig_with: RigWith, file_with: FileWith) -> None:
    generator = np.random.default_rng(0)
    rows = generator.standard_normal((9, 3)).astype(np.float32)
    driver = armed(rig_with(), file_with((0.3, 0.3), gain=0.2))
    actions = [driver.ask(row).action for row in rows[:-1]]
    longer = file_with((0.3, 0.3), past=(3, 2))
    driver.governor.load(2, longer)
    driver.ask(rows[-1])
    expected = episode_windows(longer.policy, rows, np.array(actions), np.array([0.0, 0.25], dtype=np.float32))[-1]
    serving = driver.governor._serving
    assert serving is not None
    assert np.array_equal(serving.window, expected)


@pytest.mark.parametrize("past", [(0, 0), (1, 2), (16, 16)])
def test_windows_are_those_of_training_over_any_length(
    rig_with: RigWith, file_with: FileWith, past: tuple[int, int]
) -> None:
    generator = np.random.default_rng(1)
    rows = generator.standard_normal((1200, 3)).astype(np.float32)
    file = file_with((0.3, 0.3), gain=0.2, past=past)
    driver = armed(rig_with(), file)
    actions, windows = [], []
    for row in rows:
        actions.append(driver.ask(row).action)
        serving = driver.governor._serving
        assert serving is not None
        windows.append(serving.window.copy())
    rest = np.array([0.0, 0.25], dtype=np.float32)
    assert np.array_equal(np.array(windows), episode_windows(file.policy, rows, np.array(actions[:-1]), rest))


def test_a_version_for_other_channels_or_with_half_a_gate_changes_nothing(
    rig_with: RigWith, file_with: FileWith
) -> None:
    driver = armed(rig_with(), file_with())
    broken: list[PolicyFile] = [file_with(rig="other"), file_with(past=(1, 0), gate=True)]
    half = file_with(gate=True)
    broken[1] = PolicyFile(**{**{k: getattr(broken[1], k) for k in half.__slots__}, "novelty": half.novelty})
    broken.append(PolicyFile(**{**{k: getattr(half, k) for k in half.__slots__}, "novelty": {"centre": CALM}}))
    for file in broken:
        with pytest.raises(PolicyFormatError):
            driver.governor.load(2, file)
        assert driver.ask().version == 1 and driver.governor.mode == "armed"


def test_slew_starts_from_what_the_rig_truly_holds_if_that_is_an_action(rig_with: RigWith, file_with: FileWith) -> None:
    driver = armed(rig_with(), file_with((0.5, 0.5)))
    held = np.array([-0.9, 2.0], dtype=np.float32)
    assert driver.ask(applied=held).action == pytest.approx([-0.7, 1.8])
    for bad in ([np.nan, 0.0], [5.0, 0.0], [0.0], [np.inf, 0.0]):
        before = driver.governor.last_action
        after = driver.ask(applied=np.array(bad, dtype=np.float32)).action
        assert (np.abs(after - before) <= 0.2 + 1e-6).all()
    assert driver.governor.counts["applied_unusable"] == 4


def test_a_new_session_starts_its_numbers_and_its_clock_again(rig_with: RigWith, file_with: FileWith) -> None:
    driver = armed(rig_with(), file_with())
    driver.ask()
    driver.governor.begin_session("t", driver.now_ns)
    answer = driver.governor.act(CALM, 0, 10**17, driver.now_ns + PERIOD_NS)
    assert answer.mode == "armed" and not answer.reasons & Reason.OLD
    # A session that begins after the deadline of an armed rig finds it latched.
    driver.governor.begin_session("u", driver.now_ns + 10**10)
    assert driver.governor.mode == "latched"


def test_braking_knows_the_actions_of_the_past(rig_with: RigWith, file_with: FileWith) -> None:
    rig = rig_with(
        braking=[
            {
                "position": "o0", "velocity": "o1", "action": "u", "low": -2.0, "high": 2.0, "deceleration": 0.8,
                "reaction_s": 0.2,
            }
        ]
    )  # fmt: skip
    driver = armed(rig, file_with((0.9, 0.25)))
    limits = Limits.of(rig)
    guards, held = Guards(limits), limits.rest
    proposal = np.array([0.9, 0.25], dtype=np.float32)
    place = speed = 0.0
    for _ in range(100):
        row = np.array([place, speed, 0.0], dtype=np.float32)
        guards.note(held)
        held = limit(limits, proposal, held, row, guards).action
        answer = driver.ask(row)
        assert np.array_equal(answer.action, held)
        place, speed = place + 0.02 * speed, speed + 0.02 * float(held[0])
    assert driver.governor.counts["braked"] > 10


numbers = st.floats(width=32) | st.sampled_from([0.0, np.nan, np.inf, -np.inf, 3.4e38, -3.4e38])
steps = st.tuples(
    st.lists(numbers, min_size=3, max_size=3),
    st.none() | st.lists(numbers, min_size=2, max_size=2),
    st.integers(0, 150),
    st.sampled_from(["", "arm", "latch", "swap", "poison", "empty", "session", "old"]),
)


@pytest.mark.parametrize("kind", ["ramp", "hold", "rest"])
@settings(max_examples=60)
@given(plan=st.lists(steps, max_size=25), bias=st.floats(-50, 50, width=32), gain=st.floats(-50, 50, width=32))
def test_whatever_happens_the_action_is_finite_in_limits_and_in_slew(
    rig_with: RigWith, file_with: FileWith, kind: str, plan: list[Any], bias: float, gain: float
) -> None:
    rig = rig_with(
        fallback={"kind": kind, "hold_s": 0.1 if kind == "hold" else 0.0},
        braking=[
            {
                "position": "o0", "velocity": "o1", "action": "u", "low": -2.0, "high": 2.0, "deceleration": 0.8,
                "reaction_s": 0.03,
            }
        ],
    )  # fmt: skip
    governor = Governor(rig)
    governor.load(1, file_with((bias, bias), gain=gain, gate=True))
    governor.arm()
    driver = Driver(governor)
    low, high = np.array([-1.0, -0.5], dtype=np.float32), np.array([1.0, 2.0], dtype=np.float32)
    step = 10.0 * 0.02 + 2e-7
    held: Float32 = np.array([0.0, 0.25], dtype=np.float32)
    for observation, applied, after_ms, deed in plan:
        if deed == "arm" and governor.version:
            governor.arm()
        elif deed == "latch":
            governor.latch(Reason.OPERATOR)
        elif deed in ("swap", "poison"):
            governor.load(2, file_with((-bias, bias), past=(2, 3), poison=deed == "poison"))
        elif deed == "empty":
            governor.load(0, None)
        elif deed == "session":
            governor.begin_session("again", driver.now_ns)
            held = np.array([0.0, 0.25], dtype=np.float32)
        elif deed == "old":
            driver.seq -= 2
        told = None if applied is None else np.array(applied, dtype=np.float32)
        answer = driver.ask(observation, after_ns=after_ms * 1_000_000, applied=told)
        if deed != "old" and told is not None and ((told >= low - 1e-6) & (told <= high + 1e-6)).all():
            held = np.clip(told, low, high)
        assert answer.action.dtype == np.float32 and np.isfinite(answer.action).all()
        assert (answer.action >= low).all() and (answer.action <= high).all()
        assert 0.0 <= answer.novelty <= 1.0
        assert (answer.mode == "armed") == (governor.mode == "armed")
        if kind != "rest" or answer.mode == "armed":
            assert (np.abs(answer.action - held) <= step).all() or answer.reasons & Reason.OLD
        held = answer.action
