"""The description of a rig: channels, limits, timing, fallback, gate; read from TOML, checked once, then frozen."""

from __future__ import annotations

import hashlib
import json
import tomllib
from pathlib import Path
from typing import Annotated, Any, Literal, Self

from pydantic import BaseModel, ConfigDict, Field, FiniteFloat, StringConstraints, ValidationError, model_validator

from nearhand.service.errors import ConfigError

Name = Annotated[str, StringConstraints(pattern=r"^[a-z0-9][a-z0-9_-]{0,63}$")]
Positive = Annotated[FiniteFloat, Field(gt=0)]
MAX_CHANNELS = 256


class Frozen(BaseModel):
    """A checked value that cannot be changed and takes no unknown field."""

    model_config = ConfigDict(frozen=True, extra="forbid", validate_default=True)


class Channel(Frozen):
    """One observation channel with its unit and the range it is expected in."""

    name: Name
    unit: str = Field(max_length=24)
    low: FiniteFloat
    high: FiniteFloat

    @model_validator(mode="after")
    def _ordered(self) -> Self:
        if not self.low < self.high:
            raise ValueError(f"channel {self.name}: low = {self.low} must be below high = {self.high}")
        return self


class ActionChannel(Channel):
    """One action channel; ``rest`` is the value that brings the machine to rest, ``slew_per_s`` its fastest change."""

    rest: FiniteFloat = 0.0
    slew_per_s: Positive

    @model_validator(mode="after")
    def _rest_inside(self) -> Self:
        if not self.low <= self.rest <= self.high:
            raise ValueError(f"channel {self.name}: rest = {self.rest} must lie within [{self.low}, {self.high}]")
        return self


class Timing(Frozen):
    """Control period, how old an observation may be, and how long an action holds, in seconds."""

    period_s: Positive
    deadline_s: Positive
    lease_s: Positive

    @model_validator(mode="after")
    def _ordered(self) -> Self:
        if self.deadline_s < self.period_s:
            raise ValueError(f"deadline_s = {self.deadline_s} must be at least period_s = {self.period_s}")
        if self.lease_s < self.period_s:
            raise ValueError(f"lease_s = {self.lease_s} must be at least period_s = {self.period_s}")
        return self


class Fallback(Frozen):
    """What acts when the policy may not: ``rest`` at once, ``ramp`` to rest, or ``hold`` for ``hold_s``, then ramp.

    ``ramp_per_s`` is a fraction of each action channel's range per second.
    """

    kind: Literal["rest", "ramp", "hold"] = "ramp"
    ramp_per_s: Positive = 2.0
    hold_s: Annotated[FiniteFloat, Field(ge=0, le=5)] = 0.0


class Braking(Frozen):
    """One axis that must always be able to stop before its limits.

    ``position`` and ``velocity`` are observation channels, ``action`` an action channel that is the axis' acceleration
    (``drives = "acceleration"``) or its speed (``drives = "velocity"``). ``deceleration`` is what the machine can be
    trusted to brake with; ``reaction_s`` is any delay of the drive beyond the lease.
    """

    position: Name
    velocity: Name
    action: Name
    drives: Literal["acceleration", "velocity"] = "acceleration"
    low: FiniteFloat
    high: FiniteFloat
    deceleration: Positive
    reaction_s: Annotated[FiniteFloat, Field(ge=0)] = 0.0

    @model_validator(mode="after")
    def _ordered(self) -> Self:
        if not self.low < self.high:
            raise ValueError(f"braking of {self.position}: low = {self.low} must be below high = {self.high}")
        return self


class Inequality(Frozen):
    """A weighted sum of observation channels that is ``at_least`` or ``at_most`` a number, in the channels' units."""

    of: dict[Name, FiniteFloat] = Field(min_length=1, max_length=16)
    at_least: FiniteFloat | None = None
    at_most: FiniteFloat | None = None

    @model_validator(mode="after")
    def _one_side(self) -> Self:
        if (self.at_most is None) == (self.at_least is None):
            raise ValueError("an inequality needs exactly one of at_least and at_most")
        return self


