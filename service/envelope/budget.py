"""How far an axis runs when everything goes silent at full speed: the envelope's budget, term by term.

From the last good observation: the rest of the deadline until the silence is noticed, at full speed; the lease of the
last action and the drive's reaction, in which it still follows the strongest action; the fallback's hold; the ramp from
the strongest action to full braking; and the braking to standstill, v²/(2d).
Source: elementary kinematics; each term takes over the speed that the one before has left.
"""

from __future__ import annotations

from dataclasses import dataclass

from nearhand.service.rigs import Braking, Rig


@dataclass(frozen=True, slots=True)
class Term:
    """One part of the way: how long it takes (s), how far it carries, and the speed at its end, in the axis' units."""

    name: str
    seconds: float
    travel: float
    speed: float


@dataclass(frozen=True, slots=True)
class AxisBudget:
    """One axis towards one end.

    Attributes:
        axis: position channel; unit: of it.
        end: ``high`` or ``low``; limit: the braking limit there.
        full_speed: largest speed towards it that the rig declares.
        terms: in order; travel: their sum; seconds: their sum.
        brakes_from: the position from which full speed may just still be driven.
        speed_at_range_end: fastest passage of the declared range's end that still stops before the limit.
        warnings: what is too close, in words.
    """

    axis: str
    unit: str
    end: str
    limit: float
    full_speed: float
    terms: tuple[Term, ...]
    travel: float
    seconds: float
    brakes_from: float
    speed_at_range_end: float
    warnings: tuple[str, ...]


def budgets(rig: Rig) -> tuple[AxisBudget, ...]:
    """Return the budget of every braking axis towards either end."""
    return tuple(_budget(rig, axis, end) for axis in rig.braking for end in ("high", "low"))


def unbraked(rig: Rig) -> tuple[str, ...]:
    """Return the action channels that belong to no braking axis."""
    braked = {axis.action for axis in rig.braking}
    return tuple(channel.name for channel in rig.actions if channel.name not in braked)


def way_to_standstill(rig: Rig, axis: Braking, end: str, speed: float) -> tuple[Term, ...]:
    """Return the terms from the last good observation, at ``speed`` (≥ 0) towards an end, to standstill."""
    action = next(channel for channel in rig.actions if channel.name == axis.action)
    strongest = max(action.high if end == "high" else -action.low, 0.0)
    weakest = max(-action.low if end == "high" else action.high, 1e-9)
    share = rig.fallback.ramp_per_s * (action.high - action.low)
    ramp_per_s = action.slew_per_s if rig.fallback.kind == "rest" else min(share, action.slew_per_s)
    hold_s = rig.fallback.hold_s if rig.fallback.kind == "hold" else 0.0
    timing, terms = rig.timing, []
    accelerates = axis.drives == "acceleration"

    def add(name: str, seconds: float, acceleration: float, jerk: float = 0.0) -> None:
        nonlocal speed
        travel = speed * seconds + acceleration * seconds**2 / 2 + jerk * seconds**3 / 6
        speed = max(speed + acceleration * seconds + jerk * seconds**2 / 2, 0.0)
        terms.append(Term(name, seconds, max(travel, 0.0), speed))

    add("silence until the deadline and one period", timing.deadline_s + timing.period_s, 0.0)
    pushed_s = timing.lease_s + axis.reaction_s
    if accelerates:
        deceleration = min(axis.deceleration, weakest)
        add("lease and the drive's reaction, still pushing", pushed_s, strongest)
        add("hold of the fallback", hold_s, strongest)
        add("ramp to full braking", (strongest + deceleration) / ramp_per_s, strongest, -ramp_per_s)
        add("braking to standstill", speed / deceleration, -deceleration)
    else:
        add("lease and the drive's reaction", pushed_s, 0.0)
        add("hold of the fallback", hold_s, 0.0)
        deceleration = min(axis.deceleration, ramp_per_s)
        add("braking to standstill", speed / deceleration, -deceleration)
    return tuple(term for term in terms if term.seconds > 0.0)


def _budget(rig: Rig, axis: Braking, end: str) -> AxisBudget:
    position = next(channel for channel in rig.observations if channel.name == axis.position)
    velocity = next(channel for channel in rig.observations if channel.name == axis.velocity)
    high = end == "high"
    limit, range_end = (axis.high, position.high) if high else (axis.low, position.low)
    sign = 1.0 if high else -1.0
    full_speed = max(velocity.high if high else -velocity.low, 0.0)
    terms = way_to_standstill(rig, axis, end, full_speed)
    travel = sum(term.travel for term in terms)
    room = sign * (limit - range_end)
    at_end = _fastest(rig, axis, end, room)
    warnings = []
    span = axis.high - axis.low
    if travel > span:
        warnings.append(
            f"from {full_speed:g} it takes {travel:.3g} {position.unit} to stand, more than the {span:g} between the "
            "limits: full speed is safe nowhere; lower the speed, the deadline or the lease"
        )
    if room < 0:
        warnings.append(
            f"the range of {axis.position} ends at {range_end:g}, beyond the limit at {limit:g}: what lies between "
            "cannot be used"
        )
    elif at_end <= 0.0 < full_speed:
        warnings.append(
            f"the limit at {limit:g} is so close to the range's end at {range_end:g} that the axis cannot reach it "
            "safely while a silence of the deadline is possible; move the limit out or shorten deadline and lease"
        )
    return AxisBudget(
        axis=axis.position, unit=position.unit, end=end, limit=limit, full_speed=full_speed, terms=terms, travel=travel,
        seconds=sum(term.seconds for term in terms), brakes_from=limit - sign * travel, speed_at_range_end=at_end,
        warnings=tuple(warnings),
    )  # fmt: skip


def _fastest(rig: Rig, axis: Braking, end: str, room: float) -> float:
    """Return the fastest speed from which the way to standstill fits into ``room``; 0 if none does."""
    low, high = 0.0, max(abs(value) for channel in rig.observations if channel.name == axis.velocity
                         for value in (channel.low, channel.high))  # fmt: skip

    def way(speed: float) -> float:
        return sum(term.travel for term in way_to_standstill(rig, axis, end, speed))

    if way(0.0) > room:
        return 0.0
    if way(high) <= room:
        return high
    for _ in range(50):
        middle = (low + high) / 2
        low, high = (middle, high) if way(middle) <= room else (low, middle)
    return low
