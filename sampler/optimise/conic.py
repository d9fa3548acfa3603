"""The bound on log det as a conic program: independent of our own path, for small problems."""

from __future__ import annotations

import cvxpy as cp
import numpy as np

from sampler.optimise.problem import SiteProblem


def log_det_bound_conic(problem: SiteProblem, budget: float, *, limited: bool = True) -> float:
    """Maximum of log det of the information on the terms of interest over 0 ≤ w ≤ 1 of cost at most `budget` that meet
    the rules and (if `limited`) the limits; in the problem's own terms, without blocks. −∞ when no w does.

    The information S on the terms of interest is the largest with M(w) − [S 0; 0 0] positive semidefinite.
    """
    n, m, p = problem.blocks.shape
    w = cp.Variable(n)
    flat = problem.blocks.reshape(n * m, p)
    matrix = problem.prior_precision + flat.T @ cp.diag(np.repeat(np.eye(n), m, axis=0) @ w) @ flat
    demands = [w >= problem.required.astype(float), w <= np.where(problem.forbidden & ~problem.required, 0.0, 1.0),
               problem.cost @ w <= budget]
    if problem.max_sites is not None:
        demands.append(cp.sum(w) <= problem.max_sites)
    for members, low, high in zip(problem.rules.members, problem.rules.lower, problem.rules.upper, strict=True):
        demands += [cp.sum(w[members]) >= np.ceil(low), cp.sum(w[members]) <= np.floor(high)]
    if limited:
        demands += [cp.matrix_frac(direction / tau, matrix) <= 1.0
                    for direction, tau in zip(problem.directions, problem.tau, strict=True)]
    goal = matrix
    if not problem.interest.all():
        goal = cp.Variable((int(problem.interest.sum()),) * 2, PSD=True)
        pick = np.eye(p)[problem.interest]
        demands.append(matrix - pick.T @ goal @ pick >> 0)
    program = cp.Problem(cp.Maximize(cp.log_det(goal)), demands)
    program.solve(solver=cp.CLARABEL)
    return float(program.value) if program.status in (cp.OPTIMAL, cp.OPTIMAL_INACCURATE) else -np.inf