class Zone(Frozen):
    """A forbidden zone: where all inequalities hold. The action may not lead there within ``ahead_s`` (or a lease)."""

    name: Name
    inside: tuple[Inequality, ...] = Field(min_length=1, max_length=8)
    ahead_s: Annotated[FiniteFloat, Field(ge=0, le=10)] = 0.0


class Novelty(Frozen):
    """Confidence gate: ``trip_m`` low p-values of the last ``window_n`` trip, in at most ``epsilon`` of episodes."""

    epsilon: Annotated[FiniteFloat, Field(gt=0, lt=1)] = 0.05
    trip_m: Annotated[int, Field(ge=1, le=100)] = 3
    window_n: Annotated[int, Field(ge=1, le=100)] = 5

    @model_validator(mode="after")
    def _ordered(self) -> Self:
        if self.trip_m > self.window_n:
            raise ValueError(f"trip_m = {self.trip_m} cannot exceed window_n = {self.window_n}")
        return self


class Health(Frozen):
    """When a version in service is stood down by itself: looked at over the latest ``window_s``.

    Attributes:
        interventions_per_minute: of driven time, at most.
        trips: at most so many.
        latency_s, slow_share: at most this share of observations may be under way so much longer than usual.
        least_s: rates are judged only after so much driving.
        then: what acts instead, the version that was in service before (if there is one), or rest.
    """

    interventions_per_minute: Annotated[FiniteFloat, Field(ge=0)] | None = None
    trips: Annotated[int, Field(ge=0)] | None = None
    latency_s: Positive | None = None
    slow_share: Annotated[FiniteFloat, Field(ge=0, le=1)] = 0.01
    window_s: Annotated[FiniteFloat, Field(gt=0, le=3600)] = 60.0
    least_s: Positive = 10.0
    then: Literal["previous", "rest"] = "previous"


class Plant(Frozen):
    """A simulator or an expert, by entry-point name, with its options."""

    name: Name
    options: dict[str, Any] = Field(default_factory=dict)


class History(Frozen):
    """How many past observations and actions a policy sees beside the present observation."""

    observations: Annotated[int, Field(ge=0, le=16)] = 0
    actions: Annotated[int, Field(ge=0, le=16)] = 0


class Bound(Frozen):
    """One line of the gate, on the unfavourable end of a figure's interval.

    ``relative_to`` turns the bound into a multiple of (``at_most``) or a fraction of (``at_least``) that reference.
    """

    figure: str = Field(max_length=120)
    at_most: FiniteFloat | None = None
    at_least: FiniteFloat | None = None
    relative_to: Literal["none", "floor", "clone", "in-service"] = "none"

    @model_validator(mode="after")
    def _one_side(self) -> Self:
        if (self.at_most is None) == (self.at_least is None):
            raise ValueError(f"bound on {self.figure}: give exactly one of at_most and at_least")
        return self


