"""The exact method against linear programmes, closed forms and published identities.

Values marked "scipy" were computed with scipy.optimize.linprog (HiGHS), L-BFGS-B or SLSQP; a conic solver agrees.
"""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
from scipy.optimize import check_grad, linprog, minimize

from nearhand.service.learn.tabular import (
    Centre,
    CostClass,
    FiniteModel,
    JointObjective,
    LinearFeatures,
    cheapest,
    class_distance,
    conditional_entropy,
    evaluate,
    flow_residual,
    occupancy_of,
    project_class,
    relative_entropy,
    relative_entropy_step,
    solve_offline,
    solve_online,
)

UNIFORM = np.full((3, 2), 0.5)
KINDS: tuple[CostClass, ...] = ("l2", "l1", "linf", "simplex")


def chain() -> FiniteModel:
    """Three states, two actions, discount .9, starting in the first."""
    transition = [[[0.8, 0.2, 0], [0.1, 0.6, 0.3]], [[0.5, 0.5, 0], [0, 0.3, 0.7]], [[0, 0, 1], [0.9, 0.1, 0]]]
    return FiniteModel(np.array(transition), np.array([1.0, 0, 0]), 0.9)


def spread() -> FiniteModel:
    """Three states, two actions, discount .9, starting anywhere."""
    transition = [[[0.8, 0.2, 0], [0.1, 0.6, 0.3]], [[0.3, 0.6, 0.1], [0, 0.3, 0.7]], [[0.5, 0, 0.5], [0, 0.1, 0.9]]]
    return FiniteModel(np.array(transition), np.array([0.5, 0.3, 0.2]), 0.9)


COST = np.array([[1, 0.5], [0.6, 0.8], [0.2, 0]])
SPREAD_EXPERT = np.array([[0.1, 0.9], [0.2, 0.8], [0.3, 0.7]])
CHAIN_EXPERT = np.array([[0.2, 0.8], [0.3, 0.7], [0.5, 0.5]])


def random_model(generator: np.random.Generator, states: int = 6, actions: int = 3) -> FiniteModel:
    """Return a dense random model."""
    transition = generator.dirichlet(np.full(states, 0.5), (states, actions))
    return FiniteModel(transition, generator.dirichlet(np.ones(states)), 0.9)


def random_policy(
    generator: np.random.Generator, model: FiniteModel
) -> np.ndarray[tuple[int, ...], np.dtype[np.float64]]:
    """Return a random policy."""
    return generator.dirichlet(np.ones(model.actions), model.states)


@pytest.mark.parametrize(("p", "q", "g", "first", "occupied"), [
    (0.3, 0.2, 0.9, 1.0, 0.50909090909091),
    (0.3, 0.2, 0.99, 0.5, 0.4019801980198),
    (0.1, 0.4, 0.5, 0.0, 0.26666666666667),
])  # fmt: skip
def test_occupancy_of_two_states_has_its_closed_form(
    p: float, q: float, g: float, first: float, occupied: float
) -> None:
    # d1 = ((1-g) nu1 + g q) / (1 - g (1-p-q)); derived.
    model = FiniteModel(np.array([[[1 - p, p]], [[q, 1 - q]]]), np.array([first, 1 - first]), g)
    assert occupancy_of(model, np.ones((2, 1)))[0, 0] == pytest.approx(occupied, abs=1e-11)


def test_occupancy_of_puterman_two_state_example() -> None:
    # Puterman 1994, ch. 3 (from memory); values recomputed with scipy.optimize.linprog.
    transition = np.array([[[0.5, 0.5], [0, 1]], [[0, 1], [0, 1]]])
    model = FiniteModel(transition, np.array([1.0, 0]), 0.95)
    occupancy, cost = cheapest(model, -np.array([[5, 10], [-1, -1]], dtype=float))
    np.testing.assert_allclose([*occupancy[0], occupancy[1].sum()], [0.0952381, 0, 0.9047619], atol=1e-7)
    assert -cost == pytest.approx(-0.4285714, abs=1e-7)


def test_programme_of_known_cost_has_the_solvers_optimum() -> None:
    # scipy; value iteration agrees to 1e-10.
    occupancy, cost = cheapest(spread(), COST)
    assert cost == pytest.approx(0.16866791744841, abs=1e-9)
    wanted = [0, 0.054945054945055, 0, 0.17649423746985, 0, 0.7685607075851]
    np.testing.assert_allclose(occupancy.ravel(), wanted, atol=1e-9)


