"""The linear program of a tree node, kept warm in HiGHS: the largest t with every row's Σᵢ wᵢaᵢ + zᵀP₀z ≥ t.

Count rows are elastic, each with its own two slack columns at a price, so that the program always has a solution: what
prunes a node is the bound recomputed from the multipliers, never the solver's word that there is none.
"""

from __future__ import annotations

from dataclasses import dataclass

import highspy
import numpy as np
from numpy.typing import NDArray

from sampler.optimise.solver import quiet_highs

Array = NDArray[np.float64]
Indices = NDArray[np.int64]

LARGEST_T = 4.0
"""t is capped while the rows do not yet bound it."""
ELASTIC_PRICE = 50.0
"""What breaking a count row by one site costs, in t; any price gives a valid bound, a small one a weaker bound."""
TRIAL_STEPS = 15
MOST_STEPS = 2_147_483_647
CLOSED_T = 0.99
"""A trial ends once t is below this: the child would be closed at once."""


@dataclass(frozen=True, slots=True)
class Solution:
    """`t`; weights of the program's sites; multipliers of covering rows, of the budget and of the count rows."""

    t: float
    w: Array
    y: Array
    budget: float
    counts: Array


class NodeProgram:
    """Columns: t, then two slack columns per count row and one column per site, in the order they came.

    `sites`: the candidates that have a column. Rows: the budget Σ cost·w ≤ `budget`, count rows, covering rows.
    """

    def __init__(self, budget: float) -> None:
        self.solver = quiet_highs()
        self.solver.setOptionValue("presolve", "off")
        self.solver.setOptionValue("simplex_scale_strategy", 0)  # coefficients are of order one already
        nothing, none = np.zeros(0, np.int32), np.zeros(0)
        self.solver.addCol(-1.0, 0.0, LARGEST_T, 0, nothing, none)
        self.solver.addCol(ELASTIC_PRICE, 0.0, np.inf, 0, nothing, none)
        self.solver.addRow(-np.inf, budget, 1, np.array([1], np.int32), np.array([-1.0]))
        self.columns = 2
        self.site_column: list[int] = []
        self.sites: list[int] = []
        self.position: dict[int, int] = {}
        self.cover_row: list[int] = []
        self.count_row: list[int] = []
        self.rows = 1

    def add_sites(self, sites: Indices, cost: Array, coefficients: Array, in_count: Array) -> None:
        """New sites with their coefficients in the covering rows (rows, s) and membership in the count rows (c, s)."""
        entries = np.concatenate([cost[None, :], in_count, coefficients])
        at = np.array([0, *self.count_row, *self.cover_row], np.int32)
        kept = entries != 0.0
        start = np.concatenate([[0], np.cumsum(kept.sum(axis=0))[:-1]]).astype(np.int32)
        row = np.broadcast_to(at[:, None], entries.shape).T[kept.T]
        size = len(sites)
        self.solver.addCols(size, np.zeros(size), np.zeros(size), np.ones(size), len(row), start,
                            np.ascontiguousarray(row, np.int32), np.ascontiguousarray(entries.T[kept.T]))
        for site in sites:
            self.position[int(site)] = len(self.sites)
            self.sites.append(int(site))
            self.site_column.append(self.columns)
            self.columns += 1

    def add_cover(self, coefficients: Array, prior: float) -> None:
        """A covering row Σ a w − t ≥ −prior over the program's sites, (sites,)."""
        at = np.array([0, *self.site_column], np.int32)
        self.solver.addRow(-prior, np.inf, len(at), at, np.concatenate([[-1.0], coefficients]))
        self.cover_row.append(self.rows)
        self.rows += 1

    def add_count(self, member: NDArray[np.bool_]) -> None:
        """A count row over the program's sites, (sites,); without bounds until `set_counts`."""
        nothing, none = np.zeros(0, np.int32), np.zeros(0)
        for _ in range(2):
            self.solver.addCol(ELASTIC_PRICE, 0.0, np.inf, 0, nothing, none)
        held = np.array(self.site_column, np.int32)[member]
        at = np.concatenate([np.array([self.columns, self.columns + 1], np.int32), held])
        self.solver.addRow(-np.inf, np.inf, len(at), at, np.concatenate([[1.0, -1.0], np.ones(len(held))]))
        self.columns += 2
        self.count_row.append(self.rows)
        self.rows += 1

    def use_cover(self, index: int, prior: float, use: bool) -> None:
        """Lets a covering row count, or not."""
        self.solver.changeRowBounds(self.cover_row[index], -prior if use else -np.inf, np.inf)

    def cover_slack(self, priors: list[float]) -> Array:
        """By how much each covering row exceeds t at the last optimum."""
        return np.array(self.solver.getSolution().row_value)[self.cover_row] + np.array(priors)

    def set_bounds(self, lower: NDArray, upper: NDArray) -> None:
        """Bounds of the program's sites, (sites,)."""
        at = np.array(self.site_column, np.int32)
        self.solver.changeColsBounds(len(at), at, lower.astype(float), upper.astype(float))

    def set_counts(self, lower: Array, upper: Array) -> None:
        """Bounds of all count rows, (counts,)."""
        for row, low, high in zip(self.count_row, lower, upper, strict=True):
            self.solver.changeRowBounds(row, float(low), float(high))

    def solve(self) -> Solution | None:
        """The optimum, or None when the solver did not report one."""
        self.solver.run()
        if self.solver.getModelStatus() != highspy.HighsModelStatus.kOptimal:
            self.solver.clearSolver()
            self.solver.run()
            if self.solver.getModelStatus() != highspy.HighsModelStatus.kOptimal:
                return None
        solution = self.solver.getSolution()
        value, dual = np.array(solution.col_value), np.array(solution.row_dual)
        return Solution(self.t, value[self.site_column], np.maximum(dual[self.cover_row], 0.0), max(-dual[0], 0.0),
                        -dual[self.count_row])

    @property
    def t(self) -> float:
        """t as the last run left it."""
        return -float(self.solver.getInfo().objective_function_value)

    def trial(self, member: NDArray[np.bool_], at_most: int) -> tuple[float, float]:
        """Estimates of t with at most, and with more than, `at_most` of the member sites; the program stays as it was.

        A few dual simplex steps give an upper bound of each optimum, near enough to choose by.
        """
        before = self.solver.getBasis()
        held = np.array(self.site_column, np.int32)[member]
        self.solver.addRow(-np.inf, at_most, len(held), held, np.ones(len(held)))
        start = self.solver.getBasis()
        self.solver.setOptionValue("simplex_iteration_limit", TRIAL_STEPS)
        self.solver.setOptionValue("objective_bound", -CLOSED_T)
        values = []
        for low, high in ((-np.inf, at_most), (at_most + 1.0, np.inf)):
            self.solver.changeRowBounds(self.rows, low, high)
            self.solver.setBasis(start)
            self.solver.run()
            nothing = self.solver.getModelStatus() == highspy.HighsModelStatus.kInfeasible
            values.append(0.0 if nothing else self.t)
        self.solver.setOptionValue("simplex_iteration_limit", MOST_STEPS)
        self.solver.setOptionValue("objective_bound", np.inf)
        self.solver.deleteRows(1, np.array([self.rows], np.int32))
        self.solver.setBasis(before)
        return values[0], values[1]
