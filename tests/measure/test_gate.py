"""The gate: nothing passes but a number on the right side of its bound."""

from __future__ import annotations

import math
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from nearhand.service.measure.gate import judge
from nearhand.service.rigs import Bound

UPPER = Bound(figure="gap", at_most=1.0)
LOWER = Bound(figure="score", at_least=0.8)


def measured(name: str, low: object, high: object, **beside: object) -> dict[str, Any]:
    """Return a measurement of one figure."""
    return {"figures": {name: {"value": 0.5, "low": low, "high": high, "unit": "m", **beside}}}


@given(low=st.floats(allow_nan=True), high=st.floats(allow_nan=True))
def test_only_the_unfavourable_end_decides(low: float, high: float) -> None:
    (upper,) = judge([UPPER], measured("gap", low, high), None)
    assert upper["met"] is (math.isfinite(high) and high <= 1.0)
    (lower,) = judge([LOWER], measured("score", low, high), None)
    assert lower["met"] is (math.isfinite(low) and low >= 0.8)


@pytest.mark.parametrize("end", [None, math.nan, math.inf, -math.inf, "0.5", True, [0.5]])
def test_what_is_no_finite_number_does_not_pass(end: object) -> None:
    for bound, name in ((UPPER, "gap"), (LOWER, "score")):
        (verdict,) = judge([bound], measured(name, end, end), None)
        assert verdict["met"] is False
        assert verdict["observed"] is None
        assert name in verdict["sentence"]


def test_a_figure_that_was_not_measured_does_not_pass() -> None:
    unusable: list[dict[str, Any]] = [{}, {"figures": {}}, {"figures": None}, {"figures": {"gap": 3}}]
    for measurement in unusable:
        (verdict,) = judge([UPPER], measurement, None)
        assert verdict["met"] is False


@pytest.mark.parametrize(("high", "met"), [(1.99, True), (2.0, True), (2.01, False)])
def test_a_bound_relative_to_the_floor_multiplies_it(high: float, met: bool) -> None:
    bound = Bound(figure="gap", at_most=2.0, relative_to="floor")
    (verdict,) = judge([bound], measured("gap", 0.1, high, floor={"value": 1.0}), None)
    assert verdict["met"] is met
    assert verdict["limit"] == 2.0


def test_a_bound_without_its_reference_does_not_pass() -> None:
    for relative in ("floor", "clone", "in-service"):
        bound = Bound(figure="gap", at_most=2.0, relative_to=relative)
        (verdict,) = judge([bound], measured("gap", 0.1, 0.2, floor={"value": None}), None)
        assert verdict["met"] is False
        assert verdict["limit"] is None


def test_a_bound_relative_to_the_version_in_service() -> None:
    bound = Bound(figure="score", at_least=1.0, relative_to="in-service")
    (better,) = judge([bound], measured("score", 0.6, 0.9), measured("score", 0.1, 0.9))
    (worse,) = judge([bound], measured("score", 0.4, 0.9), measured("score", 0.1, 0.9))
    assert (better["met"], worse["met"]) == (True, False)


def test_every_bound_has_its_verdict_in_order() -> None:
    both = {"figures": {**measured("gap", 0, 2)["figures"], **measured("score", 0.9, 1)["figures"]}}
    assert [verdict["met"] for verdict in judge([UPPER, LOWER], both, None)] == [False, True]


def test_too_few_closed_loop_episodes_pass_no_gate() -> None:
    # Rare failures: with ten episodes and one failure in eight, (7/8)^10 = 26 % of measurements see none.
    bound = Bound(figure="closed_loop.score", at_least=0.8)
    good = {"value": 0.95, "low": 0.9, "high": 1.0}
    few, enough = ({"figures": {"closed_loop.score": {**good, "n": n}}} for n in (29, 30))
    refused, passed = judge([bound], few, None)[0], judge([bound], enough, None)[0]
    assert not refused["met"] and "at least 30 episodes, there are 29" in refused["sentence"]
    assert passed["met"] and "30" not in passed["sentence"]
    exact = Bound(figure="closed_loop.success", at_least=0.5)
    assert judge([exact], {"figures": {"closed_loop.success": {**good, "n": 12}}}, None)[0]["met"]
