"""A critic quadratic in the action: Q(x, u) = c(x) + b(x)·u + uᵀH(x)u, with H positive semi-definite.

With a Gaussian reference the soft minimum over actions and the improved policy are closed forms, so neither needs
samples and neither is biased. Everything here is a cost: lower is better. Actions u are in half ranges.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import torch
from torch import Tensor
from torch.nn.functional import softplus

from nearhand.service.learn.layers import Layers

#: Offset that starts the curvature small: softplus(-3) squared is about .0024.
CURVATURE_START = -3.0


@dataclass(frozen=True)
class Coefficients:
    """Q's coefficients at N windows: ``level`` (N,), ``slope`` (N, m), ``factor`` (N, m, m) with H = factor·factorᵀ."""

    level: Tensor
    slope: Tensor
    factor: Tensor

    def at(self, rows: Tensor) -> Coefficients:
        """Return the coefficients of some rows."""
        return Coefficients(self.level[rows], self.slope[rows], self.factor[rows])

    def curvature(self) -> Tensor:
        """Return H (N, m, m)."""
        return self.factor @ self.factor.transpose(1, 2)


class QuadraticCritic:
    """A network from windows to the coefficients; ``gain`` scales the level, whose range grows with the horizon."""

    def __init__(self, inputs: int, actions: int, hidden: tuple[int, ...], gain: float) -> None:
        self.actions = actions
        lower = np.tril_indices(actions)
        self._rows, self._columns = (torch.from_numpy(index) for index in lower)
        self._on_diagonal = self._rows == self._columns
        self.layers = Layers((inputs, *hidden, 1 + actions + len(lower[0])))
        self._gain = gain

    def draw(self, generator: np.random.Generator) -> Tensor:
        """Return starting parameters: Q is zero but for a small curvature."""
        return self.layers.draw(generator, last_gain=0.0)

    def __call__(self, flat: Tensor, windows: Tensor) -> Coefficients:
        """Return the coefficients at windows (N, d)."""
        m = self.actions
        out = self.layers(flat, windows)
        entries = out[:, 1 + m :]
        entries = torch.where(self._on_diagonal, softplus(entries + CURVATURE_START), entries)
        if m == 1:
            factor = entries[:, :, None]
        else:
            factor = torch.zeros(len(windows), m, m, dtype=out.dtype).index_put(
                (torch.arange(len(windows))[:, None], self._rows[None], self._columns[None]), entries
            )
        return Coefficients(self._gain * out[:, 0], out[:, 1 : 1 + m], factor)


def action_value(at: Coefficients, actions: Tensor) -> Tensor:
    """Return Q (N,) at actions (N, m)."""
    bent = (at.factor.transpose(1, 2) @ actions[:, :, None])[:, :, 0]
    return at.level + (at.slope * actions).sum(dim=1) + bent.square().sum(dim=1)


def soft_minimum(at: Coefficients, mean: Tensor, variance: Tensor, alpha: float) -> Tensor:
    """Return V (N,) = -(1/α) log E exp(-α Q(x, u)) over u ~ N(mean, diag variance).

    With g = b + 2H·mean: V = Q(mean) + (1/2α) log det(I + 2α S½HS½) - (α/2) gᵀ(S⁻¹ + 2αH)⁻¹ g.

    Args:
        at: coefficients at N windows.
        mean: (N, m).
        variance: (m,).
        alpha: inverse temperature, positive.

    Source: the Gaussian integral; derived here, tested against sampling and quadrature.
    """
    root = variance.sqrt()
    scaled = root[None, :, None] * at.factor
    gradient = root * (at.slope + 2 * (at.factor @ (at.factor.transpose(1, 2) @ mean[:, :, None]))[:, :, 0])
    if at.slope.shape[1] == 1:
        precision = 1 + 2 * alpha * scaled[:, 0, 0].square()
        log_det, bend = torch.log(precision), gradient[:, 0].square() / precision
    else:
        matrix = torch.eye(at.slope.shape[1]) + 2 * alpha * scaled @ scaled.transpose(1, 2)
        lower = torch.linalg.cholesky(matrix)
        log_det = 2 * torch.log(torch.diagonal(lower, dim1=1, dim2=2)).sum(dim=1)
        half = torch.linalg.solve_triangular(lower, gradient[:, :, None], upper=False)
        bend = half.square().sum(dim=(1, 2))
    return action_value(at, mean) + log_det / (2 * alpha) - 0.5 * alpha * bend


def improved_gaussian(at: Coefficients, mean: Tensor, variance: Tensor, alpha: float) -> tuple[Tensor, Tensor]:
    """Return mean (N, m) and covariance (N, m, m) of the policy ∝ N(mean, diag variance) · exp(-α Q).

    S' = (S⁻¹ + 2αH)⁻¹ and m' = mean - α S'(b + 2H·mean). Source: completing the square.
    """
    curvature = at.curvature()
    covariance = torch.linalg.inv(torch.diag(1 / variance) + 2 * alpha * curvature)
    gradient = at.slope + 2 * (curvature @ mean[:, :, None])[:, :, 0]
    return mean - alpha * (covariance @ gradient[:, :, None])[:, :, 0], covariance