def test_experts_occupancy_is_flow_consistent_and_has_the_known_values() -> None:
    # (1-g)(I - g P_pi')^-1 nu times pi; scipy.
    occupancy = occupancy_of(spread(), SPREAD_EXPERT)
    wanted = [
        0.016965954356274,
        0.15269358920647,
        0.045418094373794,
        0.18167237749518,
        0.18097499537049,
        0.4222749891978,
    ]
    np.testing.assert_allclose(occupancy.ravel(), wanted, atol=1e-10)
    assert np.abs(flow_residual(spread(), occupancy)).max() < 1e-15
    assert np.sum(COST * occupancy) == pytest.approx(0.30209650665402, abs=1e-10)


def test_dual_norms_of_the_cost_classes() -> None:
    # sup over the unit ball of <w, d>: L2 -> 2-norm, L1 -> max, Linf -> sum of sizes, simplex -> largest.
    gap = np.array([3.0, -4.0, 1.0])
    assert class_distance(gap, "l2") == pytest.approx(5.0990195135928, abs=1e-12)
    assert [class_distance(gap, kind) for kind in ("l1", "linf", "simplex")] == [4, 8, 3]


@pytest.mark.parametrize("kind", KINDS)
def test_projection_is_in_the_class_and_nearer_than_any_other_member(
    kind: CostClass, generator: np.random.Generator
) -> None:
    for _ in range(50):
        point = generator.normal(0, 1.5, 6)
        nearest = project_class(point, kind)
        np.testing.assert_allclose(project_class(nearest, kind), nearest, atol=1e-12)
        # Optimality over a convex set: no member lies further along the way out (variational inequality).
        for _ in range(20):
            member = project_class(generator.normal(0, 1.5, 6), kind)
            assert (point - nearest) @ (member - nearest) <= 1e-9


def test_fixture_distances_and_entropies() -> None:
    model = chain()
    expert, uniform = occupancy_of(model, CHAIN_EXPERT), occupancy_of(model, UNIFORM)
    np.testing.assert_allclose(expert.ravel(), [0.072458, 0.289830, 0.082489, 0.192474, 0.181375, 0.181375], atol=1e-6)
    found = [class_distance(uniform - expert, kind) for kind in KINDS]
    np.testing.assert_allclose(found, [0.195894, 0.155279, 0.420726, 0.155279], atol=1e-6)
    assert relative_entropy(expert, uniform) == pytest.approx(0.117293, abs=1e-6)
    assert conditional_entropy(expert, uniform) == pytest.approx(0.092454, abs=1e-6)


def test_fixture_objective_and_gradients() -> None:
    # Values of an independent implementation (NumPy), gradients confirmed by finite differences.
    model = chain()
    expert, uniform = occupancy_of(model, CHAIN_EXPERT), occupancy_of(model, UNIFORM)
    objective = JointObjective(model, Centre(uniform, UNIFORM), expert, 1.0, 1.0)
    cost = np.array([[1, 0.5], [0.2, 1], [0, 0.8]])
    nothing = np.zeros((3, 2))
    assert objective(nothing, nothing)[0] == pytest.approx(0.0, abs=1e-15)
    assert objective(cost, nothing)[0] == pytest.approx(-0.0273460, abs=1e-7)
    value, for_cost, for_q = objective(cost, cost)
    assert value == pytest.approx(-0.0214500, abs=1e-7)
    np.testing.assert_allclose(
        for_cost.ravel(), [0.126796, -0.051727, 0.044454, -0.035136, -0.018786, -0.065601], atol=1e-6
    )
    np.testing.assert_allclose(
        for_q.ravel(), [-0.042275, 0.020711, 0.062432, -0.072246, 0.051124, -0.019746], atol=1e-6
    )


