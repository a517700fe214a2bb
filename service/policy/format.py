"""A policy file: safetensors with a JSON header in its metadata. Nothing in it is ever executed.

Tensors: ``observation_mean``, ``observation_scale``, ``action_middle``, ``action_half``, ``log_sd``, ``weight.0`` …,
``bias.0`` …, ``probe.window``, ``probe.action``; with a confidence gate also ``novelty.*`` (see envelope.novelty).
"""

from __future__ import annotations

import hashlib
import json
import struct
from dataclasses import dataclass
from typing import Any

import numpy as np
from safetensors import SafetensorError
from safetensors.numpy import load as load_tensors
from safetensors.numpy import save as save_tensors

from nearhand.service.errors import PolicyFormatError
from nearhand.service.policy.network import Float32, Policy

FORMAT = 1
HEADER_KEY = "nearhand_policy"
MAX_POLICY_BYTES = 4 * 1024 * 1024
MAX_LAYERS = 8
PROBES = 8
#: Largest difference between recorded and recomputed probe actions, in half ranges; float32 sums of ≤ 4096 terms.
PROBE_TOLERANCE = 1e-4


@dataclass(frozen=True, slots=True)
class PolicyFile:
    """What a policy file holds.

    Attributes:
        policy: the function.
        rig: name of the rig it is for.
        observations, actions: channel names, in order.
        method: ``clone``, ``proximal-online`` or ``proximal-offline``.
        novelty: tensors of the confidence gate by short name, empty if there is none.
        extra: further header entries, strings and numbers only.
    """

    policy: Policy
    rig: str
    observations: tuple[str, ...]
    actions: tuple[str, ...]
    method: str
    novelty: dict[str, Float32]
    extra: dict[str, Any]


def sha256(data: bytes) -> str:
    """Return the hexadecimal SHA-256 of a policy file."""
    return hashlib.sha256(data).hexdigest()


def write_policy(file: PolicyFile) -> bytes:
    """Return the bytes of a policy file, with a probe that a reader can recompute."""
    policy = file.policy
    tensors: dict[str, Float32] = {
        "observation_mean": policy.observation_mean,
        "observation_scale": policy.observation_scale,
        "action_middle": policy.action_middle,
        "action_half": policy.action_half,
        "log_sd": policy.log_sd,
    }
    for index, (weight, bias) in enumerate(zip(policy.weights, policy.biases, strict=True)):
        tensors[f"weight.{index}"] = weight
        tensors[f"bias.{index}"] = bias
    probe = np.random.default_rng(0).standard_normal((PROBES, policy.input_size)).astype(np.float32)
    tensors["probe.window"] = probe
    tensors["probe.action"] = policy.mean(probe)
    tensors.update({f"novelty.{name}": values for name, values in file.novelty.items()})
    header = {
        "format": FORMAT,
        "rig": file.rig,
        "observations": list(file.observations),
        "actions": list(file.actions),
        "method": file.method,
        "layers": len(policy.weights),
        "past_observations": policy.past_observations,
        "past_actions": policy.past_actions,
        "extra": file.extra,
    }
    contiguous = {name: np.ascontiguousarray(values, dtype=np.float32) for name, values in tensors.items()}
    return bytes(save_tensors(contiguous, metadata={HEADER_KEY: json.dumps(header, sort_keys=True)}))


def _header(data: bytes) -> dict[str, Any]:
    if len(data) > MAX_POLICY_BYTES:
        raise PolicyFormatError(f"policy file of {len(data)} bytes is over the limit of {MAX_POLICY_BYTES}")
    if len(data) < 8:
        raise PolicyFormatError("policy file is empty or cut short")
    (length,) = struct.unpack("<Q", data[:8])
    if length > len(data) - 8:
        raise PolicyFormatError("policy file is cut short: its header is longer than the file")
    try:
        metadata = json.loads(data[8 : 8 + length])["__metadata__"]
        header = json.loads(metadata[HEADER_KEY])
    except (ValueError, KeyError, TypeError, RecursionError) as error:
        raise PolicyFormatError("policy file has no readable policy header") from error
    if not isinstance(header, dict) or header.get("format") != FORMAT:
        raise PolicyFormatError("policy file is of another format; distil the version again with this release")
    return header


