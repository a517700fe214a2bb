"""What an inspection's figures mean, in plain sentences with what to do about it."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import Any, Literal

from nearhand.service.rigs import Rig

MOST_JITTER = 0.2
MOST_GAPS = 0.01
MOST_SATURATION = 0.2
MOST_IDLE_S = 0.5
MOST_OUTSIDE = 0.01
MOST_UNEXPLAINED = 0.25
MOST_BETWEEN = 2.0
LEAST_EIGENVALUE = 1e-3
LEAST_EPISODES = 12

Level = Literal["problem", "note", "good"]
Row = Mapping[str, Any]
Result = Mapping[str, Any]


def verdicts(rig: Rig, result: Result) -> list[dict[str, str]]:
    """Return maps {level, sentence}; ``problem`` first, and one ``good`` when there is neither problem nor note."""
    rows: Sequence[Row] = result["episodes"]
    if not rows:
        return [_say("problem", f"There are no closed demonstrations of {rig.name}; collect some first.")]
    found = [
        *_values(rows),
        *_times(rows),
        *_driving(rows),
        *_amount(rig, result),
        *_lag(rig, result),
        *_agreement(result),
        *_coverage(result),
    ]
    if not found:
        return [_say("good", f"Nothing stands out in {len(rows)} episodes; they can be distilled.")]
    return sorted(found, key=lambda one: one["level"] != "problem")


def _say(level: Level, sentence: str) -> dict[str, str]:
    return {"level": level, "sentence": sentence}


def _which(rows: Sequence[Row], test: Callable[[Row], bool]) -> tuple[int, str]:
    """Return how many episodes pass a test, and the names of the first three."""
    names = [str(row["episode"]) for row in rows if test(row)]
    return len(names), ", ".join(names[:3]) + (" …" if len(names) > 3 else "")


def _values(rows: Sequence[Row]) -> list[dict[str, str]]:
    found = []
    count, names = _which(rows, lambda row: row["not_finite"] > 0)
    if count:
        sentence = (
            f"{count} episodes hold NaN or infinite values and are left out of training ({names}): find the sensor."
        )
        found.append(_say("problem", sentence))
    count, names = _which(rows, lambda row: bool(row["stuck"]))
    if count:
        channels = sorted({channel for row in rows for channel in row["stuck"]})
        sentence = (
            f"{', '.join(channels)} stood still while the machine moved, in {count} episodes ({names}): "
            "check the sensor and its cable, and record these again."
        )
        found.append(_say("problem", sentence))
    beyond: dict[str, int] = {}
    for row in rows:
        for channel, fraction in row["outside"].items():
            beyond[channel] = beyond.get(channel, 0) + (fraction > MOST_OUTSIDE)
    for channel, count in beyond.items():
        if count:
            sentence = (
                f"{channel} leaves the range in the rig's description in {count} episodes: correct the range "
                "or the sensor's calibration."
            )
            found.append(_say("note", sentence))
    return found


def _times(rows: Sequence[Row]) -> list[dict[str, str]]:
    found = []
    count, names = _which(rows, lambda row: row["gaps"] > MOST_GAPS * max(1, row["samples"]))
    if count:
        sentence = f"{count} episodes miss samples for more than three periods too often ({names}): record them again."
        found.append(_say("problem", sentence))
    else:
        count, names = _which(rows, lambda row: row["gaps"] > 0)
        if count:
            sentence = f"{count} episodes have a gap of more than three periods ({names}); nothing bridges it."
            found.append(_say("note", sentence))
    count, names = _which(rows, lambda row: row["backward"] > 0)
    if count:
        sentence = (
            f"Time stands still or runs backward in {count} episodes ({names}): stamp samples with a steady clock."
        )
        found.append(_say("problem", sentence))
    count, names = _which(rows, lambda row: row["jitter"] > MOST_JITTER)
    if count:
        sentence = (
            f"The period varies by more than {MOST_JITTER:.0%} in {count} episodes ({names}): give the control loop "
            "a timer of its own."
        )
        found.append(_say("problem", sentence))
    return found


def _driving(rows: Sequence[Row]) -> list[dict[str, str]]:
    found = []
    saturated: dict[str, int] = {}
    for row in rows:
        for channel, fraction in row["saturation"].items():
            saturated[channel] = saturated.get(channel, 0) + (fraction > MOST_SATURATION)
    for channel, count in saturated.items():
        if count:
            sentence = (
                f"{channel} is at its limit for more than {MOST_SATURATION:.0%} of the time in {count} episodes; "
                "what the operator wanted beyond it is unknown. Widen the limit if the machine allows it."
            )
            found.append(_say("note", sentence))
    count, names = _which(rows, lambda row: max(row["idle_start_s"], row["idle_end_s"]) > MOST_IDLE_S)
    if count:
        sentence = (
            f"{count} episodes begin or end with more than {MOST_IDLE_S:g} s of nothing ({names}): start and stop "
            "recording closer to the task, or the policy learns to wait."
        )
        found.append(_say("note", sentence))
    count, names = _which(rows, lambda row: row["outcome"] == "failure")
    if count:
        sentence = f"{count} episodes ended in failure ({names}): distil without them unless failing is to be learned."
        found.append(_say("problem" if count > len(rows) / 4 else "note", sentence))
    count, names = _which(rows, lambda row: row["outcome"] == "cut")
    if count:
        found.append(_say("note", f"{count} episodes were cut short ({names})."))
    return found


def _amount(rig: Rig, result: Result) -> list[dict[str, str]]:
    rows = result["episodes"]
    found = []
    if len(rows) < LEAST_EPISODES:
        sentence = f"{len(rows)} episodes are few: intervals will be wide. Collect at least {LEAST_EPISODES}."
        found.append(_say("note", sentence))
    calibration = int(result["splits"].get("calibration", 0))
    smallest = 1 / (calibration + 1)
    # With a simulator the gate is calibrated on a version's own closed-loop runs instead.
    if rig.simulator is None and smallest > rig.novelty.epsilon:
        sentence = (
            f"With {calibration} calibration episodes the confidence gate can promise at most one false trip in "
            f"{calibration + 1} episodes ({smallest:.0%}), not the {rig.novelty.epsilon:.0%} that the rig asks for: "
            f"it needs {round(1 / rig.novelty.epsilon) - 1}."
        )
        found.append(_say("note", sentence))
    return found


def _lag(rig: Rig, result: Result) -> list[dict[str, str]]:
    lag = result["lag"]
    if lag is None or not lag["is_clear"] or lag["low_s"] <= 2 * rig.timing.period_s:
        return []
    steps = round(lag["lag_s"] / rig.timing.period_s)
    sentence = (
        f"{lag['action']} follows the observations after about {lag['lag_s']:.2f} s [{lag['low_s']:.2f}, "
        f"{lag['high_s']:.2f}], {steps} periods. The loop is closed, so this is a hint only; if the operator does "
        "react that late, give the policy a history of observations and actions."
    )
    return [_say("note", sentence)]


def _agreement(result: Result) -> list[dict[str, str]]:
    told = result["disagreement"]
    if told is None:
        return []
    found = []
    for channel, fraction in told["unexplained"].items():
        if fraction > MOST_UNEXPLAINED:
            sentence = (
                f"At similar observations of different episodes {channel} still varies by {fraction:.0%} of all its "
                "variance: something that decides it is not observed, or episodes are too few to compare. Add the "
                "missing channel or a history, or collect more."
            )
            found.append(_say("note", sentence))
    between = told["between_operators"]
    if between is not None and between > MOST_BETWEEN:
        sentence = (
            f"Operators act differently in similar situations ({between:.1f} times their own spread): one policy would "
            "average them. Distil from one operator at a time."
        )
        found.append(_say("problem", sentence))
    return found


def _coverage(result: Result) -> list[dict[str, str]]:
    covered = result["coverage"]
    if covered is None:
        return [_say("problem", "No observation channel varies: there is nothing to learn from.")]
    found = []
    if covered["constant"]:
        sentence = (
            f"{', '.join(covered['constant'])} never changes: a policy cannot learn what it means. Vary it, or leave "
            "it out of the rig's description."
        )
        found.append(_say("note", sentence))
    if covered["smallest_eigenvalue"] < LEAST_EIGENVALUE:
        sentence = (
            f"The observations hardly vary in one direction ({', '.join(covered['weakest'])}): a policy is free to do "
            "anything there. Start from more varied positions."
        )
        found.append(_say("note", sentence))
    return found