@pytest.mark.parametrize("alpha", [0.7, np.inf])
def test_gradients_agree_with_finite_differences(alpha: float, generator: np.random.Generator) -> None:
    for _ in range(5):
        model = random_model(generator, 4, 3)
        centre = random_policy(generator, model)
        expert = occupancy_of(model, random_policy(generator, model))
        objective = JointObjective(model, Centre(occupancy_of(model, centre), centre), expert, 1.3, alpha)
        width = 1 if np.isinf(alpha) else 3

        def value(x: np.ndarray, o: JointObjective = objective, k: int = width) -> float:
            return o(x[:12].reshape(4, 3), x[12:].reshape(4, k))[0]

        def slope(x: np.ndarray, o: JointObjective = objective, k: int = width) -> np.ndarray:
            _, for_cost, for_q = o(x[:12].reshape(4, 3), x[12:].reshape(4, k))
            return np.concatenate([for_cost.ravel(), for_q.ravel()])

        assert check_grad(value, slope, generator.normal(0, 1, 12 + 4 * width)) < 1e-6


def test_objective_is_jointly_concave_along_random_chords(generator: np.random.Generator) -> None:
    model = random_model(generator, 5, 3)
    centre = random_policy(generator, model)
    expert = occupancy_of(model, random_policy(generator, model))
    objective = JointObjective(model, Centre(occupancy_of(model, centre), centre), expert, 2.0, 3.0)
    for _ in range(300):
        a, b, c, d = generator.normal(0, 2, (4, 5, 3))
        middle = objective((a + c) / 2, (b + d) / 2)[0]
        assert middle >= (objective(a, b)[0] + objective(c, d)[0]) / 2 - 1e-12


def test_fixture_first_step_and_small_steps() -> None:
    # An independent implementation's optimiser values, to its 1e-4.
    model = chain()
    expert, uniform = occupancy_of(model, CHAIN_EXPERT), occupancy_of(model, UNIFORM)
    solved = evaluate(model, Centre(uniform, UNIFORM), expert, 1.0, 1.0, "l2")
    assert solved.value == pytest.approx(0.1439938, abs=1e-4)
    assert class_distance(solved.occupancy - expert, "l2") == pytest.approx(0.0972287, abs=1e-4)
    wanted = [0.36139, 0.63861, 0.413146, 0.586854, 0.507238, 0.492762]
    np.testing.assert_allclose(solved.policy.ravel(), wanted, atol=1e-4)
    found = [
        class_distance(s.occupancy - expert, "l2") for s in solve_online(model, expert, UNIFORM, 0.05, 0.05, "l2", 4)
    ]
    np.testing.assert_allclose(found, [0.19021, 0.18460, 0.17907, 0.17363], atol=1e-4)


@pytest.mark.parametrize("kind", KINDS)
def test_solution_closes_the_duality_gap_and_recovers_one_occupancy(
    kind: CostClass, generator: np.random.Generator
) -> None:
    for _ in range(3):
        model = random_model(generator)
        start, teacher = random_policy(generator, model), random_policy(generator, model)
        expert = occupancy_of(model, teacher)
        solved = evaluate(model, Centre(occupancy_of(model, start), start), expert, 1.0, 1.0, kind, tolerance=1e-10)
        assert abs(solved.gap) < 1e-9
        # The pairs' occupancy and that of the improved policy are one and the same at the optimum.
        np.testing.assert_allclose(solved.pairs, solved.occupancy, atol=1e-5)
        np.testing.assert_allclose(project_class(solved.cost.ravel(), kind), solved.cost.ravel(), atol=1e-12)


def test_known_cost_reaches_the_programmes_optimum(generator: np.random.Generator) -> None:
    for _ in range(3):
        model = random_model(generator, 5, 2)
        cost = generator.uniform(0, 1, (5, 2))
        optimum = cheapest(model, cost)[1]
        policy = np.full((5, 2), 0.5)
        gaps = []
        centre = Centre(occupancy_of(model, policy), policy)
        for _ in range(8):
            solved = evaluate(model, centre, np.zeros((5, 2)), 4.0, 4.0, None, cost=cost, tolerance=1e-8, limit=1500)
            centre = Centre(solved.occupancy, solved.policy)
            gaps.append(float(np.sum(cost * solved.occupancy)) - optimum)
        assert all(later <= earlier + 1e-9 for earlier, later in pairwise(gaps))
        # Exact proximal point: gap <= (KL + H)/(K eta); KL(d* || d_0) <= -log of the smallest mass of d_0.
        smallest = float(occupancy_of(model, policy).min())
        assert -1e-9 < gaps[-1] <= (np.log(1 / smallest) + np.log(2)) / (8 * 4.0)
        assert gaps[-1] < 0.2 * gaps[0]


