"""Magnitude and slew always hold from inside the range, whatever is proposed."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from nearhand.service.envelope.braking import Guards
from nearhand.service.envelope.chain import limit, slew
from nearhand.service.envelope.limits import Float32, Limits
from nearhand.service.rigs import Rig

RigWith = Callable[..., Rig]
float32s = st.floats(width=32, allow_nan=False, allow_infinity=False)


def vector(*values: float) -> Float32:
    """Return a float32 vector."""
    return np.array(values, dtype=np.float32)


def spacing(*values: np.ndarray) -> np.ndarray:
    """Float32 rounding of a sum of such values."""
    return np.asarray(np.spacing(np.max(np.abs(np.stack(values)), axis=0).astype(np.float32)))


@given(
    proposed=st.lists(float32s, min_size=2, max_size=2),
    share=st.lists(st.floats(0, 1), min_size=2, max_size=2),
    observation=st.lists(float32s, min_size=2, max_size=2),
)
def test_any_finite_proposal_ends_inside_range_and_slew(
    rig_with: RigWith, proposed: list[float], share: list[float], observation: list[float]
) -> None:
    limits = Limits.of(rig_with(braking={"reaction_s": 0.05}))
    previous = np.asarray(limits.low + vector(*share) * (limits.high - limits.low), dtype=np.float32)
    previous = np.clip(previous, limits.low, limits.high)
    with np.errstate(over="ignore"):
        result = limit(limits, vector(*proposed), previous, vector(*observation), Guards(limits))
    assert result.action.dtype == np.float32
    assert np.isfinite(result.action).all()
    assert (result.action >= limits.low).all() and (result.action <= limits.high).all()
    assert (np.abs(result.action - previous) <= limits.slew_step + spacing(previous, result.action)).all()
    if not (result.clipped or result.slewed or result.braked):
        assert np.array_equal(result.action, vector(*proposed))


def test_flags_name_what_changed(rig_with: RigWith) -> None:
    limits = Limits.of(rig_with())
    rest = limits.rest
    assert limit(limits, vector(0.05, 0.1), rest, None).action == pytest.approx([0.05, 0.1])
    clipped = limit(limits, vector(0.05, 5.0), vector(0.0, 0.7), None)
    assert (clipped.clipped, clipped.slewed, clipped.braked) == (True, False, False)
    slewed = limit(limits, vector(0.6, 0.1), rest, None)
    assert (slewed.clipped, slewed.slewed) == (False, True)
    assert slewed.action[0] == pytest.approx(0.12)
    near = vector(3.99, 1.0)
    braked = limit(limits, vector(0.1, 0.1), rest, near, Guards(limits))
    assert braked.braked
    assert braked.action[0] == pytest.approx(-0.12)  # towards −0.5 as fast as slew lets it


def test_float32_limits_never_lie_outside_the_declared_ones(rig_with: RigWith) -> None:
    limits = Limits.of(rig_with())
    assert float(limits.high[0]) <= 0.6
    assert float(limits.low[0]) >= -0.6
    assert float(limits.slew_step[0]) <= 0.12


def test_absurd_ranges_stay_finite(rig_with: RigWith) -> None:
    channel = {"name": "drive", "unit": "", "low": -1e300, "high": 1e300, "slew_per_s": 1e300}
    narrow = {"name": "hoist", "unit": "", "low": 1.0, "high": 1.0 + 1e-12, "rest": 1.0, "slew_per_s": 1e-300}
    limits = Limits.of(rig_with(actions=[channel, narrow], braking=[]))
    for values in (limits.low, limits.high, limits.slew_step, limits.ramp_step):
        assert np.isfinite(values).all()
    assert (limits.low <= limits.high).all()
    result = limit(limits, vector(3e38, -3e38), limits.rest, None)
    assert result.action[1] == 1.0
    assert limit(limits, vector(-3e38, 0.0), limits.high, None).action[0] < limits.high[0]


def test_from_outside_a_tightened_range_the_range_wins_over_slew(rig_with: RigWith) -> None:
    limits = Limits.of(rig_with())
    assert slew(limits, vector(2.0, 0.1), vector(1.5, 0.1))[0] == limits.high[0]


@pytest.mark.parametrize("ends", [(0.0, 0.6), (-0.6, 0.0), (0.1, 0.6)])
def test_an_axis_that_could_not_brake_is_refused(rig_with: RigWith, ends: tuple[float, float]) -> None:
    drive = {"name": "drive", "unit": "m/s²", "low": ends[0], "high": ends[1], "rest": ends[0], "slew_per_s": 6.0}
    with pytest.raises(ValueError, match="cannot decelerate both ways"):
        rig_with(actions=[drive])
    assert rig_with(actions=[drive], braking={"drives": "velocity"}).braking[0].drives == "velocity"
