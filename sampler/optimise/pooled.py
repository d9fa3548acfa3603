"""The cheapest sites when every cell has terms of its own: patterns of cells instead of fractions of sites.

A linear program over patterns (see `patterns.py`) bounds from below, with rows generated where its mean over patterns misses
a limit; its columns are priced among all patterns. From above, cells change patterns while a smooth worst ratio falls.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass, replace

import highspy
import numpy as np

from sampler.optimise.arrow import Arrow
from sampler.optimise.blocks import Array
from sampler.optimise.patterns import NO_ROWS, Patterns, Rows, bound, covered, eliminated, enumerated, values
from sampler.optimise.pool import Indices
from sampler.optimise.problem import SiteProblem
from sampler.optimise.solver import quiet_highs

MOST_PATTERNS = 20_000
"""Patterns of one cell tried while larger ones are enumerated."""
ENTERING = 4
NEW_ROWS = 60
VIOLATED = 1.0 + 1e-6
SLACK_PRICE = 1e3
MOST_ROUNDS = 300


@dataclass(frozen=True, slots=True)
class PooledBound:
    """`bound` on the cost, by `rows` with duals `y` and, per cell, all patterns of up to `most` sites beside the required
    ones. `rule_duals` (rules,): positive for the lower count (the last is max_sites when there is one)."""

    bound: float
    rows: Rows
    y: Array
    rule_duals: Array
    most: Indices


@dataclass(slots=True)
class Pooled:
    """The arrow of a problem with its cells' patterns; see `pooled`."""

    problem: SiteProblem
    shape: Arrow
    patterns: list[Patterns]

    def best_bound(self, seconds: float, stop: Callable[[], bool] | None = None, goal: float = np.inf
                   ) -> tuple[PooledBound, list[Array]]:
        """The bound, and weights of each cell's patterns near the optimum; ends early once the bound exceeds `goal`."""
        return _Master(self, seconds, stop, goal).run()


def pooled(problem: SiteProblem, shape: Arrow) -> Pooled:
    """Enumerates the patterns of every cell: all of few sites, of many those a little larger than the least that will do."""
    whole = [eliminated(cell, (~problem.forbidden[cell.sites]).astype(float)[None], shape.p).schur[0] for cell in shape.cells]
    total = shape.prior + sum(whole)
    patterns = []
    for cell, own in zip(shape.cells, whole, strict=True):
        patterns.append(enumerated(cell, shape.p, problem.cost[cell.sites], problem.required[cell.sites],
                                   problem.forbidden[cell.sites], MOST_PATTERNS, total - own))
    return Pooled(problem, shape, patterns)