def _sizes(header: dict[str, Any]) -> tuple[int, int, int, list[str], list[str]]:
    layers, past_observations, past_actions = (
        header.get(name) for name in ("layers", "past_observations", "past_actions")
    )
    names = [header.get("observations"), header.get("actions")]
    for label, value, low, high in (
        ("layers", layers, 1, MAX_LAYERS),
        ("past_observations", past_observations, 0, 16),
        ("past_actions", past_actions, 0, 16),
    ):
        if type(value) is not int or not low <= value <= high:
            raise PolicyFormatError(f"policy header: {label} = {value!r} is not an integer in [{low}, {high}]")
    for channels in names:
        if not isinstance(channels, list) or not channels or not all(isinstance(name, str) for name in channels):
            raise PolicyFormatError("policy header: channel names are missing")
    return layers, past_observations, past_actions, names[0], names[1]  # type: ignore[return-value]


def read_policy(data: bytes, *, expected_sha256: str | None = None) -> PolicyFile:
    """Read and fully check a policy file: hash, header, shapes, finiteness, probe.

    Raises:
        PolicyFormatError: anything is not as the header says; the message tells what.
    """
    if expected_sha256 is not None and sha256(data) != expected_sha256:
        raise PolicyFormatError("policy file does not have the recorded SHA-256; it was changed or damaged")
    header = _header(data)
    layers, past_observations, past_actions, observations, actions = _sizes(header)
    try:
        tensors = load_tensors(data)
    except (SafetensorError, ValueError, KeyError, TypeError, OverflowError, MemoryError) as error:
        raise PolicyFormatError(f"policy file is no valid safetensors file: {error}") from error
    n, m = len(observations), len(actions)
    width = n * (1 + past_observations) + m * past_actions
    _expect(tensors, "observation_mean", (n,))
    _expect(tensors, "observation_scale", (n,))
    for name in ("action_middle", "action_half", "log_sd"):
        _expect(tensors, name, (m,))
    inputs = width
    for index in range(layers):
        weight = tensors.get(f"weight.{index}")
        if weight is None or weight.ndim != 2:
            raise PolicyFormatError(f"policy file: weight.{index} is missing or no matrix")
        outputs = m if index == layers - 1 else int(weight.shape[1])
        _expect(tensors, f"weight.{index}", (inputs, outputs))
        _expect(tensors, f"bias.{index}", (outputs,))
        inputs = outputs
    _expect(tensors, "probe.window", (PROBES, width))
    _expect(tensors, "probe.action", (PROBES, m))
    for name, values in tensors.items():
        if values.dtype != np.float32 or not np.isfinite(values).all():
            raise PolicyFormatError(f"policy file: {name} must be finite float32")
    if (tensors["observation_scale"] <= 0).any() or (tensors["action_half"] <= 0).any():
        raise PolicyFormatError("policy file: scales must be positive")
    policy = Policy(
        weights=tuple(tensors[f"weight.{index}"] for index in range(layers)),
        biases=tuple(tensors[f"bias.{index}"] for index in range(layers)),
        observation_mean=tensors["observation_mean"],
        observation_scale=tensors["observation_scale"],
        action_middle=tensors["action_middle"],
        action_half=tensors["action_half"],
        log_sd=tensors["log_sd"],
        past_observations=past_observations,
        past_actions=past_actions,
    )
    with np.errstate(over="ignore", invalid="ignore"):  # a damaged weight may overflow: the difference then tells
        difference = float(np.max(np.abs(policy.mean(tensors["probe.window"]) - tensors["probe.action"])))
    if not difference <= PROBE_TOLERANCE * max(1.0, float(np.max(np.abs(tensors["probe.action"])))):
        raise PolicyFormatError(f"policy file: probe actions differ by {difference:.2g}; it would not act as trained")
    novelty = {name.removeprefix("novelty."): tensors[name] for name in tensors if name.startswith("novelty.")}
    extra = header.get("extra")
    return PolicyFile(
        policy=policy,
        rig=str(header.get("rig")),
        observations=tuple(observations),
        actions=tuple(actions),
        method=str(header.get("method")),
        novelty=novelty,
        extra=extra if isinstance(extra, dict) else {},
    )


def _expect(tensors: dict[str, Float32], name: str, shape: tuple[int, ...]) -> None:
    values = tensors.get(name)
    if values is None:
        raise PolicyFormatError(f"policy file: tensor {name} is missing; expected shape {shape}")
    if tuple(values.shape) != shape:
        raise PolicyFormatError(f"policy file: tensor {name} has shape {tuple(values.shape)}; expected {shape}")
