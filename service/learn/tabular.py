"""The exact method on finite models: the same proximal-point step with expectations instead of samples.

It is the yardstick of the sampled method: every identity of the theory holds here to rounding. Cost and Q are linear
in features of the state-action pair, c = Φw and Q = Φθ, one-hot ones by default; occupancies are normalised to one.
With other features the model has to be linear in them too, and the occupancy that is tilted is that of the features.

Source: Viano et al., "Proximal Point Imitation Learning", NeurIPS 2022; the linear programme: Puterman, "Markov
Decision Processes", 1994, sec. 6.9; recomputed here.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import linprog

Float64 = NDArray[np.float64]
#: Differences of the objective below this are rounding.
ROUNDING = 1e-14
CostClass = Literal["l2", "l1", "linf", "simplex"]


def _log_sum_exp(values: Float64) -> Float64:
    """Return log Σ exp over the last axis; in the inner loop of every step, so without the library's checks."""
    top = values.max(axis=-1)
    return np.asarray(top + np.log(np.exp(values - top[..., None]).sum(axis=-1)))


@dataclass(frozen=True)
class FiniteModel:
    """A finite decision process without its cost.

    Attributes:
        transition: (S, A, S) probabilities.
        start: (S,) start distribution.
        discount: g in (0, 1).
    """

    transition: Float64
    start: Float64
    discount: float

    @property
    def states(self) -> int:
        """Number S."""
        return int(self.transition.shape[0])

    @property
    def actions(self) -> int:
        """Number A."""
        return int(self.transition.shape[1])


def occupancy_of(model: FiniteModel, policy: Float64) -> Float64:
    """Return the normalised occupancy (S, A) of a policy (S, A): (1-g)(I - g P_πᵀ)⁻¹ ν times π."""
    kernel = np.einsum("sa,sat->st", policy, model.transition)
    system = np.eye(model.states) - model.discount * kernel.T
    return np.asarray(np.linalg.solve(system, (1 - model.discount) * model.start)[:, None] * policy)


def flow_residual(model: FiniteModel, occupancy: Float64) -> Float64:
    """Return how far an occupancy violates the flow constraint, (S,)."""
    arriving = np.einsum("sa,sat->t", occupancy, model.transition)
    return np.asarray(occupancy.sum(axis=1) - model.discount * arriving - (1 - model.discount) * model.start)


def policy_of(occupancy: Float64) -> Float64:
    """Return the policy (S, A) of an occupancy with no empty state."""
    return np.asarray(occupancy / occupancy.sum(axis=1, keepdims=True))


def relative_entropy(new: Float64, old: Float64) -> float:
    """Return KL(new ‖ old)."""
    kept = new > 0
    return float(np.sum(new[kept] * np.log(new[kept] / old[kept])))


def conditional_entropy(new: Float64, old: Float64) -> float:
    """Return Σ new log(π_new/π_old), the relative entropy of the action given the state, of occupancies (S, A)."""
    ratio = policy_of(new) / policy_of(old)
    kept = new > 0
    return float(np.sum(new[kept] * np.log(ratio[kept])))


def class_distance(gap: Float64, kind: CostClass) -> float:
    """Return the largest ⟨w, gap⟩ over the cost class: the dual norm (for the simplex, one-sided)."""
    flat = gap.ravel()
    if kind == "l2":
        return float(np.linalg.norm(flat))
    if kind == "l1":
        return float(np.abs(flat).max())
    if kind == "linf":
        return float(np.abs(flat).sum())
    return float(flat.max())


def project_simplex(values: Float64, total: float = 1.0) -> Float64:
    """Return the nearest point of the simplex. Source: Held, Wolfe & Crowder 1974, by sorting."""
    ordered = np.sort(values)[::-1]
    sums = np.cumsum(ordered) - total
    last = np.nonzero(ordered * np.arange(1, len(values) + 1) > sums)[0][-1]
    return np.asarray(np.maximum(values - sums[last] / (last + 1), 0.0))


def project_class(values: Float64, kind: CostClass) -> Float64:
    """Return the nearest member of the cost class."""
    if kind == "l2":
        return values / max(1.0, float(np.linalg.norm(values)))
    if kind == "linf":
        return np.clip(values, -1.0, 1.0)
    if kind == "simplex":
        return project_simplex(values)
    if np.abs(values).sum() <= 1:
        return values
    return np.asarray(np.sign(values) * project_simplex(np.abs(values)))


@dataclass(frozen=True)
class Centre:
    """The last iterate: its pair occupancy λ (S, A) and the occupancy d (S, A) whose policy is the reference."""

    pairs: Float64
    policy: Float64


