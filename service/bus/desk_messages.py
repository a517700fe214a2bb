"""Messages of the desk lane: what an operator asks for. Each request has one reply kind, or ``error``."""

from __future__ import annotations

from typing import ClassVar, Literal

from pydantic import Field, FiniteFloat

from nearhand.service.bus.curation_messages import (
    Curate,
    CurationReply,
    ListCuration,
    ListSets,
    SaveSet,
    SetsReply,
)
from nearhand.service.bus.desk_request import Deed, DeskReply, DeskRequest
from nearhand.service.bus.message import Count, ErrorReply, Identifier, Label, Table, Text, kinds
from nearhand.service.bus.shadow_messages import GetShadow, ShadowReply, StartShadow, StopShadow

JobKind = Literal["distil", "measure", "inspect"]
JobState = Literal["queued", "running", "done", "failed", "cancelled"]


class Where(DeskRequest):
    """Ask for the four lanes' addresses and the service's version."""

    role: ClassVar[str] = ""
    kind: str = "where"


class WhereReply(DeskReply):
    kind: str = "where-reply"
    action: Label
    intake: Label
    desk: Label
    feed: Label
    software: Label


class PutRig(Deed):
    """Register a rig or replace its description (TOML text); an identical one changes nothing.

    To change a rig that is known already, a key needs the role ``release``.
    """

    role: ClassVar[str] = "teach"
    kind: str = "put-rig"
    toml: str = Field(max_length=262_144)


class GetRig(DeskRequest):
    kind: str = "get-rig"
    rig: Identifier


class RigReply(DeskReply):
    """``description`` is the resolved rig as a map; ``in_service`` the version acting for it, 0 when none."""

    kind: str = "rig-reply"
    rig: Identifier
    digest: Label
    description: Table
    in_service: Count


class ListRigs(DeskRequest):
    kind: str = "list-rigs"


class RigsReply(DeskReply):
    kind: str = "rigs-reply"
    rigs: tuple[Table, ...]


class ListEpisodes(DeskRequest):
    kind: str = "list-episodes"
    rig: Identifier


class EpisodesReply(DeskReply):
    """One map per episode: episode, operator, task, state, samples, outcome, terminated, split, started_utc."""

    kind: str = "episodes-reply"
    episodes: tuple[Table, ...]


class GetEpisode(DeskRequest):
    """Ask for a closed episode's samples."""

    kind: str = "get-episode"
    episode: Identifier


class EpisodeReply(DeskReply):
    """Times (T,) float64; observations (T+1, n) and actions (T, m) float32; little-endian rows."""

    kind: str = "episode-reply"
    episode: Identifier
    rig: Identifier
    operator: Label
    outcome: Label
    terminated: bool
    samples: Count
    times: bytes
    obs: bytes
    act: bytes


class StartJob(Deed):
    """Queue a job.

    ``options`` by job kind. ``distil``: recipe (a map, see recipes), operators (list, empty for all), episodes (how
    many training episodes at most, 0 for all), set (a training set's name, empty for none), from_version (teach from
    that version's recovered cost alone, 0 for no), simulator (a map of simulator options to replace then).
    ``measure``: version, closed_loop_episodes, seed, operators, against (a version, 0 for none). ``inspect``: none.
    """

    role: ClassVar[str] = "teach"
    kind: str = "start-job"
    job_kind: JobKind
    rig: Identifier
    options: Table = Field(default_factory=dict)


class GetJob(DeskRequest):
    kind: str = "get-job"
    job: Count


class CancelJob(Deed):
    role: ClassVar[str] = "teach"
    kind: str = "cancel-job"
    job: Count


class JobReply(DeskReply):
    """State of a job. ``result`` is a map once done; ``versions`` are those that it drafted."""

    kind: str = "job-reply"
    job: Count
    job_kind: JobKind
    rig: Identifier
    state: JobState
    stage: Label = ""
    fraction: FiniteFloat = 0.0
    eta_s: FiniteFloat | None = None
    figures: Table = Field(default_factory=dict)
    message: Text = ""
    versions: tuple[Count, ...] = ()
    result: Table | None = None


class ListJobs(DeskRequest):
    kind: str = "list-jobs"
    rig: Identifier | None = None


class JobsReply(DeskReply):
    kind: str = "jobs-reply"
    jobs: tuple[Table, ...]


class ListVersions(DeskRequest):
    kind: str = "list-versions"
    rig: Identifier


