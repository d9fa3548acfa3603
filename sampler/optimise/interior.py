"""The relaxation 0 ≤ w ≤ 1 of the covering program on a few thousand sites, by a primal-dual interior-point method.

With z_l = M⁻¹c_l / v_l the covering function g_l(w) = 1/v_l(w) = min over z of zᵀM(w)z is concave, its derivative by wᵢ is the
coefficient ‖Bᵢ z_l‖² of the covering row that is tight at w, and the multipliers y_l are the duals of these rows. Newton
steps on the optimality conditions of

    min costᵀw   subject to   g_l(w) ≥ 1,   rules,   0 ≤ w ≤ 1

(Nesterov & Nemirovskii 1994; the predictor and corrector of Mehrotra 1992) converge in about twenty steps however many
limits there are, and at the optimum one row for each active limit is the whole proof, by convex duality; a linear program
to which rows are added, as in the nodes of the tree, needs hundreds for the same bound. Nothing is believed of the result:
relaxation.py computes the bound from z and y by summation over all sites.

M depends on w through D = Σ_b q_b(q_b+1)/2 numbers, so the Hessian is diagonal plus rank D + rules: a step costs n·D², or
n³ when D exceeds n.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import cho_factor, cho_solve

from sampler.optimise.blocks import Array, Split
from sampler.optimise.gram import Gram
from sampler.optimise.rows import RowPool, separate

TO_BOUNDARY = 0.99
"""Share of the way to the nearest bound that a step goes."""
CENTRING = 0.3
"""Largest share of the present complementarity that a step aims at."""
MOST_OWED = 3.0
"""When the residuals are worth more than this many times the complementarity, the latter waits for them."""
FLOOR = 1e-13
"""Weights, slacks and multipliers stay above this, so that ratios of them stay finite."""
JITTER = 1e-14
"""Share of the mean diagonal lent to a Hessian so that Cholesky's method takes it; it only turns a step by so little."""
MOST_STEPS = 80
MOST_IDLE = 10
"""Steps without a better bound or a smaller complementarity after which rounding is all that is left."""


@dataclass(frozen=True, slots=True)
class Point:
    """An iterate: weights (n,) of the sites, duals (L,) of the rows that are tight there, rule duals (S,), and the rows."""

    weights: Array
    duals: Array
    rule_duals: Array
    rows: RowPool


@dataclass(frozen=True, slots=True)
class Restricted:
    """The program on some of the sites and limits.

    `split`: all blocks, whose `prior` here includes the sites that are fixed in. `sites` (n,) may be chosen freely;
    `limits` (L,). `sides` (S, n): rules as sides @ w ≥ level (S,).
    """

    split: Split
    sites: NDArray[np.int64]
    limits: NDArray[np.int64]
    cost: Array
    sides: Array
    level: Array

    def matrices(self, rows: list[Array], weights: Array) -> list[Array]:
        """M_b(w) of each block."""
        found = []
        for block, part in zip(self.split.blocks, rows, strict=True):
            flat = part.reshape(-1, block.q)
            found.append(block.prior + (flat * np.repeat(weights, part.shape[1])[:, None]).T @ flat)
        return found