@dataclass(frozen=True)
class Evaluation:
    """One solved step.

    Attributes:
        cost, q: (S, A).
        value: G.
        pairs: λ (S, A), or that of the features (m,).
        policy, occupancy: the improved policy (S, A) and its occupancy (S, A).
        gap: duality gap.
        iterations: of the inner method.
        gradient_cost: norm of the projected gradient for the cost weights, zero where no member of the class is better.
        gradient_q: norm of the gradient for the Q weights: the violation of the flow constraint in the features.
        excitation: smallest eigenvalue of the features' second moments under ``occupancy``; the theory asks that it
            stay away from zero over all iterates (persistent excitation).
    """

    cost: Float64
    q: Float64
    value: float
    pairs: Float64
    policy: Float64
    occupancy: Float64
    gap: float
    iterations: int
    gradient_cost: float
    gradient_q: float
    excitation: float


@dataclass(frozen=True)
class LinearFeatures:
    """Features Φ (S·A, m), rows in the simplex, in which the model is linear: P = Φ M with kernel M (m, S)."""

    phi: Float64
    kernel: Float64


def excitation_of(occupancy: Float64, features: LinearFeatures | None = None) -> float:
    """Return the smallest eigenvalue of E φφᵀ under an occupancy (S, A); features are one-hot by default."""
    if features is None:
        return float(occupancy.min())
    return float(np.linalg.eigvalsh((features.phi.T * occupancy.ravel()) @ features.phi)[0])


class JointObjective:
    """G(w, θ) of one proximal-point step with one-hot features, its gradient, and what is recovered from it.

    With ``alpha`` infinite the conditional term is absent, Q is the value of its state, given as (S, 1), and the policy
    is that of λ.
    """

    def __init__(self, model: FiniteModel, centre: Centre, expert: Float64, eta: float, alpha: float) -> None:
        self.model, self.expert, self.eta, self.alpha = model, expert, eta, alpha
        self._flat = model.transition.reshape(-1, model.states)
        self._log_pairs = np.log(centre.pairs)
        self._log_policy = np.log(centre.policy)
        self._centre = centre

    def __call__(self, cost: Float64, q: Float64) -> tuple[float, Float64, Float64]:
        """Return G and its gradients for the cost and for Q, each (S, A)."""
        model = self.model
        if np.isinf(self.alpha):
            values = q[:, 0]
            pairs, tilt = self._tilted(cost + model.discount * model.transition @ values - q)
            arriving = self._arriving(pairs)
            gain = -tilt / self.eta + (1 - model.discount) * model.start @ values - float(np.sum(self.expert * cost))
            return float(gain), pairs - self.expert, (arriving - pairs.sum(axis=1))[:, None]
        soft = _log_sum_exp(self._log_policy - self.alpha * q)
        values = -soft / self.alpha
        policy = np.exp(self._log_policy - self.alpha * q - soft[:, None])
        pairs, tilt = self._tilted(cost + model.discount * model.transition @ values - q)
        gain = -tilt / self.eta + (1 - model.discount) * model.start @ values - float(np.sum(self.expert * cost))
        return float(gain), pairs - self.expert, self._arriving(pairs)[:, None] * policy - pairs

    def linear(self, features: LinearFeatures, w: Float64, theta: Float64) -> tuple[float, Float64, Float64]:
        """Return G and its gradients (m,) for cost and Q weights (m,), with the feature occupancy tilted."""
        model, phi = self.model, features.phi
        q = (phi @ theta).reshape(self.expert.shape)
        soft = _log_sum_exp(self._log_policy - self.alpha * q)
        values = -soft / self.alpha
        policy = np.exp(self._log_policy - self.alpha * q - soft[:, None])
        centre, expert = phi.T @ self._centre.pairs.ravel(), phi.T @ self.expert.ravel()
        logits = np.log(centre) - self.eta * (w + model.discount * features.kernel @ values - theta)
        tilt = float(_log_sum_exp(logits))
        occupied = np.exp(logits - tilt)
        arriving = (1 - model.discount) * model.start + model.discount * occupied @ features.kernel
        gain = -tilt / self.eta + (1 - model.discount) * model.start @ values - float(expert @ w)
        return float(gain), occupied - expert, phi.T @ (arriving[:, None] * policy).ravel() - occupied

    def _tilted(self, delta: Float64) -> tuple[Float64, float]:
        logits = self._log_pairs - self.eta * delta
        tilt = float(_log_sum_exp(logits.ravel()))
        return np.exp(logits - tilt), tilt

    def _arriving(self, pairs: Float64) -> Float64:
        model = self.model
        onward = pairs.ravel() @ self._flat
        return np.asarray((1 - model.discount) * model.start + model.discount * onward)

    def recover(self, cost: Float64, q: Float64) -> tuple[Float64, Float64]:
        """Return λ (S, A) and the improved policy (S, A)."""
        _, cost_gradient, _ = self(cost, q)
        if np.isinf(self.alpha):
            return cost_gradient + self.expert, policy_of(cost_gradient + self.expert)
        log_policy = self._log_policy - self.alpha * q
        policy = np.exp(log_policy - _log_sum_exp(log_policy)[:, None])
        return cost_gradient + self.expert, policy

    def primal(
        self, occupancy: Float64, kind: CostClass | None, cost: Float64, features: LinearFeatures | None = None
    ) -> float:
        """Return the regularised problem's value at a flow-consistent occupancy: never below G."""

        def seen(pairs: Float64) -> Float64:
            return pairs if features is None else features.phi.T @ pairs.ravel()

        gap = occupancy - self.expert
        distance = float(np.sum(cost * gap)) if kind is None else class_distance(seen(gap), kind)
        old = self._centre.policy * occupancy.sum(axis=1, keepdims=True)
        return (
            distance
            + relative_entropy(seen(occupancy), seen(self._centre.pairs)) / self.eta
            + (0.0 if np.isinf(self.alpha) else conditional_entropy(occupancy, old) / self.alpha)
        )