class VersionsReply(DeskReply):
    """One map per version: version, method, state, created_utc, sha256, parent, job, refusal (why not released)."""

    kind: str = "versions-reply"
    versions: tuple[Table, ...]


class GetVersion(DeskRequest):
    """Ask for one version with its provenance and latest measurement, and its file if ``with_policy``."""

    kind: str = "get-version"
    version: Count
    with_policy: bool = False


class VersionReply(DeskReply):
    kind: str = "version-reply"
    version: Count
    rig: Identifier
    method: Label
    state: Label
    created_utc: Label
    sha256: Label
    provenance: Table
    measurement: Table | None = None
    refusal: Text = ""
    policy: bytes | None = None


class GetPlan(DeskRequest):
    """Ask how many episodes a version's measurement needs to pass its rig's gate, judged by its last measurement."""

    kind: str = "get-plan"
    version: Count


class PlanReply(DeskReply):
    """Per bound: figure, bound, value, limit, now, needed (null where no number is enough), met, sentence."""

    kind: str = "plan-reply"
    version: Count
    bounds: tuple[Table, ...]


class Release(Deed):
    """Put a measured version in service if its measurement passes the rig's gate.

    ``expected_in_service`` guards against a release that someone else made meanwhile. ``override`` releases in spite
    of the gate and needs a reason.
    """

    kind: str = "release"
    version: Count
    expected_in_service: Count | None = None
    override: bool = False


class Rollback(Deed):
    """Put an earlier version back in service: ``version``, or the one before the present one when 0."""

    kind: str = "rollback"
    rig: Identifier
    version: Count = 0


class StandDown(Deed):
    """Take the version in service out of service; the rig falls back."""

    kind: str = "stand-down"
    rig: Identifier


class ReleaseReply(DeskReply):
    """``released`` false means the gate refused; ``bounds`` lists every bound with its verdict."""

    kind: str = "release-reply"
    rig: Identifier
    released: bool
    version: Count
    previous: Count
    bounds: tuple[Table, ...] = ()
    message: Text = ""


class Rearm(Deed):
    """Clear a latched trip. It permits action; the machine moves only when the rig asks again."""

    role: ClassVar[str] = "drive"
    kind: str = "rearm"
    rig: Identifier


class Halt(Deed):
    """Latch a rig now: the fallback acts until an operator re-arms. Whoever holds a key may do it."""

    role: ClassVar[str] = ""
    kind: str = "halt"
    rig: Identifier


class RigStateReply(DeskReply):
    """The action server's view of a rig after ``rearm`` or ``halt``."""

    kind: str = "rig-state-reply"
    rig: Identifier
    mode: Label
    version: Count
    reasons: Count


class ListEvents(DeskRequest):
    """Ask for events after a number, oldest first, at most ``limit``."""

    kind: str = "list-events"
    rig: Identifier | None = None
    after: Count = 0
    limit: Count = 200


class EventsReply(DeskReply):
    """One map per event: event, utc, rig, what, who, why, detail."""

    kind: str = "events-reply"
    events: tuple[Table, ...]


class VerifyEvents(DeskRequest):
    """Check the whole event record's hash chain."""

    kind: str = "verify-events"


class VerifyReply(DeskReply):
    kind: str = "verify-reply"
    intact: bool
    events: Count
    first_bad: Count | None = None
    message: Text = ""


class GetHealth(DeskRequest):
    kind: str = "get-health"


class HealthReply(DeskReply):
    """Counters of all processes and, per rig, mode, version, latest observation and action, interventions."""

    kind: str = "health-reply"
    uptime_s: FiniteFloat
    action_server: Table
    rigs: dict[str, Table]
    counters: dict[str, int]


DESK_REQUESTS = kinds(
    Where, PutRig, GetRig, ListRigs, ListEpisodes, GetEpisode, StartJob, GetJob, CancelJob, ListJobs, ListVersions,
    GetVersion, Release, Rollback, StandDown, Rearm, Halt, ListEvents, VerifyEvents, GetHealth,
    StartShadow, StopShadow, GetShadow, GetPlan, Curate, ListCuration, SaveSet, ListSets,
)  # fmt: skip
DESK_REPLIES = kinds(
    WhereReply, RigReply, RigsReply, EpisodesReply, EpisodeReply, JobReply, JobsReply, VersionsReply, VersionReply,
    ReleaseReply, RigStateReply, EventsReply, VerifyReply, HealthReply, ShadowReply, PlanReply,
    CurationReply, SetsReply, ErrorReply,
)  # fmt: skip
