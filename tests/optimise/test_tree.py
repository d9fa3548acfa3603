"""The tree against enumeration, and its certificates against the independent checker."""

from __future__ import annotations

from dataclasses import replace
from itertools import combinations

import numpy as np
import pytest

from sampler.optimise.blocks import split
from sampler.optimise.problem import CountRules, SiteProblem, site_problem
from sampler.optimise.relaxation import relax
from sampler.optimise.tree import Tree, decide
from sampler.tasks.proof_check import Evidence, check_proof

EDGES = (0.999, 1.001, 0.9, 1.1)


def evidence(problem: SiteProblem) -> Evidence:
    rules = []
    for members, low, high in zip(problem.rules.members, problem.rules.lower, problem.rules.upper, strict=True):
        mask = np.zeros(problem.n, bool)
        mask[members] = True
        rules.append((mask, low, high))
    if problem.max_sites is not None:
        rules.append((np.ones(problem.n, bool), 0, problem.max_sites))
    scaled = problem.directions / problem.tau[:, None]
    return Evidence(problem.blocks, problem.prior_precision, problem.cost, problem.required, problem.forbidden,
                    tuple(rules), problem.key, lambda rows: scaled[rows["limit"]])


def small_instance(seed: int) -> tuple[SiteProblem, float, bool]:
    """A random question with limits just beside the best that enumeration finds, its count, and the answer."""
    rng = np.random.default_rng(seed)
    n, p, m = int(rng.integers(6, 10)), int(rng.integers(2, 5)), int(rng.integers(1, 3))
    blocks = rng.normal(size=(n, m, p))
    if m == 2 and rng.integers(2):  # separate axes
        blocks[:, 0, p // 2:] = 0
        blocks[:, 1, :p // 2] = 0
    directions = rng.normal(size=(int(rng.integers(1, p + 2)), p)) if rng.integers(2) else np.eye(p)
    prior = np.diag(rng.uniform(0, 1, p) * rng.integers(0, 2, p)) * rng.integers(0, 2)
    required, forbidden = np.zeros(n, bool), np.zeros(n, bool)
    required[rng.integers(n)] = rng.integers(2)
    forbidden[rng.integers(n)] = rng.integers(2)
    forbidden &= ~required
    cost = rng.integers(1, 4, n).astype(float) if rng.integers(3) == 0 else np.ones(n)
    rules = CountRules()
    if rng.integers(3) == 0:
        rules = CountRules((np.sort(rng.choice(n, n // 2, replace=False)),), np.array([float(rng.integers(0, 2))]),
                           np.array([float(rng.integers(2, 4))]), ("zone",))
    max_sites = int(rng.integers(3, n)) if rng.integers(3) == 0 else None
    count = float(rng.integers(max(1, p // m), n))
    problem = site_problem(blocks, directions, np.ones(len(directions)), prior_precision=prior, cost=cost,
                           required=required, forbidden=forbidden, rules=rules, max_sites=max_sites)
    best = min((worst_variance(problem, chosen) for chosen in admitted(problem, count)), default=np.inf)
    edge = EDGES[seed % 4]
    tau = np.sqrt(best) * edge if np.isfinite(best) else 1.0
    return replace(problem, tau=np.full(len(directions), tau)), count, bool(np.isfinite(best) and edge > 1)


def admitted(problem: SiteProblem, count: float):
    for size in range(1, problem.n + 1 if problem.max_sites is None else problem.max_sites + 1):
        for sites in combinations(range(problem.n), size):
            chosen = np.array(sites)
            if problem.cost[chosen].sum() <= count and not problem.forbidden[chosen].any() \
                    and problem.required[chosen].sum() == problem.required.sum() \
                    and all(low <= np.isin(chosen, inside).sum() <= high for inside, low, high in
                            zip(problem.rules.members, problem.rules.lower, problem.rules.upper, strict=True)):
                yield chosen


def worst_variance(problem: SiteProblem, chosen: np.ndarray) -> float:
    rows = problem.blocks[chosen].reshape(-1, problem.p)
    information = problem.prior_precision + rows.T @ rows
    if np.linalg.cond(information) > 1e12:
        return np.inf
    return float(np.einsum("lp,pq,lq->l", problem.directions, np.linalg.inv(information), problem.directions).max())


@pytest.mark.parametrize("block", range(20))
def test_decision_agrees_with_enumeration(block):
    """500 questions at the edge of feasibility, columns generated from two; every "impossible" is certified."""
    for seed in range(25 * block, 25 * block + 25):
        problem, count, possible = small_instance(seed)
        parts = split(problem)
        tree = Tree(parts, problem, count, first_columns=2)
        status, chosen = tree.run(lambda: False)
        assert status == ("possible" if possible else "impossible"), seed
        if chosen is not None:
            assert worst_variance(problem, chosen) <= problem.tau[0] ** 2 * (1 + 1e-8)
            assert any(np.array_equal(chosen, other) for other in admitted(problem, count))
        else:
            assert check_proof(evidence(problem), tree.certificate()).lower_bound == np.floor(count) + 1


def square(k: int) -> np.ndarray:
    axis = np.linspace(-1, 1, k)
    return np.stack(np.meshgrid(axis, axis), axis=-1).reshape(-1, 2)


def quadratic(xy: np.ndarray) -> np.ndarray:
    x, y = xy.T
    return np.stack([np.ones_like(x), x, y, x * x, x * y, y * y], axis=1)


def d_optimal_weights(rows: np.ndarray, n: float) -> np.ndarray:
    """Relaxed D-optimal weights with Σw = n, 0 ≤ w ≤ 1: multiplicative steps (Silvey, Titterington & Torsney 1978)."""
    w = np.full(len(rows), n / len(rows))
    for _ in range(600):
        w = w * np.einsum("ip,pq,iq->i", rows, np.linalg.inv(rows.T @ (w[:, None] * rows)), rows)
        low, high = 0.0, 1e6
        for _ in range(60):
            middle = (low + high) / 2
            low, high = (middle, high) if np.minimum(w * middle, 1).sum() < n else (low, middle)
        w = np.minimum(w * high, 1)
    return w


def grid_question(k: int) -> SiteProblem:
    """`checks.md`: quadratic on a k×k grid, each variance ≤ 1.05 × its value at the relaxed D-optimal weights, n = 12."""
    rows = quadratic(square(k))
    weights = d_optimal_weights(rows, 12)
    variance = np.diag(np.linalg.inv(rows.T @ (weights[:, None] * rows)))
    return site_problem(rows[:, None, :], np.eye(6), np.sqrt(1.05 * variance))


@pytest.mark.parametrize(("k", "bound"), [(5, 11.307), (7, 11.345), (11, None)])
def test_thirteen_is_the_fewest_on_grids(k, bound):
    problem = grid_question(k)
    parts = split(problem)
    if bound is not None:
        assert relax(parts, problem, seconds=60).bound == pytest.approx(bound, abs=2e-3)
    no = decide(parts, problem, 12)
    assert no.status == "impossible"
    assert check_proof(evidence(problem), no.certificate).lower_bound == 13
    yes = decide(parts, problem, 13)
    assert yes.status == "possible"
    assert len(yes.chosen) <= 13
    assert worst_variance(replace(problem, directions=problem.directions / problem.tau[:, None]), yes.chosen) <= 1 + 1e-8


def test_order_units_and_useless_candidates_change_nothing(rng):
    problem = grid_question(5)
    same = decide(split(problem), problem, 12)
    order = rng.permutation(problem.n)
    units = np.array([1.0, 1e3, 1e-3, 10.0, 7.0, 0.1])
    for other in (replace(problem, blocks=problem.blocks[order], key=problem.key[order]),
                  replace(problem, blocks=problem.blocks / units, tau=problem.tau * units),
                  site_problem(np.concatenate([problem.blocks, np.full((1, 1, 6), 1e-9)]), problem.directions, problem.tau)):
        decision = decide(split(other), other, 12)
        assert decision.status == "impossible"
        assert check_proof(evidence(other), decision.certificate).lower_bound == 13
        assert decide(split(other), other, 13).status == "possible"
    permuted = replace(problem, blocks=problem.blocks[order], key=problem.key[order])
    # Nothing in a certificate depends on the order of the candidates.
    assert check_proof(evidence(permuted), same.certificate).lower_bound == 13


def test_rows_and_weights_of_a_relaxation_start_the_tree_warm():
    problem = grid_question(7)
    parts = split(problem)
    relaxed = relax(parts, problem, seconds=60)
    assert decide(parts, problem, 11, rows=relaxed.rows, weights=relaxed.weights).nodes == 1
    decision = decide(parts, problem, 12, rows=relaxed.rows, weights=relaxed.weights)
    assert decision.status == "impossible"
    assert check_proof(evidence(problem), decision.certificate).lower_bound == 13


def test_limits_of_one_term_in_both_axes(rng):
    """orthogonality stands on both axes at once: its rows have a part in each."""
    xy = square(5)
    one, zero = np.ones(len(xy)), np.zeros(len(xy))
    x, y = xy.T
    blocks = np.stack([np.stack([one, zero, x, zero, -y, -y], axis=1), np.stack([zero, one, zero, y, x, zero], axis=1)],
                      axis=1) / rng.uniform(0.9, 1.1, (len(xy), 2, 1))
    problem = site_problem(blocks, np.eye(6), np.array([1.0, 1.0, 1.0, 1.0, 1.0, 0.8]))
    answers = [decide(split(problem), problem, n) for n in range(1, 9)]
    fewest = next(n for n, answer in enumerate(answers, 1) if answer.status == "possible")
    for n, answer in enumerate(answers[:fewest - 1], 1):
        assert answer.status == "impossible"
        assert check_proof(evidence(problem), answer.certificate).lower_bound == n + 1


def test_sites_that_no_feature_tells_apart():
    """Five marks, each drawn three times: weights can be fractional while every half-space counts a whole number."""
    rows = np.repeat(np.array([[1.0, x, x * x] for x in (-1, -0.5, 0, 0.5, 1)]), 3, axis=0)[:, None, :]
    best = min(worst_variance(site_problem(rows, np.eye(3), np.ones(3)), np.array(chosen))
               for chosen in combinations(range(15), 5))
    for edge, status in ((0.999, "impossible"), (1.001, "possible")):
        problem = site_problem(rows, np.eye(3), np.full(3, np.sqrt(best) * edge))
        decision = decide(split(problem), problem, 5)
        assert decision.status == status
        if decision.certificate is not None:
            assert check_proof(evidence(problem), decision.certificate).lower_bound == 6


def test_too_few_for_the_rank_is_excluded_by_counting():
    problem = grid_question(5)
    decision = decide(split(problem), problem, 5)
    assert decision.nodes == 0
    assert decision.certificate["kind"] == "counting"
    assert check_proof(evidence(problem), decision.certificate).lower_bound == 6


def test_time_and_stop_leave_it_open():
    problem = grid_question(11)
    parts = split(problem)
    assert decide(parts, problem, 12, seconds=0.0).status == "open"
    calls = []

    def stop() -> bool:
        calls.append(None)
        return len(calls) > 40

    decision = decide(parts, problem, 12, stop=stop)
    assert (decision.status, decision.chosen, decision.certificate) == ("open", None, None)


def test_a_sign_of_life():
    seen = []
    decide(split(grid_question(5)), grid_question(5), 12, progress=lambda bound, best: seen.append((bound, best)))
    assert set(seen) == {(12.0, np.inf)}