def test_relative_entropy_step_has_the_conic_solvers_values() -> None:
    # Damped Newton on the dual and a conic solver, agreeing to 4e-10.
    model = spread()
    uniform = occupancy_of(model, UNIFORM)
    one, _ = relative_entropy_step(model, uniform, COST, 1.0)
    wanted = [
        0.085886694732741,
        0.16183448822479,
        0.12317807878823,
        0.14048227242219,
        0.19568795008202,
        0.29293051575002,
    ]
    np.testing.assert_allclose(one.ravel(), wanted, atol=1e-9)
    assert np.sum(COST * one) + relative_entropy(one, uniform) == pytest.approx(0.42469936682618, abs=1e-9)
    costs, occupancy = [], uniform
    for _ in range(10):
        occupancy, _ = relative_entropy_step(model, occupancy, COST, 1.0)
        costs.append(float(np.sum(COST * occupancy)))
    wanted_costs = [0.39223419407223, 0.33873276350061, 0.23758721073977, 0.17909400810309]
    np.testing.assert_allclose([costs[0], costs[1], costs[4], costs[9]], wanted_costs, atol=1e-9)
    at_once, _ = relative_entropy_step(model, uniform, COST, 10.0)
    # Ten steps at one equal one step at ten, exactly: a stale centre or a lost normaliser breaks it.
    np.testing.assert_allclose(at_once, occupancy, atol=1e-12)


def test_gradient_method_agrees_with_newton_without_the_conditional_term() -> None:
    model = spread()
    uniform = occupancy_of(model, UNIFORM)
    newton, _ = relative_entropy_step(model, uniform, COST, 1.0)
    solved = evaluate(model, Centre(uniform, UNIFORM), np.zeros((3, 2)), 1.0, np.inf, None, cost=COST, tolerance=1e-14)
    np.testing.assert_allclose(solved.pairs, newton, atol=1e-7)


@pytest.mark.parametrize(("kind", "objective", "distance"), [
    ("linf", 0.223581448344, 0.029514278), ("l2", 0.179067047151, 0.096025908),
])  # fmt: skip
def test_imitation_step_has_the_conic_solvers_values(kind: CostClass, objective: float, distance: float) -> None:
    # min ||d - d_E|| + KL(d, d_U)/eta at eta = 1: L-BFGS-B / SLSQP on the dual, conic solver agreeing to 1e-8.
    model = spread()
    expert, uniform = occupancy_of(model, SPREAD_EXPERT), occupancy_of(model, UNIFORM)
    solved = evaluate(model, Centre(uniform, UNIFORM), expert, 1.0, np.inf, kind, tolerance=1e-13)
    assert solved.value == pytest.approx(objective, abs=1e-7)
    assert class_distance(solved.occupancy - expert, kind) == pytest.approx(distance, abs=1e-6)


@pytest.mark.parametrize(("kind", "threshold"), [("linf", 1.3247893347), ("l2", 2.3520113227)])
def test_one_step_is_exact_just_above_the_threshold_and_not_below(kind: CostClass, threshold: float) -> None:
    # eta* = min_y ||ln(d_E/d_U) + A'y|| in the same norm: the exact-penalty condition; linear programme, least squares.
    model = spread()
    expert, uniform = occupancy_of(model, SPREAD_EXPERT), occupancy_of(model, UNIFORM)

    def distance(eta: float) -> float:
        solved = evaluate(model, Centre(uniform, UNIFORM), expert, eta, np.inf, kind, tolerance=1e-13)
        return class_distance(solved.occupancy - expert, kind)

    assert distance(1.02 * threshold) < 1e-6
    assert distance(0.95 * threshold) > 1e-3


@pytest.mark.parametrize(("kind", "floor"), [
    ("linf", 0.17998867130604), ("l1", 0.057521475985943), ("simplex", 0.036546613650554), ("l2", 0.10813387748868),
])  # fmt: skip
def test_empirical_expert_is_approached_to_the_programmes_floor(kind: CostClass, floor: float) -> None:
    # An expert estimate that no policy has: the optimum of min sup <w, d - d_hat> by linear programme (L2: projection).
    model = spread()
    estimate = np.array([[0.05, 0.2], [0.05, 0.25], [0.15, 0.3]])
    solved = solve_online(model, estimate, UNIFORM, 20.0, 20.0, kind, 8)
    distances = [class_distance(one.occupancy - estimate, kind) for one in solved]
    assert distances[-1] >= floor - 1e-9
    assert distances[-1] == pytest.approx(floor, abs=2e-4)