@dataclass(frozen=True, slots=True)
class _Coordinates:
    """What the Hessian is written over: the entries of each M_b and the rules, D + S in number, or the weights themselves.

    `features` F (n, K): how a change of the weights moves the coordinates, Fᵀdw.
    """

    program: Restricted
    rows: list[Array]
    packed: bool
    features: Array

    @classmethod
    def of(cls, program: Restricted, rows: list[Array]) -> _Coordinates:
        """Packed entries when they are fewer than the sites."""
        n, wide = len(program.cost), sum(block.q * (block.q + 1) // 2 for block in program.split.blocks)
        if wide > n:
            return cls(program, rows, False, np.eye(n))
        return cls(program, rows, True, np.concatenate(
            [Gram(program.split, program.sites).of(np.arange(n)), program.sides.T], axis=1))

    def gradients(self, pool: RowPool) -> Array:
        """The gradient of each limit and rule, (L + S, K)."""
        if not self.packed:
            return np.concatenate([pool.coefficients(self.program.sites), self.program.sides])
        rules = len(self.program.level)
        total = np.zeros((len(pool) + rules, self.features.shape[1]))
        total[len(pool):, total.shape[1] - rules:] = np.eye(rules)
        at = 0
        for block, z, row in zip(pool.split.blocks, pool.pieces, pool.row, strict=True):
            i, j, factor = _pairs(block.q)
            np.add.at(total[:, at:at + len(i)], row, (z[i] * z[j]).T * factor)
            at += len(i)
        return total

    def hessian(self, pool: RowPool, matrices: list[Array], gradients: Array, y: Array, variance: Array) -> Array:
        """−Σ_l y_l ∇²(1/v_l): X ↦ 2 tr(X M⁻¹ X Z) less 2 Σ y_l v_l (z_lᵀX z_l)², positive semidefinite, (K, K)."""
        limits = len(pool)
        total = -(gradients[:limits].T * (2.0 * y[:limits] * variance)) @ gradients[:limits]
        at = 0
        for matrix, rows, quadratic in zip(matrices, self.rows, pool.quadratic(y[:limits]), strict=True):
            inverse = np.asarray(np.linalg.inv(matrix), np.float64)
            if self.packed:
                size = len(matrix) * (len(matrix) + 1) // 2
                total[at:at + size, at:at + size] += _curvature(inverse, quadratic)
                at += size
                continue
            for one in np.moveaxis(rows, 1, 0):
                for other in np.moveaxis(rows, 1, 0):
                    total += 2.0 * (one @ inverse @ other.T) * (one @ quadratic @ other.T)
        return np.asarray(total)


def _pairs(q: int) -> tuple[NDArray[np.int64], NDArray[np.int64], Array]:
    """Index pairs i ≤ j of a symmetric matrix, packed as in gram.py, and how often each entry occurs in the matrix."""
    i, j = np.triu_indices(q)
    return i, j, np.where(i == j, 1.0, 2.0)


def _curvature(inverse: Array, quadratic: Array) -> Array:
    """The matrix of X ↦ 2 tr(X M⁻¹ X Z) over packed symmetric X."""
    i, j, factor = _pairs(len(inverse))
    p, z = inverse, quadratic
    total = p[np.ix_(i, i)] * z[np.ix_(j, j)] + p[np.ix_(i, j)] * z[np.ix_(j, i)]
    total += p[np.ix_(j, i)] * z[np.ix_(i, j)] + p[np.ix_(j, j)] * z[np.ix_(i, i)]
    return np.asarray(0.5 * total * np.outer(factor, factor))


@dataclass(frozen=True, slots=True)
class _Iterate:
    """Weights w, slacks of the rows, their duals y, and duals x of w ≥ 0 and t of w ≤ 1; also a change of all of these."""

    w: Array
    slack: Array
    y: Array
    x: Array
    t: Array

    def products(self) -> tuple[Array, Array, Array]:
        """What complementarity drives to zero."""
        return self.y * self.slack, self.x * self.w, self.t * (1.0 - self.w)

    def mean(self) -> float:
        return float(np.concatenate(self.products()).mean())

    def reach(self, step: _Iterate) -> tuple[float, float]:
        """The longest primal and dual steps, at most 1, that keep everything positive."""
        return (min(_length(self.w, step.w), _length(1.0 - self.w, -step.w), _length(self.slack, step.slack)),
                min(_length(self.y, step.y), _length(self.x, step.x), _length(self.t, step.t)))

    def moved(self, step: _Iterate, primal: float, dual: float) -> _Iterate:
        return _Iterate(np.clip(self.w + primal * step.w, FLOOR, 1.0 - FLOOR),
                        *(np.maximum(value + length * change, FLOOR) for value, change, length in (
                            (self.slack, step.slack, primal), (self.y, step.y, dual), (self.x, step.x, dual),
                            (self.t, step.t, dual))))


def _length(value: Array, move: Array) -> float:
    falling = move < 0
    return float(min(1.0, (value[falling] / -move[falling]).min(initial=1.0)))


@dataclass(frozen=True, slots=True)
class _Tangent:
    """The program at an iterate: features F (n, K); gradients V (L + S, K) of the rows and the Hessian of the limits over
    these coordinates, but for the part that the y/slack of the rows add; residuals of rows and of stationarity."""

    features: Array
    vectors: Array
    hessian: Array
    primal: Array
    dual: Array


class _Newton:
    """The Newton equations at an iterate, factorised by way of a matrix of the size of the features.

    `stiff`: the rows nearest to their limits. What they change by is an unknown of its own, because near the optimum it is
    too small a difference of large numbers to be had from dw.
    """

    def __init__(self, at: _Iterate, tangent: _Tangent) -> None:
        """diag + F H Fᵀ with H = CCᵀ: the inner matrix I + CᵀFᵀdiag⁻¹FC has no eigenvalue below 1."""
        self.at, self.tangent = at, tangent
        features, vectors = tangent.features, tangent.vectors
        self.weight = at.y / at.slack
        self.stiff = np.argsort(-self.weight, kind="stable")[:vectors.shape[1]]
        loose = self.weight.copy()
        loose[self.stiff] = 0.0
        self.root = np.concatenate([_root(tangent.hessian + (vectors.T * loose) @ vectors),
                                    vectors[self.stiff].T * np.sqrt(self.weight[self.stiff])], axis=1)
        self.diagonal = at.x / at.w + at.t / (1.0 - at.w)
        inner = self.root.T @ (features.T @ (features / self.diagonal[:, None])) @ self.root
        inner[np.diag_indices_from(inner)] += 1.0
        self.factor = cho_factor(inner, check_finite=False)

    def step(self, rs: Array, rx: Array, rt: Array) -> _Iterate:
        """The step that changes the products ys, xw and t(1−w) by rs, rx and rt, and takes the residuals away."""
        at, tangent = self.at, self.tangent
        features, vectors = tangent.features, tangent.vectors
        pull = (rs - at.y * tangent.primal) / at.slack
        first = (-tangent.dual + rx / at.w - rt / (1.0 - at.w) + features @ (vectors.T @ pull)) / self.diagonal
        inside = cho_solve(self.factor, self.root.T @ (features.T @ first), check_finite=False)
        dw = first - (features @ (self.root @ inside)) / self.diagonal
        change = vectors @ (features.T @ dw)
        change[self.stiff] = inside[len(inside) - len(self.stiff):] / np.sqrt(self.weight[self.stiff])
        return _Iterate(dw, change + tangent.primal, pull - self.weight * change, (rx - at.x * dw) / at.w,
                        (rt + at.t * dw) / (1.0 - at.w))


def _root(matrix: Array) -> Array:
    """C with CCᵀ = a positive semidefinite matrix, up to rounding."""
    with_jitter = matrix + JITTER * np.trace(matrix) / len(matrix) * np.eye(len(matrix))
    try:
        return np.asarray(np.linalg.cholesky(with_jitter), np.float64)
    except np.linalg.LinAlgError:
        values, turn = np.linalg.eigh(matrix)
        return np.asarray(turn * np.sqrt(np.maximum(values, 0.0)), np.float64)


def solve(program: Restricted, weights: Array, *, tolerance: float, stop: Callable[[], bool]) -> Point:
    """The optimum to a relative gap of `tolerance`, or the best iterate when `stop` or rounding ended it.

    `weights` (n,) strictly between 0 and 1, to start from.
    """
    split, cost = program.split, program.cost
    rows = [block.rows[program.sites] for block in split.blocks]
    over = _Coordinates.of(program, rows)
    matrices = program.matrices(rows, weights)
    pool, variance = separate(split, matrices, program.limits)
    slack = np.maximum(_covered(program, variance, weights), 1e-3)
    gradients = over.gradients(pool)[:len(pool)]
    mu = float(cost.sum() / max((over.features @ (gradients.T @ (1.0 / slack[:len(pool)]))).sum(), FLOOR))
    at = _Iterate(weights, slack, mu / slack, mu / weights, mu / (1.0 - weights))
    best, best_bound = Point(weights, at.y[:len(pool)], at.y[len(pool):], pool), -np.inf
    least, idle = np.inf, 0
    for _ in range(MOST_STEPS):
        vectors = over.gradients(pool)
        primal, price = _covered(program, variance, at.w) - at.slack, over.features @ (vectors.T @ at.y)
        income = float(np.append(pool.right_hand_side, program.level) @ at.y)
        scale, bound = best_scale(income, cost, price)
        idle = 0 if bound > best_bound or at.mean() < least else idle + 1
        if at.mean() < least:
            least, best = at.mean(), replace(best, weights=at.w)
        if bound > best_bound:
            best_bound, best = bound, Point(best.weights, scale * at.y[:len(pool)], scale * at.y[len(pool):], pool)
        value = float(cost @ at.w)
        if (value - bound <= tolerance * value and np.abs(primal).max() <= tolerance) or idle > MOST_IDLE or stop():
            break
        try:
            newton = _Newton(at, _Tangent(over.features, vectors, over.hessian(pool, matrices, vectors, at.y, variance),
                                          primal, cost - price - at.x + at.t))
        except np.linalg.LinAlgError:  # the end of double precision; the best iterate stands
            break
        now, mean = at.products(), at.mean()
        guess = newton.step(*(-product for product in now))
        owed = float(at.y @ np.abs(primal) + at.w @ np.abs(newton.tangent.dual))
        aim = (at.moved(guess, *at.reach(guess)).mean() / mean) ** 3 if owed < MOST_OWED * sum(map(np.sum, now)) else 1.0
        target = mean * min(CENTRING, aim)
        step = newton.step(target - now[0] - guess.y * guess.slack, target - now[1] - guess.x * guess.w,
                           target - now[2] + guess.t * guess.w)
        at = at.moved(step, *(TO_BOUNDARY * length for length in at.reach(step)))
        matrices = program.matrices(rows, at.w)
        pool, variance = separate(split, matrices, program.limits)
    return best


def _covered(program: Restricted, variance: Array, weights: Array) -> Array:
    """How far each limit's 1/v is above 1, and each rule above its level."""
    return np.append(1.0 / variance - 1.0, program.sides @ weights - program.level)


def best_scale(income: float, cost: Array, price: Array) -> tuple[float, float]:
    """The factor f ≥ 0 on all duals that makes f·income + Σ min(0, cost − f·price) largest, and that value.

    Any f is valid, so duals that overpay a little still give nearly the whole bound. The sum is concave and piecewise
    linear in f, with a kink at cost/price of each site.
    """
    paid = np.flatnonzero(price > 0)
    kink = cost[paid] / price[paid]
    order = np.argsort(kink)
    spent = np.append(0.0, np.cumsum(price[paid[order]]))
    if income <= 0:
        factor = 0.0
    elif income > spent[-1]:  # more than every site together can pay: no set will do, and the bound says so
        factor = max(1.0, 2.0 * float(cost.sum()) / (income - spent[-1]))
    else:
        factor = float(kink[order[np.searchsorted(spent, income) - 1]])
    return factor, factor * income + float(np.minimum(0.0, cost - factor * price).sum())
