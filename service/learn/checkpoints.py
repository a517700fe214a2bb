"""Checkpoints: one safetensors file with a JSON text in its header, written whole after every iteration."""

from __future__ import annotations

import json
from collections.abc import Mapping
from typing import Any

import numpy as np
from safetensors import SafetensorError, safe_open
from safetensors.numpy import save

from nearhand.service.errors import StoreError
from nearhand.service.jobs.folder import JobFolder

KEY = "nearhand_checkpoint"
Arrays = dict[str, np.ndarray[Any, Any]]


def write_checkpoint(folder: JobFolder, name: str, arrays: Mapping[str, Any], facts: Mapping[str, Any]) -> None:
    """Write ``checkpoint.<name>.safetensors``; floats in ``facts`` come back bit for bit.

    Args:
        folder: the job's.
        name: which part of the job.
        arrays: NumPy arrays by name.
        facts: JSON values.
    """
    whole = {key: np.ascontiguousarray(value) for key, value in arrays.items()}
    folder.write_bytes(f"checkpoint.{name}.safetensors", save(whole, metadata={KEY: json.dumps(facts)}))


def read_checkpoint(folder: JobFolder, name: str, identity: str) -> tuple[Arrays, dict[str, Any]] | None:
    """Return a checkpoint's arrays and facts, or None if there is none for this ``identity``.

    ``facts["identity"]`` names recipe and data; a checkpoint of other ones is of no use and is not taken.

    Raises:
        StoreError: the file is damaged.
    """
    file_name = f"checkpoint.{name}.safetensors"
    if not folder.has(file_name):
        return None
    try:
        with safe_open(folder.path / file_name, framework="numpy") as file:
            facts = json.loads(file.metadata()[KEY])
            arrays = {key: file.get_tensor(key) for key in file.keys()}  # noqa: SIM118
    except (OSError, SafetensorError, ValueError, KeyError, TypeError) as error:
        raise StoreError(
            f"job folder {folder.path}: {file_name} is damaged: {error}; delete it to begin that part again"
        ) from error
    return (arrays, facts) if facts.get("identity") == identity else None