def test_exact_iterates_keep_the_proximal_point_rate() -> None:
    # Chen & Teboulle 1993: d_C(pi_K) <= (1/K) [KL(lambda_E || lambda_0)/eta + H(mu_E || mu_0)/alpha], monotone.
    model = chain()
    expert, uniform = occupancy_of(model, CHAIN_EXPERT), occupancy_of(model, UNIFORM)
    bound = relative_entropy(expert, uniform) / 0.05 + conditional_entropy(expert, uniform) / 0.05
    found = [
        class_distance(s.occupancy - expert, "l2") for s in solve_online(model, expert, UNIFORM, 0.05, 0.05, "l2", 12)
    ]
    assert all(later < earlier for earlier, later in pairwise(found))
    assert all(distance <= bound / (k + 1) for k, distance in enumerate(found))
    assert found[-1] == pytest.approx(0.133, abs=2e-3)


def programme(model: FiniteModel, estimate: np.ndarray, kind: CostClass) -> float:
    """Return min over occupancies d of max over the class <w, d - estimate>: HiGHS; SLSQP for the Euclidean class."""
    size = estimate.size
    flow = np.repeat(np.eye(model.states), model.actions, axis=0).T
    flow = flow - model.discount * model.transition.reshape(-1, model.states).T
    right, flat = (1 - model.discount) * model.start, estimate.ravel()
    if kind == "l2":
        start = occupancy_of(model, np.full(estimate.shape, 1 / model.actions)).ravel()
        found = minimize(
            lambda d: 0.5 * np.sum((d - flat) ** 2), start, jac=lambda d: d - flat, bounds=[(0, None)] * size,
            constraints={"type": "eq", "fun": lambda d: flow @ d - right, "jac": lambda _: flow}, method="SLSQP",
            options={"ftol": 1e-14, "maxiter": 500},
        )  # fmt: skip
        return float(np.linalg.norm(found.x - flat))
    many = size if kind == "linf" else 1
    above = -np.eye(size) if kind == "linf" else -np.ones((size, 1))
    rows, limits = [np.hstack([np.eye(size), above])], [flat]
    if kind != "simplex":
        rows.append(np.hstack([-np.eye(size), above]))
        limits.append(-flat)
    answer = linprog(
        np.concatenate([np.zeros(size), np.ones(many)]), A_ub=np.vstack(rows), b_ub=np.concatenate(limits),
        A_eq=np.hstack([flow, np.zeros((model.states, many))]), b_eq=right,
        bounds=[(0, None)] * size + [(None, None)] * many, method="highs",
    )  # fmt: skip
    return float(answer.fun)


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("seed", range(5))
def test_random_models_reach_the_programmes_optimum_within_the_rate(kind: CostClass, seed: int) -> None:
    # Twenty models; the estimate to be matched is one that no policy has, so the optimum is not zero.
    generator = np.random.default_rng((KINDS.index(kind), seed))
    model = random_model(generator, 4, 2)
    reachable = occupancy_of(model, random_policy(generator, model))
    estimate = 0.8 * reachable + 0.2 * generator.dirichlet(np.ones(8)).reshape(4, 2)
    optimum = programme(model, estimate, kind)
    assert optimum > 1e-3
    policy = np.full((4, 2), 0.5)
    first = occupancy_of(model, policy)
    centre = Centre(first, policy)
    for k in range(1, 13):
        solved = evaluate(model, centre, estimate, 40.0, 40.0, kind, tolerance=2e-6, limit=1500)
        centre = Centre(solved.occupancy, solved.policy)
        distance = class_distance(solved.occupancy - estimate, kind)
        # Chen & Teboulle 1993; KL(d* || d_0) <= -log of the smallest mass, H <= log of the number of actions.
        assert distance - optimum <= (np.log(1 / first.min()) + np.log(2)) / (40.0 * k) + k * 1e-5
    assert -1e-8 < distance - optimum < 1e-4