class _Master:
    """The linear program: columns are patterns, rows their cells' choices, the rules, and limits at vectors z."""

    def __init__(self, question: Pooled, seconds: float, stop: Callable[[], bool] | None, goal: float) -> None:
        self.question, self.shape, self.patterns = question, question.shape, question.patterns
        self.until, self.stop, self.goal = time.monotonic() + seconds, stop, goal
        problem = question.problem
        self.members = [np.isin(np.arange(problem.n), members).astype(float) for members in problem.rules.members]
        self.lower, self.upper = list(problem.rules.lower), list(problem.rules.upper)
        if problem.max_sites is not None:
            self.members.append(np.ones(problem.n))
            self.lower.append(0.0)
            self.upper.append(float(problem.max_sites))
        self.rows = replace(NO_ROWS, z=np.zeros((0, self.shape.p)))
        self.solver = quiet_highs()
        self.columns: list[tuple[int, int]] = []
        self.held = [np.zeros(len(each.cost), bool) for each in self.patterns]
        cells, rules = len(self.patterns), len(self.members)
        nothing, none = np.zeros(0, np.int32), np.zeros(0)
        for _ in range(cells):
            self.solver.addRow(1.0, 1.0, 0, nothing, none)
        for low, high in zip(self.lower, self.upper, strict=True):
            self.solver.addRow(low, high, 0, nothing, none)
        for row in range(cells, cells + rules):
            for sign in (1.0, -1.0):
                self.solver.addCol(SLACK_PRICE, 0.0, np.inf, 1, np.array([row], np.int32), np.array([sign]))
        self.slacks = 2 * rules
        self.first_cut = cells + rules

    def run(self) -> tuple[PooledBound, list[Array]]:
        rules = np.zeros(len(self.members))
        value = bound(self.shape, self.patterns, self.rows, np.zeros(0), self.question.problem.cost)[0]
        most = np.array([each.most for each in self.patterns])
        best = PooledBound(value, self.rows, np.zeros(0), rules, most)
        weights = [np.zeros(len(each.cost)) for each in self.patterns]
        if not all(len(each.cost) for each in self.patterns) or best.bound > self.goal:
            return best, weights
        for number, each in enumerate(self.patterns):
            trace = np.trace(each.form.schur, axis1=1, axis2=2)
            self._add(number, np.lexsort((-trace, each.cost))[:ENTERING])
            self._add(number, np.array([int(np.argmax(each.inside.sum(axis=1)))]))
        for _ in range(MOST_ROUNDS):
            self.solver.run()
            if self.solver.getModelStatus() != highspy.HighsModelStatus.kOptimal:
                break
            solution = self.solver.getSolution()
            x, dual = np.array(solution.col_value), np.array(solution.row_dual)
            cells = len(self.patterns)
            y, rules = np.maximum(-dual[self.first_cut:], 0.0), dual[cells:self.first_cut]
            rules = np.where(np.isfinite(np.where(rules > 0, self.lower, self.upper)), rules, 0.0)
            price = self.question.problem.cost.copy()
            earned = 0.0
            for members, nu, low, high in zip(self.members, rules, self.lower, self.upper, strict=True):
                count = low if nu > 0 else high
                if np.isfinite(count):
                    price -= nu * members
                    earned += float(nu * count)
            value, minima = bound(self.shape, self.patterns, self.rows, y, price)
            if value + earned > best.bound:
                best = PooledBound(value + earned, self.rows, y, rules, most)
            weights = self._weights(x)
            objective = float(self.solver.getInfo().objective_function_value)
            if best.bound > self.goal or time.monotonic() > self.until or (self.stop is not None and self.stop()):
                break
            entered = self._price(y, price, dual[:cells], minima)
            fresh = self._violated(weights)
            if not entered and not len(fresh.cell):
                break
            if objective - best.bound < 1e-6 * objective and not len(fresh.cell):
                break
            self._cut(fresh)
        return best, weights

    def _weights(self, x: Array) -> list[Array]:
        weights = [np.zeros(len(each.cost)) for each in self.patterns]
        for at, (number, pattern) in enumerate(self.columns):
            weights[number][pattern] = max(x[self.slacks + at], 0.0)
        return [each / max(each.sum(), 1e-12) for each in weights]

    def _add(self, number: int, index: Indices) -> None:
        """Columns for these patterns of a cell."""
        index = index[~self.held[number][index]]
        self.held[number][index] = True
        each = self.patterns[number]
        mine = self.rows.cell == number
        form = each.form.take(index)
        at = np.concatenate([np.array([number]), np.arange(len(self.patterns), self.first_cut + len(self.rows.cell))])
        if not len(index):
            return
        counts = np.array([each.inside[index] @ members[each.cell.sites] for members in self.members]).reshape(-1, len(index))
        cut = -((self.rows.z @ form.schur) * self.rows.z).sum(axis=2)
        cut[:, mine] += covered(form, each.cell.columns, self.rows.limit[mine], self.rows.z[mine])
        entries = np.concatenate([np.ones((1, len(index))), counts, cut.T])
        for column, pattern in enumerate(index):
            self.solver.addCol(float(each.cost[pattern]), 0.0, np.inf, len(at), at.astype(np.int32), entries[:, column])
            self.columns.append((number, int(pattern)))

    def _price(self, y: Array, price: Array, convexity: Array, minima: list[float]) -> int:
        """Columns whose cost and value are below what their cell pays; how many came."""
        quadratic, came = (self.rows.z.T * y) @ self.rows.z, 0
        for number, each in enumerate(self.patterns):
            if minima[number] > convexity[number] - 1e-7:
                continue
            mine = self.rows.cell == number
            cost = each.inside @ price[each.cell.sites] + values(each.form, each.cell.columns, self.rows.limit[mine],
                                                                  self.rows.z[mine], y[mine], quadratic)
            cost[self.held[number]] = np.inf
            index = np.argsort(cost, kind="stable")[:ENTERING]
            index = index[cost[index] < convexity[number] - 1e-7]
            self._add(number, index)
            came += len(index)
        return came

    def _violated(self, weights: list[Array]) -> Rows:
        """Rows at the limits that the mean over patterns misses most."""
        schur, told = self.shape.prior.copy(), []
        for each, weight in zip(self.patterns, weights, strict=True):
            used = np.flatnonzero(weight > 1e-12)
            form = each.form.take(used)
            schur += np.tensordot(weight[used], form.schur, axes=1)
            l_all, q = form.l_and_q(each.cell.columns)
            told.append((weight[used] @ l_all, np.tensordot(weight[used], q, axes=1)))
        told.append((np.zeros(len(self.shape.limits)), self.shape.columns.T))
        found: list[tuple[float, int, int, Array]] = []
        for number, (l_mean, q) in enumerate(told):
            if not len(l_mean):
                continue
            z = np.linalg.solve(schur, q.T).T
            variance = l_mean + (q * z).sum(axis=1)
            for limit in np.argsort(-variance, kind="stable")[:2]:
                if variance[limit] > VIOLATED:
                    found.append((float(variance[limit]), number if number < len(self.patterns) else -1, int(limit), z[limit]))
        found.sort(key=lambda item: -item[0])
        found = found[:NEW_ROWS]
        return Rows(np.array([item[3] for item in found]).reshape(-1, self.shape.p),
                    np.array([item[1] for item in found], np.int64), np.array([item[2] for item in found], np.int64))

    def _cut(self, fresh: Rows) -> None:
        """Σ_A x_A (…) ≤ 1 + zᵀP₀z (less 2c·z for a limit on the panel's terms alone)."""
        entries = np.zeros((len(fresh.cell), len(self.columns)))
        by_cell: dict[int, list[int]] = {}
        for at, (number, _) in enumerate(self.columns):
            by_cell.setdefault(number, []).append(at)
        for number, held in by_cell.items():
            each = self.patterns[number]
            form = each.form.take(np.array([self.columns[one][1] for one in held]))
            part = -((fresh.z @ form.schur) * fresh.z).sum(axis=2)
            mine = fresh.cell == number
            if mine.any():
                part[:, mine] += covered(form, each.cell.columns, fresh.limit[mine], fresh.z[mine])
            entries[:, held] = part.T
        right = 1.0 + ((fresh.z @ self.shape.prior) * fresh.z).sum(axis=1)
        alone = fresh.cell == -1
        right[alone] -= 2.0 * (fresh.z[alone] * self.shape.columns[:, fresh.limit[alone]].T).sum(axis=1)
        columns = np.arange(self.slacks, self.slacks + len(self.columns), dtype=np.int32)
        for row, most in zip(entries, right, strict=True):
            self.solver.addRow(-np.inf, float(most), len(columns), columns, row)
        self.rows = self.rows.join(fresh)
