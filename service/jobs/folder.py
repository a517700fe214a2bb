"""A job's folder: the only thing that passes between the keeper and a job's process, besides progress.

::

    job.json               kind, rig, options, where to send progress      written by the keeper
    episodes.safetensors   the demonstrations, with their uses             written by the keeper
    input-<name>.policy    policy files to measure                         written by the keeper
    checkpoint.*           whatever the job needs to resume                written by the job
    output-<name>.policy   policy files drafted                            written by the job
    result.json            present once the job is done or has failed      written by the job, last

Every file is written beside its name and renamed, so a reader sees a whole file or none.
"""

from __future__ import annotations

import json
import os
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
from safetensors import SafetensorError, safe_open
from safetensors.numpy import save as save_tensors

from nearhand.service.episodes.episode import Episode
from nearhand.service.errors import StoreError


class JobFolder:
    """Reads and writes one job's files.

    Raises:
        StoreError: a file is missing or damaged.
    """

    def __init__(self, path: Path) -> None:
        self.path = path

    def write_bytes(self, name: str, data: bytes) -> None:
        """Write a file whole, durably."""
        self.path.mkdir(parents=True, exist_ok=True)
        partial = self.path / f".{name}.part"
        with partial.open("wb") as stream:
            stream.write(data)
            stream.flush()
            os.fsync(stream.fileno())
        partial.replace(self.path / name)

    def read_bytes(self, name: str) -> bytes:
        """Return a file's bytes."""
        try:
            return (self.path / name).read_bytes()
        except OSError as error:
            raise StoreError(f"job folder {self.path}: cannot read {name}: {error}") from error

    def has(self, name: str) -> bool:
        """Tell whether a file is there."""
        return (self.path / name).is_file()

    def write_json(self, name: str, value: dict[str, Any]) -> None:
        """Write a JSON file."""
        self.write_bytes(name, json.dumps(value, sort_keys=True, allow_nan=False).encode())

    def read_json(self, name: str) -> dict[str, Any]:
        """Return a JSON file's object."""
        try:
            value = json.loads(self.read_bytes(name))
        except ValueError as error:
            raise StoreError(f"job folder {self.path}: {name} is damaged: {error}") from error
        if not isinstance(value, dict):
            raise StoreError(f"job folder {self.path}: {name} holds no object")
        return value

    def write_episodes(self, episodes: Sequence[Episode]) -> None:
        """Write the demonstrations that the job may use."""
        tensors: dict[str, np.ndarray[Any, Any]] = {}
        facts = []
        for index, item in enumerate(episodes):
            tensors[f"{index}.times"] = item.times_s
            tensors[f"{index}.observations"] = np.ascontiguousarray(item.observations)
            tensors[f"{index}.actions"] = np.ascontiguousarray(item.actions)
            names = ("episode", "rig", "operator", "terminated", "outcome", "split", "weight", "fragment")
            facts.append({name: getattr(item, name) for name in names})
        self.write_bytes("episodes.safetensors", save_tensors(tensors, metadata={"episodes": json.dumps(facts)}))

    def read_episodes(self) -> list[Episode]:
        """Return the demonstrations."""
        path = self.path / "episodes.safetensors"
        try:
            with safe_open(path, framework="numpy") as file:
                facts = json.loads(file.metadata()["episodes"])
                return [
                    Episode(
                        times_s=file.get_tensor(f"{index}.times"),
                        observations=file.get_tensor(f"{index}.observations"),
                        actions=file.get_tensor(f"{index}.actions"),
                        **fact,
                    )
                    for index, fact in enumerate(facts)
                ]
        except (OSError, SafetensorError, ValueError, KeyError, TypeError) as error:
            raise StoreError(f"job folder {self.path}: the episodes are missing or damaged: {error}") from error