def evaluate(
    model: FiniteModel,
    centre: Centre,
    expert: Float64,
    eta: float,
    alpha: float,
    kind: CostClass | None,
    *,
    cost: Float64 | None = None,
    features: LinearFeatures | None = None,
    tolerance: float = 1e-12,
    gradient_tolerance: float = np.inf,
    limit: int = 200_000,
) -> Evaluation:
    """Maximise G jointly over cost and Q weights, with no learning rate to choose.

    Accelerated projected gradient; the first step is 1/(α + 5η), a bound on the curvature for features of norm one at
    most, and grows or shrinks by the sufficient-ascent test; momentum restarts when the objective falls. It ends when
    the duality gap and both gradient norms are within their tolerances.

    Args:
        model, centre, expert: the problem; ``expert`` is the occupancy (S, A) to be matched.
        eta, alpha: prox strengths; ``alpha`` may be infinite.
        kind: cost class; None keeps ``cost`` fixed.
        cost: the fixed cost, or where to start with one-hot features.
        features: for both cost and Q, of a model linear in them; one-hot by default.
        tolerance: of the duality gap.
        gradient_tolerance: of the two gradient norms.
        limit: most iterations.

    Source: Beck & Teboulle 2009 (acceleration); O'Donoghue & Candès 2015 (restart).
    """
    objective = JointObjective(model, centre, expert, eta, alpha)
    shape = expert.shape
    if features is not None and (np.isinf(alpha) or kind is None):
        raise ValueError("features need a finite alpha and a cost class")

    def project(values: Float64) -> Float64:
        return values if kind is None else project_class(values.ravel(), kind).reshape(values.shape)

    def spread(weights: Float64) -> Float64:
        return weights if features is None else (features.phi @ weights).reshape(shape)

    def ascent(w: Float64, q: Float64) -> tuple[float, Float64, Float64]:
        return objective(w, q) if features is None else objective.linear(features, w, q)

    def norms(w: Float64, q: Float64) -> tuple[float, float]:
        _, for_cost, for_q = ascent(w, q)
        moved = project(w + for_cost) - w if kind is not None else np.zeros(1)
        return float(np.linalg.norm(moved)), float(np.linalg.norm(for_q))

    def gap_at(w: Float64, q: Float64, value: float) -> float:
        occupancy = occupancy_of(model, objective.recover(spread(w), spread(q))[1])
        return objective.primal(occupancy, kind, spread(w), features) - value

    flat_shape = shape if features is None else (features.phi.shape[1],)
    w = project(np.zeros(flat_shape) if cost is None else cost)
    q = np.zeros((shape[0], 1)) if np.isinf(alpha) else np.zeros(flat_shape)
    best_w, best_q = w, q
    momentum_w, momentum_q, t = w, q, 1.0
    value = ascent(w, q)[0]
    step = 1.0 / ((0.0 if np.isinf(alpha) else alpha) + 5 * eta)
    gap = np.inf
    count = 0
    for count in range(1, limit + 1):
        here, grad_w, grad_q = ascent(momentum_w, momentum_q)
        while True:
            new_w = project(momentum_w + step * grad_w) if kind is not None else w
            new_q = momentum_q + step * grad_q
            shift_w, shift_q = new_w - momentum_w, new_q - momentum_q
            new_value = ascent(new_w, new_q)[0]
            linear = float(np.sum(grad_w * shift_w) + np.sum(grad_q * shift_q))
            square = float(np.sum(shift_w**2) + np.sum(shift_q**2))
            if new_value >= here + linear - square / (2 * step) - ROUNDING:
                break
            step /= 2
        if new_value < value - ROUNDING and t > 1.0:
            momentum_w, momentum_q, t = w, q, 1.0
            continue
        t_next = (1 + np.sqrt(1 + 4 * t * t)) / 2
        momentum_w = new_w + (t - 1) / t_next * (new_w - w)
        momentum_q = new_q + (t - 1) / t_next * (new_q - q)
        w, q, value, t = new_w, new_q, new_value, t_next
        step *= 1.02
        if count % 25 == 0:
            now = gap_at(w, q, value)
            if now < gap:
                gap, best_w, best_q = now, w, q
            if gap <= tolerance and max(norms(best_w, best_q)) <= gradient_tolerance:
                break
    wide_w, wide_q = spread(best_w), spread(best_q)
    pairs, policy = objective.recover(wide_w, wide_q)
    best, for_cost, _ = ascent(best_w, best_q)
    if features is not None:
        pairs = for_cost + features.phi.T @ expert.ravel()
    occupancy = occupancy_of(model, policy)
    gradient_cost, gradient_q = norms(best_w, best_q)
    return Evaluation(
        wide_w, wide_q, best, pairs, policy, occupancy, float(gap), count,
        gradient_cost, gradient_q, excitation_of(occupancy, features),
    )  # fmt: skip