@pytest.mark.parametrize("kind", KINDS)
def test_linear_features_solve_a_linear_model_like_all_pairs_would(kind: CostClass) -> None:
    # P = Phi M with features in the simplex: Q is linear in the features, and the gap closes.
    generator = np.random.default_rng(11)
    phi, kernel = generator.dirichlet(np.ones(4), 10), generator.dirichlet(np.ones(5), 4)
    features = LinearFeatures(phi, kernel)
    transition = (phi @ kernel).reshape(5, 2, 5)
    model = FiniteModel(transition, generator.dirichlet(np.ones(5)), 0.9)
    reference = random_policy(generator, model)
    expert = occupancy_of(model, random_policy(generator, model))
    for solved in (
        solve_online(model, expert, reference, 2.0, 3.0, kind, 1, features)[0],
        solve_offline(model, expert, reference, 2.0, 3.0, kind, features),
    ):
        assert abs(solved.gap) < 1e-8
        # At the optimum the tilted occupancy of the features is that of the improved policy.
        np.testing.assert_allclose(solved.pairs, phi.T @ solved.occupancy.ravel(), atol=1e-4)
        moments = sum(m * np.outer(f, f) for m, f in zip(solved.occupancy.ravel(), phi, strict=True))
        assert solved.excitation == pytest.approx(float(np.linalg.eigvalsh(moments).min()), abs=1e-12)
        assert solved.excitation > 0


def test_search_stops_on_both_gradient_norms_and_the_gap() -> None:
    model = chain()
    expert, uniform = occupancy_of(model, CHAIN_EXPERT), occupancy_of(model, UNIFORM)
    loose = evaluate(model, Centre(uniform, UNIFORM), expert, 1.0, 1.0, "l2", tolerance=1e-3)
    tight = evaluate(model, Centre(uniform, UNIFORM), expert, 1.0, 1.0, "l2", tolerance=1e-3, gradient_tolerance=1e-7)
    assert tight.iterations > loose.iterations
    assert max(tight.gradient_cost, tight.gradient_q) <= 1e-7 < max(loose.gradient_cost, loose.gradient_q)
    assert tight.excitation == tight.occupancy.min()


def test_large_exact_step_reaches_the_expert_at_once() -> None:
    model = chain()
    expert, uniform = occupancy_of(model, CHAIN_EXPERT), occupancy_of(model, UNIFORM)
    for kind in KINDS:
        solved = evaluate(model, Centre(uniform, UNIFORM), expert, 10.0, 10.0, kind)
        assert class_distance(solved.occupancy - expert, kind) < 1e-9


def test_offline_step_from_a_broad_reference_nears_the_expert() -> None:
    model = chain()
    expert = occupancy_of(model, CHAIN_EXPERT)
    solved = solve_offline(model, expert, UNIFORM, 1.0, 1.0, "l2")
    # The value lies between zero and log|A|/alpha, reached by standing still at the expert.
    assert 0 < solved.value <= np.log(2)
    assert class_distance(solved.occupancy - expert, "l2") < 0.01


def test_offline_step_with_the_expert_as_reference_returns_it_unchanged() -> None:
    model = chain()
    expert = occupancy_of(model, CHAIN_EXPERT)
    solved = solve_offline(model, expert, CHAIN_EXPERT, 1.0, 1.0, "l2")
    assert solved.value == pytest.approx(0.0, abs=1e-10)
    np.testing.assert_allclose(solved.policy, CHAIN_EXPERT, atol=1e-8)


def test_offline_objective_is_cloning_less_half_eta_times_residual_variance() -> None:
    # Small-eta expansion on flow-consistent expert data; derived, to second order in eta.
    model = chain()
    expert = occupancy_of(model, CHAIN_EXPERT)
    generator = np.random.default_rng(3)
    cost, q = generator.normal(0, 0.3, (2, 3, 2))
    eta, alpha = 1e-3, 1.0
    objective = JointObjective(model, Centre(expert, UNIFORM), expert, eta, alpha)
    value = objective(cost, q)[0]
    _, policy = objective.recover(cost, q)
    soft = -np.log(np.sum(UNIFORM * np.exp(-alpha * q), axis=1)) / alpha
    delta = cost + model.discount * model.transition @ soft - q
    variance = np.sum(expert * delta**2) - np.sum(expert * delta) ** 2
    likelihood = np.sum(expert * np.log(policy / UNIFORM)) / alpha
    assert value == pytest.approx(likelihood - eta / 2 * variance, abs=5 * eta**2)
    assert abs(value - likelihood) > 20 * eta**2
