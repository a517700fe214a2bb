"""The gate: bounds on the unfavourable end of an interval. What is missing or not a number does not pass."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

from nearhand.service.rigs import Bound

Measurement = Mapping[str, Any]
#: Figures that are shares of episodes, with exact intervals at any number.
PROPORTIONS = (".success", ".novelty_trip_rate")
#: With fewer closed-loop episodes a rare failure may well not have shown: of versions just beyond a bound whose every
#: eighth episode fails, 28 % passed on ten episodes and 10 % on twenty (``nearhand bench gate``).
FEWEST_CLOSED_LOOP = 30


def judge(bounds: Sequence[Bound], measurement: Measurement, in_service: Measurement | None) -> list[dict[str, Any]]:
    """Hold a measurement against every bound.

    Args:
        bounds: the rig's gate.
        measurement: of the version to be released.
        in_service: measurement of the version in service, for bounds relative to it.

    Returns:
        Per bound: figure, bound, relative_to, limit, observed (the unfavourable end, or None), met, too_few
        (episodes for this bound to be met at all), sentence.
    """
    return [_verdict(bound, measurement, in_service) for bound in bounds]


def _verdict(bound: Bound, measurement: Measurement, in_service: Measurement | None) -> dict[str, Any]:
    upper = bound.at_most is not None
    factor = float(bound.at_most if bound.at_most is not None else bound.at_least or 0.0)
    figure = _figure(measurement, bound.figure)
    observed = _number(figure.get("high" if upper else "low"))
    reference = _reference(bound, figure, in_service)
    limit = None if reference is None else factor * reference
    # Written so that nothing that is not a number can pass.
    met = observed is not None and limit is not None and (observed <= limit if upper else observed >= limit)
    few = is_too_few(bound.figure, int(_number(figure.get("n")) or 0))
    return {
        "figure": bound.figure,
        "bound": f"{'at most' if upper else 'at least'} {factor:g}",
        "relative_to": bound.relative_to,
        "limit": limit,
        "observed": observed,
        "met": bool(met and not few),
        "too_few": few,
        "sentence": _sentence(bound, figure, observed, limit, factor, upper=upper)
        + (f"; and to at least {FEWEST_CLOSED_LOOP} episodes, there are {figure.get('n', 0)}" if few else ""),
    }


def is_too_few(name: str, n: int) -> bool:
    """Tell whether so many episodes are too few for the gate to trust a figure's interval."""
    return name.startswith("closed_loop.") and not name.endswith(PROPORTIONS) and n < FEWEST_CLOSED_LOOP


def _figure(measurement: Measurement, name: str) -> Mapping[str, Any]:
    figure = (measurement.get("figures") or {}).get(name)
    return figure if isinstance(figure, Mapping) else {}


def _number(value: object) -> float | None:
    if isinstance(value, bool) or not isinstance(value, int | float) or not math.isfinite(value):
        return None
    return float(value)


def _reference(bound: Bound, figure: Mapping[str, Any], in_service: Measurement | None) -> float | None:
    if bound.relative_to == "none":
        return 1.0
    if bound.relative_to == "in-service":
        return None if in_service is None else _number(_figure(in_service, bound.figure).get("value"))
    beside = figure.get(bound.relative_to)
    return _number(beside.get("value")) if isinstance(beside, Mapping) else None


def _sentence(
    bound: Bound, figure: Mapping[str, Any], observed: float | None, limit: float | None, factor: float, *, upper: bool
) -> str:
    unit = str(figure.get("unit") or "")
    side = "upper" if upper else "lower"
    word = "at most" if upper else "at least"
    if observed is None:
        return f"{bound.figure} was not measured with an interval; the gate asks for {word} {factor:g}"
    if limit is None:
        return f"{bound.figure}: there is no {bound.relative_to} figure to compare with; measure that first"
    against = "" if bound.relative_to == "none" else f" ({factor:g} × the {bound.relative_to} figure)"
    text = f"{bound.figure}: {side} end of the interval {observed:.4g} {unit}".rstrip()
    return f"{text}; the gate asks for {word} {limit:.4g}{against}"
