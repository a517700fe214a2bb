"""What the keeper writes into a job's folder before it runs, and what it takes from there afterwards."""

from __future__ import annotations

import contextlib
import hashlib
import shutil
import traceback
from collections.abc import Mapping, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

from nearhand.service.episodes.correction import Correction, as_fragment
from nearhand.service.episodes.curation import Decision, apply
from nearhand.service.episodes.episode import Episode
from nearhand.service.episodes.resampling import regular_stretches
from nearhand.service.errors import ConflictError, NearhandError, PolicyFormatError, StoreError
from nearhand.service.jobs.folder import JobFolder
from nearhand.service.keeper.ledger import Ledger, log_line
from nearhand.service.policy.format import read_policy
from nearhand.service.rigs import Rig
from nearhand.service.store.canonical import canonical
from nearhand.service.store.episodes import EpisodeRow
from nearhand.service.store.jobs import JobRow
from nearhand.service.store.rigs import RigRow, machine_digest
from nearhand.service.store.store import Store
from nearhand.service.store.versions import VersionRow

#: What each kind of job may see. A distillation is never given what it will be measured on.
SPLITS: dict[str, tuple[str, ...]] = {
    "distil": ("train", "calibration"),
    "measure": ("train", "held-out"),
    "inspect": (),
}
MAX_LOG_TAIL = 8192
#: Faults of the store that say nothing about a job's result.
PASSING_CODES = frozenset({"store.full", "store.locked", "store.io", "store.access"})


def write_job(store: Store, job: JobRow, folder: JobFolder, progress: str) -> None:
    """Write everything that a job needs; ``job.json`` comes last and is what says that the folder is complete.

    Raises:
        ConflictError: there are no demonstrations to work on.
        NearhandError: something named in the options is not there, or the store or the folder failed.
    """
    rig = store.rigs.get(job.rig)
    if folder.has("job.json"):
        content = folder.read_json("job.json")
        content["progress"] = progress
        folder.write_json("job.json", content)
        return
    rows = chosen_episodes(store, job)
    options = dict(job.options)
    try:
        decided = decisions(store, job)
        folder.write_episodes(_episodes(store, job, rows, rig.rig, decided))
        if job.kind == "measure":
            options.update(_write_inputs(store, job, folder))
        if job.kind == "distil" and job.options.get("from_version"):
            _write_cost(store, job, folder)
        content = {
            "job": job.job,
            "kind": job.kind,
            "rig": rig.rig.model_dump(mode="json"),
            "options": options,
            "progress": progress,
            "given": _given(rows, decided) | _set_given(store, job),
        }
        folder.write_json("job.json", content)
    except OSError as error:
        raise StoreError(f"cannot write the job's folder {folder.path}: {error}", code="store.folder") from error


def chosen_episodes(store: Store, job: JobRow) -> list[EpisodeRow]:
    """Return the episodes that a job may see; those with NaN or infinite values only where they are inspected.

    Raises:
        ConflictError: there are none of the kind that the job cannot do without.
    """
    operators = tuple(str(name) for name in job.options.get("operators") or ())
    rows = store.episodes.closed(
        job.rig, splits=SPLITS[job.kind], operators=operators, finite_only=job.kind != "inspect"
    )
    if job.kind != "inspect":
        decided = decisions(store, job)
        wanted = _set_names(store, job)
        rows = [
            row
            for row in rows
            if not decided.get(row.episode, Decision()).excluded
            and (wanted is None or row.split != "train" or row.episode in wanted)
        ]
    needed = {"distil": "train", "measure": "held-out"}.get(job.kind)
    if not any(needed in (None, row.split) for row in rows):
        by = f" by {', '.join(operators)}" if operators else ""
        raise ConflictError(
            f"rig {job.rig} has no closed {f'and finite {needed} ' if needed else ''}episodes{by}; "
            "collect more demonstrations first",
            code="conflict.no_demonstrations",
        )
    return rows


def _set_names(store: Store, job: JobRow) -> frozenset[str] | None:
    """Return the episodes of the training set that a distillation was told to use, or None."""
    name = str(job.options.get("set") or "") if job.kind == "distil" else ""
    if not name:
        return None
    store.curation.get_set(job.rig, name)
    return frozenset(item.episode for item in store.curation.members(job.rig, name))


def decisions(store: Store, job: JobRow) -> dict[str, Decision]:
    """Return what is decided about the episodes of a job: a training set's own decisions come before today's.

    Raises:
        UnknownNameError: there is no such training set.
    """
    if job.kind == "inspect":
        return {}
    decided = store.curation.of_rig(job.rig)
    if _set_names(store, job) is not None:
        decided |= {item.episode: item.decision for item in store.curation.members(job.rig, str(job.options["set"]))}
    return decided


