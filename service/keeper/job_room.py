"""Desk requests about jobs."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from nearhand.service.bus.desk_messages import CancelJob, GetJob, JobReply, JobsReply, ListJobs, StartJob
from nearhand.service.errors import ConfigError, ConflictError, RefusedError
from nearhand.service.keeper.job_files import chosen_episodes
from nearhand.service.keeper.office import Office, Room
from nearhand.service.recipes import recipe_from_map
from nearhand.service.store.jobs import JobRow

#: The whole-number options of each kind of job, with the least value each may have.
_NUMBERS: dict[str, dict[str, int]] = {
    "distil": {"episodes": 0, "from_version": 0},
    "measure": {"version": 1, "closed_loop_episodes": 0, "seed": 0},
    "inspect": {},
}


def start_job(office: Office, request: StartJob) -> JobReply:
    """Queue a job.

    Raises:
        ConfigError: an option cannot be used.
        ConflictError: there are no demonstrations, or the version is another rig's.
        RefusedError: too many jobs wait already.
    """
    store = office.ledger.store
    store.rigs.get(request.rig)
    most = office.settings.limits.waiting_jobs
    if len(store.jobs.in_state("queued", "running")) >= most:
        raise RefusedError(f"{most} jobs wait or run already; let some end, or cancel some", code="refused.jobs")
    _check_options(request.job_kind, request.options)
    if request.job_kind == "measure":
        version = store.versions.get(int(request.options["version"]))
        if version.rig != request.rig:
            raise ConflictError(
                f"version {version.version} is of rig {version.rig}, not of {request.rig}", code="conflict.rig"
            )
    with office.ledger.transaction():
        row = store.jobs.add(request.job_kind, request.rig, request.options, who=request.who, why=request.why)
        chosen_episodes(store, row)
        office.ledger.record(
            "job-queued", rig=request.rig, who=request.who, why=request.why,
            detail={"job": row.job, "kind": row.kind, "options": row.options},
        )  # fmt: skip
    office.queue.submitted()
    return _reply(office, request.request, row)


def _check_options(kind: str, options: Mapping[str, Any]) -> None:
    for name, least in _NUMBERS[kind].items():
        value = options.get(name, least)
        if type(value) is not int or value < least:
            raise ConfigError(
                f"{kind}: {name} = {value!r} must be a whole number of at least {least}", code="config.options"
            )
    if kind == "measure" and "version" not in options:
        raise ConfigError("measure: say which version to measure", code="config.options")
    operators = options.get("operators", ())
    if not isinstance(operators, tuple | list) or not all(isinstance(name, str) for name in operators):
        raise ConfigError(f"{kind}: operators = {operators!r} must be a list of names", code="config.options")
    if not isinstance(options.get("set", ""), str):
        raise ConfigError(f"{kind}: set must be the name of a training set", code="config.options")
    if kind == "distil":
        recipe = options.get("recipe", {})
        if not isinstance(recipe, Mapping):
            raise ConfigError("distil: recipe must be a map; see the recipes that come with it", code="config.recipe")
        recipe_from_map(recipe)
        if not isinstance(options.get("simulator", {}), Mapping):
            raise ConfigError("distil: simulator must be a map of options to replace", code="config.options")


def get_job(office: Office, request: GetJob) -> JobReply:
    """Tell how far a job is."""
    return _reply(office, request.request, office.ledger.store.jobs.get(request.job))


def cancel_job(office: Office, request: CancelJob) -> JobReply:
    """Cancel a job.

    Raises:
        ConflictError: it has ended already.
    """
    job = office.ledger.store.jobs.get(request.job)
    return _reply(office, request.request, office.queue.cancel(job, request.who, request.why))


def list_jobs(office: Office, request: ListJobs) -> JobsReply:
    """List the latest jobs, newest first."""
    if request.rig is not None:
        office.ledger.store.rigs.get(request.rig)
    names = ("job", "kind", "rig", "state", "who", "why", "created_utc", "started_utc", "ended_utc", "message")
    rows = office.ledger.store.jobs.newest(request.rig)
    return JobsReply(request=request.request, jobs=tuple({name: getattr(row, name) for name in names} for row in rows))


def _reply(office: Office, request: str, row: JobRow) -> JobReply:
    progress = office.queue.progress.get(row.job)
    versions = office.ledger.store.versions.of_job(row.job)
    return JobReply.model_validate(
        {
            "request": request,
            "job": row.job,
            "job_kind": row.kind,
            "rig": row.rig,
            "state": row.state,
            "stage": progress.stage if progress else "",
            "fraction": 1.0 if row.state == "done" else (progress.fraction if progress else 0.0),
            "eta_s": progress.eta_s if progress else None,
            "figures": dict(progress.figures) if progress else {},
            "message": row.message or (progress.message if progress else ""),
            "versions": tuple(version.version for version in versions),
            "result": row.result,
        }
    )


ROOM: Room = {"start-job": start_job, "get-job": get_job, "cancel-job": cancel_job, "list-jobs": list_jobs}
