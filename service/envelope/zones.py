"""Forbidden zones: no action may lead into one within the time that is looked ahead, if another action does not.

A zone is where all of its inequalities on observations hold. The observations are predicted with the action held, at
several times up to the one looked ahead: x(t+h) = P·x + Q·u, exact for channels that are integrals of each other and of
actions, as the rig declares them. If a predicted point lies inside, the action is moved, on the straight line towards
the one that leaves through an inequality fastest, just so far that no predicted point lies inside; the inequality with
the least change is taken. Where no reachable action does, the one that comes nearest is taken.
Source: the exponential of a nilpotent matrix, P = Σ Aᵏhᵏ/k!, Q = Σ Aᵏhᵏ⁺¹/(k+1)!·B (elementary); the rule is ours.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from nearhand.service.rigs import Rig, Zone

Array = NDArray[np.float64]
#: How far beyond the boundary an action is put, as a share of what it takes to get there; rounding stays outside.
BEYOND = 1e-6
#: How many times are predicted; a zone that is passed through between two of them is not seen.
TIMES = 12


@dataclass(frozen=True, slots=True)
class Side:
    """One inequality at each predicted time: inside where ``state``·x + ``effect``·u > ``bound``.

    ``state`` is (TIMES, n), ``effect`` (TIMES, m).
    """

    state: Array
    effect: Array
    bound: float

    def depths(self, x: Array, u: Array) -> Array:
        """Return how far inside the predicted points lie (TIMES,), in the inequality's own unit."""
        return np.asarray(self.state @ x + self.effect @ u - self.bound)


def prediction(rig: Rig, ahead_s: float) -> tuple[Array, Array]:
    """Return P (n, n) and Q (n, m) of the prediction over ``ahead_s`` with the action held."""
    observed = {channel.name: index for index, channel in enumerate(rig.observations)}
    acted = {channel.name: index for index, channel in enumerate(rig.actions)}
    n, m = len(observed), len(acted)
    a, b = np.zeros((n, n)), np.zeros((n, m))
    for channel, rate in rig.rates.items():
        sign, name = (-1.0, rate[1:]) if rate.startswith("-") else (1.0, rate)
        if name in observed:
            a[observed[channel], observed[name]] = sign
        else:
            b[observed[channel], acted[name]] = sign
    power, p, q = np.eye(n), np.zeros((n, n)), np.zeros((n, m))
    factor = 1.0
    for order in range(n + 1):
        p += factor * power
        factor *= ahead_s / (order + 1)
        q += factor * power @ b
        power = power @ a
    return p, q


class Zones:
    """A rig's forbidden zones, ready for use."""

    def __init__(self, rig: Rig) -> None:
        self._zones = tuple(self._sides(rig, zone) for zone in rig.zones)

    @staticmethod
    def _sides(rig: Rig, zone: Zone) -> tuple[Side, ...]:
        lease_s = rig.timing.lease_s
        predicted = [prediction(rig, ahead_s) for ahead_s in np.linspace(lease_s, max(zone.ahead_s, lease_s), TIMES)]
        names = [channel.name for channel in rig.observations]
        sides = []
        for inequality in zone.inside:
            weights = np.array([inequality.of.get(name, 0.0) for name in names])
            sign, bound = (1.0, inequality.at_least) if inequality.at_least is not None else (-1.0, inequality.at_most)
            assert bound is not None
            state = np.array([sign * weights @ p for p, _ in predicted])
            effect = np.array([sign * weights @ q for _, q in predicted])
            sides.append(Side(state, effect, sign * bound))
        return tuple(sides)

    def keep(
        self, action: list[float], observation: Sequence[float], low: Sequence[float], high: Sequence[float]
    ) -> bool:
        """Change ``action``, m numbers, in place where a zone asks for it; tell whether it did.

        Args:
            observation: (n,) finite.
            low, high: (m,) the actions that magnitude and slew leave.
        """
        changed = False
        x = np.asarray(observation, dtype=np.float64)
        for sides in self._zones:
            u = np.array(action)
            if _deepest(sides, x, u) <= 0.0:
                continue
            moved = _least_change(sides, x, u, np.asarray(low), np.asarray(high))
            if not np.array_equal(moved, u):
                action[:] = moved.tolist()
                changed = True
        return changed


def _inside(sides: Sequence[Side], x: Array, u: Array) -> Array:
    """Return how far inside the whole zone the predicted points lie (TIMES,); positive is inside."""
    return np.asarray(np.min([side.depths(x, u) for side in sides], axis=0))


def _deepest(sides: Sequence[Side], x: Array, u: Array) -> float:
    return float(_inside(sides, x, u).max())


def _least_change(sides: Sequence[Side], x: Array, u: Array, low: Array, high: Array) -> Array:
    """Return the action nearest to ``u`` that leads nowhere inside, or the one that comes nearest to that."""
    best, nearest = u, u
    size, depth = math.inf, _deepest(sides, x, u)
    for side in sides:
        moved = _leave(sides, side, x, u, low, high)
        change, left = float(np.abs(moved - u).max()), _deepest(sides, x, moved)
        if left <= 0.0 and change < size:
            best, size = moved, change
        if left < depth:
            nearest, depth = moved, left
    return best if math.isfinite(size) else nearest


def _leave(sides: Sequence[Side], side: Side, x: Array, u: Array, low: Array, high: Array) -> Array:
    """Return the action, on the way to the one that leaves through ``side`` fastest, that is just outside."""
    total = side.effect.sum(axis=0)
    corner = np.where(total > 0, low, np.where(total < 0, high, u))
    gains = side.effect @ (u - corner)
    share = 0.0
    for _ in range(TIMES):
        moved = np.clip(u + share * (corner - u), low, high)
        inside = _inside(sides, x, moved) > 0.0
        if not inside.any() or share >= 1.0:
            return moved
        needed = side.depths(x, u)[inside] * (1 + BEYOND)
        with np.errstate(divide="ignore", invalid="ignore"):
            shares = np.where(gains[inside] > 0, needed / gains[inside], math.inf)
        share = min(max(share * (1 + BEYOND), float(shares.max())), 1.0)
    return np.asarray(np.clip(corner, low, high))
