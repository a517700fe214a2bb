"""A tanh network over one flat vector of parameters, and Adam over the same vector.

One vector makes an optimiser step a few tensor operations and a checkpoint three tensors. Every random number comes
from a NumPy generator that the caller names, so that a run is repeated exactly without saving generator states.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
import torch
from torch import Tensor

from nearhand.service.policy.network import Float32


@dataclass(frozen=True)
class Layers:
    """Shape of a network: ``widths`` from input to output; hidden layers use tanh, the last one is linear."""

    widths: tuple[int, ...]
    _splits: tuple[int, ...] = field(init=False)

    def __post_init__(self) -> None:
        splits: list[int] = []
        for inputs, outputs in zip(self.widths[:-1], self.widths[1:], strict=True):
            splits += [inputs * outputs, outputs]
        object.__setattr__(self, "_splits", tuple(splits))

    @property
    def count(self) -> int:
        """Number of parameters."""
        return sum(self._splits)

    def draw(self, generator: np.random.Generator, *, last_gain: float = 1.0) -> Tensor:
        """Return starting parameters: uniform with variance 1/inputs, zero biases, the last layer times a gain."""
        parts: list[np.ndarray[tuple[int, ...], np.dtype[np.float32]]] = []
        layers = len(self.widths) - 1
        for index, (inputs, outputs) in enumerate(zip(self.widths[:-1], self.widths[1:], strict=True)):
            bound = np.sqrt(3.0 / inputs) * (last_gain if index == layers - 1 else 1.0)
            parts.append(generator.uniform(-bound, bound, inputs * outputs).astype(np.float32))
            parts.append(np.zeros(outputs, dtype=np.float32))
        return torch.from_numpy(np.concatenate(parts))

    def matrices(self, flat: Tensor) -> list[tuple[Tensor, Tensor]]:
        """Return each layer's weight (inputs, outputs) and bias (outputs,) as views of the vector."""
        pieces = torch.split(flat, list(self._splits))
        shapes = zip(self.widths[:-1], self.widths[1:], strict=True)
        return [(pieces[2 * i].view(a, b), pieces[2 * i + 1]) for i, (a, b) in enumerate(shapes)]

    def hidden(self, flat: Tensor, inputs: Tensor) -> tuple[Tensor, Tensor, Tensor]:
        """Return the last hidden activations (N, h) and the last layer's weight and bias."""
        layers = self.matrices(flat)
        values = inputs
        for weight, bias in layers[:-1]:
            values = torch.tanh(torch.addmm(bias, values, weight))
        return values, *layers[-1]

    def __call__(self, flat: Tensor, inputs: Tensor) -> Tensor:
        """Return the outputs (N, outputs) for inputs (N, inputs)."""
        values, weight, bias = self.hidden(flat, inputs)
        return torch.addmm(bias, values, weight)

    def decay_mask(self) -> Tensor:
        """Return 1 for weights and 0 for biases: what weight decay acts on."""
        kinds = [torch.full((size,), float(index % 2 == 0)) for index, size in enumerate(self._splits)]
        return torch.cat(kinds)

    def arrays(self, flat: Tensor) -> tuple[tuple[Float32, ...], tuple[Float32, ...]]:
        """Return the weights and the biases as NumPy arrays of their own."""
        layers = self.matrices(flat.detach())
        return tuple(w.numpy().copy() for w, _ in layers), tuple(b.numpy().copy() for _, b in layers)


class Adam:
    """Adam with decoupled weight decay over one vector, in place.

    Source: Kingma & Ba, "Adam: a method for stochastic optimization", 2015; decay after Loshchilov & Hutter, 2019.
    """

    def __init__(self, values: Tensor, *, decay: Tensor | None = None) -> None:
        self.values = values
        self.first = torch.zeros_like(values)
        self.second = torch.zeros_like(values)
        self.steps = 0
        self._decay = decay

    def step(self, gradient: Tensor, rate: float) -> None:
        """Descend along ``gradient`` at a learning rate."""
        self.steps += 1
        with torch.no_grad():
            self.first.lerp_(gradient, 0.1)
            self.second.mul_(0.999).addcmul_(gradient, gradient, value=0.001)
            if self._decay is not None:
                self.values.addcmul_(self._decay, self.values, value=-rate)
            scale = (self.second / (1 - 0.999**self.steps)).sqrt_().add_(1e-8)
            self.values.addcdiv_(self.first, scale, value=-rate / (1 - 0.9**self.steps))

    def state(self, name: str) -> dict[str, Float32]:
        """Return values and moments by name, for a checkpoint."""
        tensors = {f"{name}.values": self.values, f"{name}.first": self.first, f"{name}.second": self.second}
        return {key: tensor.detach().numpy().copy() for key, tensor in tensors.items()}

    def restore(self, name: str, tensors: dict[str, Float32], steps: int) -> None:
        """Take values and moments from a checkpoint."""
        with torch.no_grad():
            self.values.copy_(torch.from_numpy(tensors[f"{name}.values"]))
            self.first.copy_(torch.from_numpy(tensors[f"{name}.first"]))
            self.second.copy_(torch.from_numpy(tensors[f"{name}.second"]))
        self.steps = steps


def cosine_rate(rate: float, step: int, steps: int, *, last: float = 0.01) -> float:
    """Return the learning rate of a step, falling along a half cosine to ``last`` times the first."""
    fraction = step / max(steps - 1, 1)
    return rate * (last + (1 - last) * 0.5 * (1 + float(np.cos(np.pi * fraction))))


def draw_batches(
    generator: np.random.Generator, count: int, batch: int
) -> Sequence[np.ndarray[tuple[int], np.dtype[np.int64]]]:
    """Return one pass over ``count`` rows in random order, in whole batches (one batch of all if they are few)."""
    order = generator.permutation(count)
    if count <= batch:
        return [order]
    return [order[start : start + batch] for start in range(0, count - batch + 1, batch)]
