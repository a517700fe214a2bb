"""Braking against elementary kinematics: values computed with NumPy from the closed forms named beside them."""

from __future__ import annotations

import math
from typing import Any

import pytest

from nearhand.service.envelope.braking import Brake, easing_s, towards_standstill
from nearhand.service.envelope.limits import Axis

AT_ONCE = 1e15


def brake(**changes: Any) -> Brake:
    """Return a brake of an accelerated axis without easing, delay or ramp."""
    fields: dict[str, Any] = {
        "accelerates": True, "strongest": 10.0, "deceleration": 1.0, "ramp_per_s": AT_ONCE, "hold_s": 0.0,
        "period_s": 0.02,
    }  # fmt: skip
    return Brake(**{**fields, **changes})


@pytest.mark.parametrize(
    ("speed", "deceleration", "reaction_s", "distance"),
    # d = v·t + v²/(2a)
    [(1, 1, 0, 0.5), (1.5, 0.8, 0.25, 1.78125), (0.5, 0.3, 0.1, 0.46666666666667), (2, 1.2, 0.4, 2.4666666666667)],
)
def test_stopping_distance(speed: float, deceleration: float, reaction_s: float, distance: float) -> None:
    whole = brake(deceleration=deceleration, hold_s=reaction_s)
    assert whole.furthest(speed, 0.0) == pytest.approx(distance, abs=1e-12)
    # The same time as a pending action, or a speed in place of an acceleration, gives the same distance.
    parts = brake(deceleration=deceleration, period_s=reaction_s or 1e-9)
    assert parts.furthest(speed, 0.0, [0.0]) == pytest.approx(distance, abs=1e-8)
    driven = brake(accelerates=False, deceleration=deceleration, hold_s=reaction_s)
    assert driven.furthest(0.0, speed) == pytest.approx(distance, abs=1e-12)


@pytest.mark.parametrize(
    ("distance", "deceleration", "reaction_s", "speed"),
    # v = −a·t + √(a²t² + 2·a·d)
    [
        (1, 1, 0, 1.4142135623731), (0.5, 0.8, 0.25, 0.71651513899117), (0.2, 0.3, 0.1, 0.31770677301427),
    ],
)  # fmt: skip
def test_soft_limit_speed(distance: float, deceleration: float, reaction_s: float, speed: float) -> None:
    driven = brake(accelerates=False, deceleration=deceleration, hold_s=reaction_s)
    found = driven.highest(distance, 0.0, 10.0, 0.0)
    assert speed - 10.0 / 2**19 <= found <= speed + 1e-10
    assert driven.highest(distance, 0.0, speed - 1e-9, 0.0) == speed - 1e-9


@pytest.mark.parametrize(
    ("jerk", "distance"),
    # tj = a/j; d = v·tj − j·tj³/6 + v1²/(2a), v1 = v − j·tj²/2; v = a = 1
    [(4.0, 0.62239583333), (10.0, 0.54958333333)],
)
def test_braking_that_ramps_in(jerk: float, distance: float) -> None:
    assert brake(ramp_per_s=jerk).furthest(1.0, 0.0) == pytest.approx(distance, abs=1e-9)


def test_a_ramp_that_ends_before_full_braking_is_a_jerk_limited_stop() -> None:
    # v = 0.02, j = 4: the speed is gone at t = √(2v/j), before a = 1 is reached; x = v·t − j·t³/6, here in closed form.
    t = math.sqrt(2 * 0.02 / 4)
    assert brake(ramp_per_s=4.0).furthest(0.02, 0.0) == pytest.approx(0.02 * t - 4 * t**3 / 6, abs=1e-12)


@pytest.mark.parametrize(
    ("speed", "zero_order_hold", "semi_implicit"),
    # deceleration 1 in steps of 0.1 s; remainder formula (v² − r²)/(2a) + r·dt/2
    [(1.0, 0.5, 0.45), (1.03, 0.5315, 0.480)],
)
def test_sampled_braking_stops_within_the_distance_and_its_margin(
    speed: float, zero_order_hold: float, semi_implicit: float
) -> None:
    axis = Axis(0, 1, 0, True, 0.0, 1.0, 1.0, 0.0)
    eased = brake(period_s=0.1, easing_s=easing_s(axis, 0.1))
    allowed = eased.furthest(speed, 0.0) + eased.margin
    assert semi_implicit <= zero_order_hold <= allowed
    place, v = 0.0, speed
    for _ in range(400):
        after = v + 0.1 * towards_standstill(axis, v, 0.1)
        place += 0.05 * (v + after)
        v = after
    assert 0.0 <= v < 1e-6
    assert zero_order_hold - 1e-9 <= place <= allowed


@pytest.mark.parametrize(("distance", "acceleration", "time_s"), [(1.0, 1.0, 2.0), (2.0, 0.5, 4.0)])
def test_the_limit_is_approached_almost_in_minimum_time(distance: float, acceleration: float, time_s: float) -> None:
    # Rest to rest in minimum time takes 2·√(d/a) (Kirk 1970, 5.4; from memory); the last δ of it takes √(2δ/a).
    period_s = 1e-3
    guard = brake(strongest=acceleration, deceleration=acceleration, hold_s=2 * period_s, period_s=period_s)
    near = 0.01 * distance
    place = speed = elapsed_s = 0.0
    while place < distance - near:
        action = guard.highest(distance - place, speed, acceleration, -acceleration)
        place += speed * period_s + action * period_s**2 / 2
        speed += action * period_s
        elapsed_s += period_s
        assert elapsed_s < 2 * time_s
    assert elapsed_s == pytest.approx(time_s - math.sqrt(2 * near / acceleration), abs=0.02)


def test_worst_case_stop_after_loss() -> None:
    # d = v·(timeout + check) + v²/(2a): timeout 0.1 s, checked every 0.02 s, v = 1, a = 0.8; computed with NumPy.
    assert brake(deceleration=0.8, hold_s=0.1 + 0.02).furthest(1.0, 0.0) == pytest.approx(0.745, abs=1e-12)