def _set_given(store: Store, job: JobRow) -> dict[str, Any]:
    """Return the training set's name and digest, for the provenance.

    Raises:
        StoreError: a member's samples are not those that were saved.
    """
    if _set_names(store, job) is None:
        return {}
    row = store.curation.get_set(job.rig, str(job.options["set"]))
    for item in store.curation.members(job.rig, row.name):
        if store.curation.content_digest(store.episodes.get(item.episode)) != item.sha256:
            raise StoreError(
                f"training set {row.name}: episode {item.episode} does not have its recorded SHA-256; restore a backup",
                code="store.damaged",
            )
    return {"set": {"name": row.name, "sha256": row.sha256}}


def _episodes(
    store: Store, job: JobRow, rows: Sequence[EpisodeRow], rig: Rig, decided: Mapping[str, Decision]
) -> list[Episode]:
    """Return the samples, trimmed and weighted, corrections without their transient; inspected as they came."""
    found: list[Episode] = []
    for row in rows:
        episode: Episode | None = store.episodes.load(row)
        if episode is not None and job.kind != "inspect":
            episode = apply(decided.get(row.episode, Decision()), episode, rig)
        correction = Correction.of(row.task, row.notes)
        if episode is not None and correction is not None and job.kind != "inspect":
            left_s = max(correction.transient_s - decided.get(row.episode, Decision()).start_s, 0.0)
            episode = as_fragment(episode, replace(correction, transient_s=left_s))
        if episode is not None:
            is_raw = job.kind == "inspect"
            found.extend([episode] if is_raw else regular_stretches(episode, rig.timing.period_s))
    return found


def _given(rows: Sequence[EpisodeRow], decided: Mapping[str, Decision]) -> dict[str, Any]:
    """Return which demonstrations a job was given, and a digest over them."""
    listing: list[list[Any]] = [
        [row.episode, row.operator, row.split, row.samples, row.rig_digest]
        + ([item.start_s, item.end_s, item.weight] if (item := decided.get(row.episode)) is not None else [])
        for row in rows
    ]
    counts: dict[str, int] = {}
    for row in rows:
        counts[str(row.split)] = counts.get(str(row.split), 0) + 1
    return {
        "episodes": counts,
        "samples": sum(row.samples for row in rows),
        "operators": sorted({row.operator for row in rows}),
        "sha256": hashlib.sha256(canonical(listing).encode()).hexdigest(),
    }


def _write_inputs(store: Store, job: JobRow, folder: JobFolder) -> dict[str, Any]:
    version = store.versions.get(int(job.options["version"]))
    siblings = store.versions.of_job(version.job) if version.job is not None else []
    clones = [row.version for row in siblings if row.name == "clone" and row.version != version.version]
    clone = clones[0] if clones else 0
    in_service = store.versions.in_service(job.rig)
    in_service = 0 if in_service == version.version else in_service
    folder.write_bytes("input-version.policy", store.versions.policy(version.version))
    if clone:
        folder.write_bytes("input-clone.policy", store.versions.policy(clone))
    if in_service:
        folder.write_bytes("input-in-service.policy", store.versions.policy(in_service))
    against = int(job.options.get("against") or 0)
    if against:
        other = store.versions.get(against)
        if other.rig != job.rig:
            raise ConflictError(
                f"version {against} is for {other.rig}, version {version.version} for {job.rig}; compare within a rig",
                code="conflict.rig",
            )
        folder.write_bytes("input-against.policy", store.versions.policy(against))
    return {
        "clone": clone,
        "in_service": in_service,
        "against": against,
        "closed_loop_episodes": job.options.get("closed_loop_episodes", 50),
        "seed": job.options.get("seed", 1),
    }


def _write_cost(store: Store, job: JobRow, folder: JobFolder) -> None:
    """Write the recovered cost of a version and its policy, for a distillation from the cost alone."""
    version = store.versions.get(int(job.options["from_version"]))
    if version.rig != job.rig:
        raise ConflictError(
            f"version {version.version} is for {version.rig}, the job for {job.rig}; distil within a rig",
            code="conflict.rig",
        )
    cost = version.provenance.get("recovered_cost")
    if not isinstance(cost, dict):
        raise ConflictError(
            f"version {version.version} ({version.method}) has no recovered cost; only proximal-online versions have "
            "one, distil one and name it",
            code="conflict.no_cost",
        )
    folder.write_bytes("input-version.policy", store.versions.policy(version.version))
    folder.write_json("input-cost.json", cost)