class Rig(Frozen):
    """Everything Nearhand knows of a machine before it has seen it move."""

    name: Name
    title: str = Field(max_length=200)
    observations: tuple[Channel, ...] = Field(min_length=1, max_length=MAX_CHANNELS)
    actions: tuple[ActionChannel, ...] = Field(min_length=1, max_length=MAX_CHANNELS)
    timing: Timing
    fallback: Fallback = Fallback()
    braking: tuple[Braking, ...] = ()
    zones: tuple[Zone, ...] = Field(default=(), max_length=16)
    rates: dict[Name, str] = Field(default_factory=dict)
    novelty: Novelty = Novelty()
    history: History = History()
    health: Health | None = None
    simulator: Plant | None = None
    experts: dict[Name, Plant] = Field(default_factory=dict)
    expert: Name | None = None
    gate: tuple[Bound, ...] = ()

    @model_validator(mode="after")
    def _consistent(self) -> Self:
        seen: set[str] = set()
        for channel in (*self.observations, *self.actions):
            if channel.name in seen:
                raise ValueError(f"channel name {channel.name!r} is used twice; every channel needs its own")
            seen.add(channel.name)
        observed = {channel.name for channel in self.observations}
        acted = {channel.name for channel in self.actions}
        for axis in self.braking:
            for role, known in (("position", observed), ("velocity", observed), ("action", acted)):
                if getattr(axis, role) not in known:
                    raise ValueError(f"braking {role} = {getattr(axis, role)!r} is no such channel: {sorted(known)}")
        ranges = {channel.name: (channel.low, channel.high) for channel in self.actions}
        for axis in self.braking:
            low, high = ranges[axis.action]
            if axis.drives == "acceleration" and not low < 0 < high:
                raise ValueError(
                    f"braking of {axis.position}: {axis.action} ranges over [{low}, {high}] and so cannot decelerate "
                    "both ways; its range must reach below and above 0"
                )
        self._check_zones(observed, acted)
        if self.expert is not None and self.expert not in self.experts:
            raise ValueError(f"expert = {self.expert!r} is not among experts {sorted(self.experts)}")
        return self

    def _check_zones(self, observed: set[str], acted: set[str]) -> None:
        for channel, rate in self.rates.items():
            name = rate.removeprefix("-")
            if channel not in observed or name not in observed | acted or name == channel:
                raise ValueError(
                    f"rates: {channel} = {rate!r}: expected an observation channel and what it changes with, another "
                    "observation or an action, with a minus sign if it falls with it"
                )
        for zone in self.zones:
            for name in {name for inequality in zone.inside for name in inequality.of}:
                if name not in observed:
                    raise ValueError(f"zone {zone.name}: {name!r} is no observation channel")
            if not any(self._is_moved(name, acted) for inequality in zone.inside for name in inequality.of):
                raise ValueError(
                    f"zone {zone.name}: no action moves any of its channels; say under [rates] what changes them, "
                    'for example "position" = "velocity" and "velocity" = "acceleration"'
                )

    def _is_moved(self, channel: str, acted: set[str]) -> bool:
        """Tell whether an action moves a channel, by its rates; a circle of rates moves nothing."""
        for _ in range(len(self.rates)):
            channel = self.rates.get(channel, "").removeprefix("-")
            if channel in acted:
                return True
        return False

    def digest(self) -> str:
        """Return the SHA-256 of the resolved description, hexadecimal, as stored with versions and measurements."""
        text = json.dumps(self.model_dump(mode="json"), sort_keys=True, separators=(",", ":"))
        return hashlib.sha256(text.encode()).hexdigest()


def sentence(error: ValidationError) -> str:
    """Turn a validation error into one readable line: where, what was wrong, what was given."""
    parts = []
    for item in error.errors(include_url=False)[:3]:
        where = ".".join(str(step) for step in item["loc"]) or "the whole"
        parts.append(f"{where}: {item['msg'].removeprefix('Value error, ')}")
    more = error.error_count() - 3
    return "; ".join(parts) + (f"; and {more} more" if more > 0 else "")


def rig_from_toml(text: str, *, origin: str = "the rig description") -> Rig:
    """Read a rig from TOML text.

    Raises:
        ConfigError: the text is no TOML, or a field is missing, unknown or wrong; the message names it.
    """
    try:
        table = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise ConfigError(f"{origin} is not valid TOML: {error}", code="config.toml") from error
    try:
        return Rig.model_validate(table)
    except ValidationError as error:
        raise ConfigError(f"{origin}: {sentence(error)}", code="config.rig") from error


def rig_from_file(path: Path) -> Rig:
    """Read a rig from a TOML file.

    Raises:
        ConfigError: the file is missing or unreadable, or its content is wrong.
    """
    try:
        text = path.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as error:
        raise ConfigError(f"cannot read {path}: {error}; give the path of a rig's TOML file") from error
    return rig_from_toml(text, origin=str(path))