def solve_online(
    model: FiniteModel,
    expert: Float64,
    policy: Float64,
    eta: float,
    alpha: float,
    kind: CostClass,
    iterations: int,
    features: LinearFeatures | None = None,
) -> list[Evaluation]:
    """Return the proximal-point iterates from a policy (S, A), each solved around the last one's occupancy."""
    occupancy = occupancy_of(model, policy)
    centre = Centre(occupancy, policy)
    solved: list[Evaluation] = []
    for _ in range(iterations):
        solved.append(evaluate(model, centre, expert, eta, alpha, kind, features=features))
        centre = Centre(solved[-1].occupancy, solved[-1].policy)
    return solved


def solve_offline(
    model: FiniteModel,
    expert: Float64,
    reference: Float64,
    eta: float,
    alpha: float,
    kind: CostClass,
    features: LinearFeatures | None = None,
) -> Evaluation:
    """Return one step whose occupancy centre is the expert itself and whose reference policy (S, A) is broad."""
    return evaluate(model, Centre(expert, reference), expert, eta, alpha, kind, features=features)


def relative_entropy_step(model: FiniteModel, centre: Float64, cost: Float64, eta: float) -> tuple[Float64, Float64]:
    """Return the minimiser (S, A) of ⟨c, d⟩ + KL(d ‖ centre)/η over occupancies, and its multipliers V (S,).

    The limit of the method without the conditional term and with a known cost; Newton's method on the dual
    (1-g)⟨ν, V⟩ - (1/η) log Σ centre·exp(-η(c + gPV - V)).

    Source: relative entropy policy search (Peters, Mülling & Altün 2010), discounted.
    """
    flat = model.transition.reshape(-1, model.states)
    owner = np.repeat(np.eye(model.states), model.actions, axis=0)
    slope = model.discount * flat - owner
    values = np.zeros(model.states)
    log_centre, costs = np.log(centre).ravel(), cost.ravel()

    def dual(v: Float64) -> tuple[float, Float64]:
        logits = log_centre - eta * (costs + slope @ v)
        total = float(_log_sum_exp(logits))
        return float((1 - model.discount) * model.start @ v - total / eta), np.exp(logits - total)

    for _ in range(500):
        here, pairs = dual(values)
        gradient = (1 - model.discount) * model.start + slope.T @ pairs
        if np.abs(gradient).max() < 1e-15:
            break
        average = slope.T @ pairs
        hessian = eta * ((slope.T * pairs) @ slope - np.outer(average, average))
        move = np.linalg.lstsq(hessian, gradient, rcond=1e-13)[0]
        size = 1.0
        while size > 1e-10 and dual(values + size * move)[0] < here + 1e-4 * size * gradient @ move - 1e-16:
            size /= 2
        values = values + size * move
    return dual(values)[1].reshape(cost.shape), values


def cheapest(model: FiniteModel, cost: Float64) -> tuple[Float64, float]:
    """Return the occupancy (S, A) of least cost, and that cost, from the linear programme (HiGHS)."""
    flat = model.transition.reshape(-1, model.states)
    flow = np.repeat(np.eye(model.states), model.actions, axis=0).T - model.discount * flat.T
    answer = linprog(cost.ravel(), A_eq=flow, b_eq=(1 - model.discount) * model.start, method="highs")
    return np.asarray(answer.x).reshape(cost.shape), float(answer.fun)