def take_result(ledger: Ledger, job: JobRow, folder: JobFolder) -> None:
    """Store what a job left behind, in one transaction: done with its versions or measurement, or failed.

    Raises:
        NearhandError: the result or a policy file cannot be used; nothing was stored.
    """
    content = folder.read_json("result.json")
    if content.get("state") != "done":
        message, code = str(content.get("message", "no reason given"))[:2000], str(content.get("code", "job.failed"))
        end_failed(ledger, job, code, message)
        return
    result = content.get("result") or {}
    described = content.get("versions") or []
    if not isinstance(result, dict) or not isinstance(described, list):
        raise StoreError(f"job {job.job}: result.json does not hold a result map and a version list", code="job.result")
    written = folder.read_json("job.json")
    rig = ledger.store.rigs.get(job.rig)
    used = Rig.model_validate(written["rig"])
    with ledger.transaction():
        drafted = _draft(ledger, job, folder, described, used.digest(), written.get("given", {}))
        if job.kind == "measure":
            version = int(job.options["version"])
            ledger.store.versions.add_measurement(
                version, result, rig_digest=used.digest(), machine_digest=machine_digest(used), job=job.job
            )
            ledger.record("measured", rig=job.rig, who="keeper", detail={"job": job.job, "version": version})
        ledger.store.jobs.end(job.job, "done", result=result)
        ledger.record(
            "job-done", rig=rig.rig.name, who="keeper",
            detail={"job": job.job, "kind": job.kind, "versions": [row.version for row in drafted]},
        )  # fmt: skip
    drop_working_files(folder)


def _draft(
    ledger: Ledger, job: JobRow, folder: JobFolder, described: Sequence[Any], rig_digest: str, given: dict[str, Any]
) -> list[VersionRow]:
    rig = ledger.store.rigs.get(job.rig)
    rows: list[VersionRow] = []
    for item in described:
        if not isinstance(item, dict) or not isinstance(item.get("name"), str):
            raise StoreError(f"job {job.job}: result.json describes a version without a name", code="job.result")
        name = item["name"][:64]
        data = folder.read_bytes(f"output-{Path(name).name}.policy")
        _check_policy(data, rig, f"job {job.job}, version {name!r}")
        provenance = item.get("provenance")
        provenance = dict(provenance) if isinstance(provenance, dict) else {}
        provenance |= {"job": job.job, "options": job.options, "rig_digest": rig_digest, "demonstrations": given}
        clones = [row.version for row in rows if row.name == "clone"]
        row = ledger.store.versions.add(
            rig=job.rig, rig_digest=rig_digest, name=name, method=str(item.get("method", name))[:200], policy=data,
            provenance=provenance, parent=clones[0] if clones else None, job=job.job,
        )  # fmt: skip
        rows.append(row)
        ledger.record(
            "drafted", rig=job.rig, who="keeper",
            detail={"job": job.job, "version": row.version, "method": row.method, "sha256": row.sha256},
        )  # fmt: skip
    return rows


def _check_policy(data: bytes, rig: RigRow, what: str) -> None:
    file = read_policy(data)
    expected = (
        rig.rig.name,
        tuple(channel.name for channel in rig.rig.observations),
        tuple(channel.name for channel in rig.rig.actions),
    )
    if (file.rig, file.observations, file.actions) != expected:
        raise PolicyFormatError(
            f"{what}: the policy file is for rig {file.rig!r} with channels {file.observations} → {file.actions}, "
            f"not for {expected[0]!r} with {expected[1]} → {expected[2]}",
            code="policy.channels",
        )


def end_failed(ledger: Ledger, job: JobRow, code: str, message: str) -> None:
    """Store that a job failed, and why."""
    with ledger.transaction():
        ledger.store.jobs.end(job.job, "failed", code=code, message=message, result={"code": code, "message": message})
        ledger.record(
            "job-failed", rig=job.rig, who="keeper",
            detail={"job": job.job, "kind": job.kind, "code": code, "message": message},
        )  # fmt: skip


def take_or_fail(ledger: Ledger, job: JobRow, folder: JobFolder) -> None:
    """Store what a job left behind; a result that cannot be used is the job's failure, whatever is wrong with it.

    Raises:
        StoreError: the store itself cannot take anything at present; nothing was changed.
    """
    try:
        take_result(ledger, job, folder)
    except Exception as error:
        if isinstance(error, StoreError) and error.code in PASSING_CODES:
            raise
        if not isinstance(error, NearhandError):
            log_line(f"result-defect job={job.job} message={error!r}\n{traceback.format_exc()}")
        code = error.code if isinstance(error, NearhandError) else "job.result"
        end_failed(ledger, job, code, f"the job's result cannot be used: {error}"[:2000])


def last_words(folder: JobFolder) -> str:
    """Return the last line of a job's log, or nothing."""
    try:
        with (folder.path / "log.txt").open("rb") as stream:
            stream.seek(max(0, stream.seek(0, 2) - MAX_LOG_TAIL))
            lines = stream.read().decode(errors="replace").split("\n")
    except OSError:
        return ""
    return next((line.strip()[:1000] for line in reversed(lines) if line.strip()), "")


def drop_working_files(folder: JobFolder) -> None:
    """Remove what only a running job needs: copies of demonstrations and policies, checkpoints."""
    for pattern in ("episodes.safetensors", "input-*.policy", "checkpoint*"):
        for path in folder.path.glob(pattern):
            with contextlib.suppress(OSError):
                path.unlink()


def drop_folder(folder: JobFolder) -> None:
    """Remove a cancelled job's folder."""
    shutil.rmtree(folder.path, ignore_errors=True)
